"""Tests draw the same examples every time: what passed once is not to fail for another reason than a change."""

from hypothesis import settings

settings.register_profile("same every time", derandomize=True, deadline=None)
settings.load_profile("same every time")
