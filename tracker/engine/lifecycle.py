"""Where the tracker stands, as one table: what it is doing, what can happen, where that leads.

=============  ==========  ============  ====================================================================
in             on          goes to       meaning
=============  ==========  ============  ====================================================================
acquiring      ready       tracking      as many frames as unknowns are in, and the innovations fit
tracking       change      reacquiring   the channel is not what it was; the estimate is loosened
tracking       silence     reacquiring   nothing heard for longer than the channel lasts
reacquiring    ready       tracking
any but held   hold        held          the operator wants the pattern left alone; estimating goes on
held           resume      reacquiring   it stays there only until it is ready again
any            relearn     acquiring     the operator wants the estimate thrown away
=============  ==========  ============  ====================================================================

What is not in the table changes nothing.
"""

from enum import StrEnum

from .events import Mode


class Happening(StrEnum):
    """What moves the tracker from one mode to another."""

    READY = "ready"
    CHANGE = "change"
    SILENCE = "silence"
    HOLD = "hold"
    RESUME = "resume"
    RELEARN = "relearn"


TRANSITIONS: dict[tuple[Mode, Happening], Mode] = {
    (Mode.ACQUIRING, Happening.READY): Mode.TRACKING,
    (Mode.TRACKING, Happening.CHANGE): Mode.REACQUIRING,
    (Mode.TRACKING, Happening.SILENCE): Mode.REACQUIRING,
    (Mode.REACQUIRING, Happening.READY): Mode.TRACKING,
    (Mode.ACQUIRING, Happening.HOLD): Mode.HELD,
    (Mode.TRACKING, Happening.HOLD): Mode.HELD,
    (Mode.REACQUIRING, Happening.HOLD): Mode.HELD,
    (Mode.HELD, Happening.RESUME): Mode.REACQUIRING,
    (Mode.ACQUIRING, Happening.RELEARN): Mode.ACQUIRING,
    (Mode.TRACKING, Happening.RELEARN): Mode.ACQUIRING,
    (Mode.REACQUIRING, Happening.RELEARN): Mode.ACQUIRING,
    (Mode.HELD, Happening.RELEARN): Mode.ACQUIRING,
}


def after(mode: Mode, happening: Happening) -> Mode:
    """Return the mode that follows."""
    return TRANSITIONS.get((mode, happening), mode)
