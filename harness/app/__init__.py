"""Wiring: the one place that knows everyone."""
