"""Colours of the terminal views.

Nobody knows whether a terminal is dark or light, so each colour has the luminance (0.18) whose contrast is the same,
4.5 to 1, against black and against white. Colour never carries a meaning alone: a word or a shape says the same.
"""

FILL = "#14828c"  # measured quantities, and the +1 state on the panel
GOOD = "#2c8543"
CAUTION = "#a56812"
BAD = "#d23f53"
QUIET = "#71767f"  # labels, axes, what is less important

COLOURS = (FILL, GOOD, CAUTION, BAD, QUIET)
