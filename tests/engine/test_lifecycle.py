"""The lifecycle is what its table says."""

from tracker.engine.events import Mode
from tracker.engine.lifecycle import TRANSITIONS, Happening, after


def test_the_usual_course() -> None:
    """Acquire, track, lose the channel, track again, be held and released."""
    course = [
        (Happening.READY, Mode.TRACKING),
        (Happening.CHANGE, Mode.REACQUIRING),
        (Happening.READY, Mode.TRACKING),
        (Happening.HOLD, Mode.HELD),
        (Happening.RESUME, Mode.REACQUIRING),
        (Happening.SILENCE, Mode.REACQUIRING),
        (Happening.RELEARN, Mode.ACQUIRING),
    ]
    mode = Mode.ACQUIRING
    for happening, expected in course:
        mode = after(mode, happening)
        assert mode is expected


def test_held_only_ends_by_the_operator() -> None:
    """While held neither readiness nor change moves the tracker."""
    for happening in set(Happening) - {Happening.RESUME, Happening.RELEARN}:
        assert after(Mode.HELD, happening) is Mode.HELD


def test_every_mode_can_be_left_and_reached() -> None:
    """No mode is a dead end, none is out of reach."""
    assert {mode for mode, _ in TRANSITIONS} == set(Mode)
    assert set(TRANSITIONS.values()) == set(Mode)
