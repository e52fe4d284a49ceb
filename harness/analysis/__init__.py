"""Prediction, metrics and verdicts."""
