"""What is done about a change, by its kind.

============  =================================================================================================
kind          action
============  =================================================================================================
motion        forget faster: half of what was known counts for nothing
channel       reacquire: nearly all that was known counts for nothing
timing        reacquire
basis         fall back to elements: columns that do not hold the surface are given up; else reacquire
unclear       reacquire
direct-path   renew direct path: that alone is learned anew, from the frames since it changed
elements      renew elements: those alone are learned anew
phase         turn: the estimate from before is turned by what was found
gain          amplify: the estimate from before grows or shrinks by what was found
mismatch      leave out frames: back to the estimate from before, until frames fit it again, for a sweep at most
noise         none: the noise estimate follows by itself
interference  none: it counts as noise
============  =================================================================================================
"""

from ..estimation.estimator import Estimator
from .changes import Verdict

# Share of the way back to the prior that P goes.
LOOSEN, REACQUIRE = 0.5, 0.9
# Actions that leave the estimate as good as it was: the tracker need not call itself reacquiring.
HARMLESS = ("none", "turn", "amplify")


def react(estimator: Estimator, verdict: Verdict) -> str:
    """Do what the kind of change calls for, and say what it was."""
    kind = verdict.kind
    if kind in ("noise", "interference"):
        return "none"
    if kind == "direct-path":
        estimator.renew_direct(verdict.frames)
        return "renew direct path"
    if kind == "elements":
        if estimator.renew(verdict.elements):
            return "renew elements"
        estimator.loosen(LOOSEN)
        return "forget faster"
    if kind in ("phase", "gain") and verdict.mend is not None:
        estimator.mend(*verdict.mend)
        return "turn" if kind == "phase" else "amplify"
    if kind == "mismatch":
        estimator.roll_back()
        estimator.leave_out(estimator.ready_after)
        return "leave out frames"
    if kind == "basis" and estimator.fall_back(verdict.frames):
        return "fall back to elements"
    if kind == "motion":
        estimator.loosen(LOOSEN)
        return "forget faster"
    estimator.loosen(REACQUIRE)
    return "reacquire"
