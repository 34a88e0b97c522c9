"""Oscillators that run free: phases of the paths, frequency offset, timing drift, gain steps."""
