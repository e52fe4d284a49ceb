"""Physics of the simulated plant: SI floats in, SI floats out; no clock, no I/O, no logging."""
