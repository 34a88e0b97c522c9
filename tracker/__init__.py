"""Keeps the pattern of a one-bit reflecting surface right while the channel moves."""

__version__ = "0.1.0"
