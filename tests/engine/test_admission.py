"""Which bursts are let in."""

import numpy as np
import pytest

from tracker.engine.admission import INSISTED, Admission
from tracker.engine.burst import Burst
from tracker.engine.refusal import Reason, Refused

SKEW_NS = 5_000_000_000
START_NS = 1_700_000_000_000_000_000


def _burst(seq: int, run: int = 7, t_ns: int | None = None) -> Burst:
    at = START_NS + seq * 1_000_000 if t_ns is None else t_ns
    return Burst(
        run=run,
        seq=seq,
        t_ns=at,
        dt_ns=1000,
        elements=8,
        patterns=np.zeros((4, 1), np.uint8),
        response=np.zeros((4, 1, 2), np.complex64),
        keep=np.ones(4, bool),
    )


def _reason(admission: Admission, burst: Burst, arrival_ns: int | None = None) -> Reason:
    with pytest.raises(Refused) as caught:
        admission.admit(burst, burst.t_ns if arrival_ns is None else arrival_ns)
    assert "\n" not in caught.value.detail
    return caught.value.reason


def _admit(admission: Admission, burst: Burst) -> int:
    return admission.admit(burst, burst.t_ns)


def test_order_is_let_in_and_gaps_are_counted() -> None:
    """Bursts in order pass; a jump in seq says how many were lost; a first burst may have any seq."""
    admission = Admission(SKEW_NS)
    assert [_admit(admission, _burst(seq)) for seq in (5, 6, 7, 11, 12)] == [0, 0, 0, 3, 0]


def test_repeats_and_stragglers() -> None:
    """A seq taken before is a duplicate; one that was skipped and comes late is out of order."""
    admission = Admission(SKEW_NS)
    for seq in (0, 1, 3):
        _admit(admission, _burst(seq))
    assert _reason(admission, _burst(1)) is Reason.DUPLICATE
    assert _reason(admission, _burst(2)) is Reason.OUT_OF_ORDER
    assert _admit(admission, _burst(4)) == 0


def test_time_must_rise_within_a_run() -> None:
    """A burst that starts before the last frame of the one before is out of order, whatever its seq."""
    admission = Admission(SKEW_NS)
    _admit(admission, _burst(0))
    assert _reason(admission, _burst(1, t_ns=START_NS + 2999)) is Reason.OUT_OF_ORDER
    assert _admit(admission, _burst(1)) == 0


def test_a_new_run_restarts_seq_and_ends_the_old_one() -> None:
    """After a restart of the controller nothing counts as lost; stragglers of the old run are refused."""
    admission = Admission(SKEW_NS)
    _admit(admission, _burst(90))
    assert _admit(admission, _burst(0, run=8)) == 0
    assert _reason(admission, _burst(91, run=7)) is Reason.OUT_OF_ORDER
    assert _admit(admission, _burst(1, run=8)) == 0


def test_clocks() -> None:
    """Bursts from the far future and the far past are refused, and change nothing."""
    admission = Admission(SKEW_NS)
    assert _reason(admission, _burst(0), START_NS - SKEW_NS - 1_000_000) is Reason.FAR_FUTURE
    assert _reason(admission, _burst(0), START_NS + SKEW_NS + 1_000_000) is Reason.FAR_PAST
    assert _admit(admission, _burst(3)) == 0


def test_snapshot_goes_on() -> None:
    """A restored door knows what the old one knew."""
    admission = Admission(SKEW_NS)
    for seq in (0, 1):
        _admit(admission, _burst(seq))
    copy = Admission(SKEW_NS)
    copy.load(admission.snapshot())
    assert _reason(copy, _burst(1)) is Reason.DUPLICATE
    assert _admit(copy, _burst(4)) == 2


def test_one_stray_burst_does_not_lock_the_controller_out() -> None:
    """A burst of another run, or with a seq far ahead, costs the real controller eight bursts, not its service."""
    admission = Admission(SKEW_NS)
    _admit(admission, _burst(0))
    _admit(admission, _burst(5, run=99, t_ns=START_NS + 500_000))
    for seq in range(1, 1 + INSISTED):
        assert _reason(admission, _burst(seq)) is Reason.OUT_OF_ORDER
    assert [_admit(admission, _burst(seq)) for seq in (9, 10, 12)] == [0, 0, 1]
    _admit(admission, _burst(2**60, t_ns=START_NS + 12_500_000))
    for seq in range(13, 13 + INSISTED):
        assert _reason(admission, _burst(seq)) is Reason.OUT_OF_ORDER
    assert [_admit(admission, _burst(seq)) for seq in (21, 22)] == [0, 0]


def test_old_bursts_do_not_get_in_by_being_many() -> None:
    """Bursts from before, or such that alternate with bursts in order, stay out however many they are."""
    admission = Admission(SKEW_NS)
    for seq in (50, 51, 100):
        _admit(admission, _burst(seq))
    for seq in range(60, 99):
        assert _reason(admission, _burst(seq)) is Reason.OUT_OF_ORDER
    for count in range(2 * INSISTED):
        _admit(admission, _burst(101 + 2 * count))
        late = _burst(60 + count, t_ns=START_NS + (102 + 2 * count) * 1_000_000 - 500_000)
        assert _reason(admission, late) is Reason.OUT_OF_ORDER


def test_what_a_journal_vouches_for_is_let_in() -> None:
    """A burst that was let in live is let in again though the bursts that insisted before it are not in the journal."""
    admission = Admission(SKEW_NS)
    _admit(admission, _burst(0))
    _admit(admission, _burst(5, run=99, t_ns=START_NS + 500_000))
    assert admission.admit(_burst(9), _burst(9).t_ns, vouched=True) == 0
    assert _admit(admission, _burst(10)) == 0
