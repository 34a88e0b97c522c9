"""The budget of a search: counted from the burst's arrival, bounded in steps, and never nothing."""

import time

import pytest

from tracker.service.deadline import LEAST, RESERVE, Deadline


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
    deadline = Deadline(clock.now_ns, 10.0, 400)
    clock.now_ns += 3_000_000
    assert not deadline.spent(0)
    clock.now_ns += round((10.0 * (1.0 - RESERVE) - 3.0) * 1e6) - 1
    assert not deadline.spent(1)
    clock.now_ns += 1
    assert deadline.spent(2)


def test_a_search_ends_after_the_most_steps(clock: Clock) -> None:
    """Whatever the clock says."""
    deadline = Deadline(clock.now_ns, 10.0, 3)
    assert [deadline.spent(steps) for steps in range(4)] == [False, False, False, True]


def test_a_service_that_is_behind_searches_all_the_same(clock: Clock) -> None:
    """When estimating took longer than the whole budget, a search still gets a share of it, and no more."""
    deadline = Deadline(clock.now_ns - 80_000_000, 10.0, 400)
    assert not deadline.spent(0)
    clock.now_ns += round(10.0 * LEAST * 1e6) - 1
    assert not deadline.spent(1)
    clock.now_ns += 1
    assert deadline.spent(2)
