"""Clocks, pacing, the shared image, the link process and the soft PLC: the only place that waits."""
