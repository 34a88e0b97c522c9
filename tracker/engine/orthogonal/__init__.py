"""Sweeps of orthogonal patterns: noticing them, and least squares over them at next to no cost."""
