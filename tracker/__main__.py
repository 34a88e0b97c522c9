"""`python -m tracker` is `ris-tracker`."""

import sys

from tracker.cli import entry

sys.exit(entry())
