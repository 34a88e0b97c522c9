"""Measurements of speed and quality; each module here yields rows for the table of `tools/bench`."""
