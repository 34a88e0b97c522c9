"""The budget of a search: counted from the burst's arrival, bounded in steps, and never nothing."""

import time

import pytest

from tracker.service.deadline import LEAST, RESERVE, Deadline, Reserve


class Clock:
    """A clock that stands still until it is moved."""

    def __init__(self) -> None:
        self.now_ns = 5_000_000_000

    def __call__(self) -> int:
        return self.now_ns


@pytest.fixture
def clock(monkeypatch: pytest.MonkeyPatch) -> Clock:
    made = Clock()
    monkeypatch.setattr(time, "monotonic_ns", made)
    return made


def test_a_search_ends_in_time_for_what_follows(clock: Clock) -> None:
    """Of 10 ms from arrival, a reserve is kept for sending; 3 ms of estimating count."""
    deadline = Deadline(clock.now_ns, 10.0, 400, Reserve(10.0))
    clock.now_ns += 3_000_000
    assert not deadline.spent(0)
    clock.now_ns += round((10.0 * (1.0 - RESERVE) - 3.0) * 1e6) - 1
    assert not deadline.spent(1)
    clock.now_ns += 1
    assert deadline.spent(2)


def test_a_search_ends_after_the_most_steps(clock: Clock) -> None:
    """Whatever the clock says."""
    deadline = Deadline(clock.now_ns, 10.0, 3, Reserve(10.0))
    assert [deadline.spent(steps) for steps in range(4)] == [False, False, False, True]


def test_a_service_that_is_behind_searches_all_the_same(clock: Clock) -> None:
    """When estimating took longer than the whole budget, a search still gets a share of it, and no more."""
    deadline = Deadline(clock.now_ns - 80_000_000, 10.0, 400, Reserve(10.0))
    assert not deadline.spent(0)
    clock.now_ns += round(10.0 * LEAST * 1e6) - 1
    assert not deadline.spent(1)
    clock.now_ns += 1
    assert deadline.spent(2)


def test_more_is_kept_where_more_is_needed(clock: Clock) -> None:
    """What follows the search takes 7 of 10 ms: soon the search ends 3 ms after arrival, whole and not sooner."""
    reserve = Reserve(10.0)
    for _ in range(100):
        reserve.observe(7_000_000)
    deadline = Deadline(clock.now_ns, 10.0, 400, reserve)
    assert not deadline.spent(0)
    clock.now_ns += 2_999_000
    assert not deadline.spent(1)
    clock.now_ns += 2_000
    assert deadline.spent(2)


def test_a_stall_takes_little_of_the_search(clock: Clock) -> None:
    """One stall of a second moves what is kept by less than a fifth of the budget, and it is forgotten again."""
    reserve = Reserve(10.0)
    usual = reserve.kept_ns
    assert usual == round(10e6 * RESERVE)
    reserve.observe(1_000_000_000)
    assert usual < reserve.kept_ns < usual + 2_000_000
    for _ in range(1000):
        reserve.observe(1_000_000)
    assert reserve.kept_ns == pytest.approx(usual, rel=1e-3)


def test_the_end_of_a_search_is_known(clock: Clock) -> None:
    """A deadline tells when it was asked last; without a search it was not."""
    deadline = Deadline(clock.now_ns, 10.0, 400, Reserve(10.0))
    assert deadline.asked_ns is None
    deadline.spent(0)
    clock.now_ns += 12_345
    deadline.spent(1)
    assert deadline.asked_ns == clock.now_ns
