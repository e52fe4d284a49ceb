"""Frozen data that every part of the harness speaks: rigs, trials, models, points, runs, verdicts."""
