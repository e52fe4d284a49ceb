"""The run folder: writing it while the run lasts, reading it back, exporting it."""
