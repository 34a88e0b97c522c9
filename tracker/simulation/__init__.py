"""The stand-in testbed: a link with a one-bit surface, computed ray by ray, speaking like a real controller."""
