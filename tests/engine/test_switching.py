"""What a refreshed pattern must gain to be worth the switch to it."""

import numpy as np
import pytest

from tracker.engine.publishing.switching import Switching

MS = 1_000_000


def test_the_cost_is_spread_over_the_stay() -> None:
    """Patterns that stay for 10 ms, and 0.1 ms for a switch: it costs a hundredth of the rate."""
    switching = Switching(0.0, 1e-4)
    for at in range(0, 200, 10):
        switching.published(at * MS)
    assert switching.worth(3.0, 190 * MS) == pytest.approx(0.03)


def test_a_link_that_has_calmed_down_asks_for_less() -> None:
    """The longer the pattern in use has stayed, the longer the next is expected to."""
    switching = Switching(0.001, 1e-4)
    for at in range(0, 200, 10):
        switching.published(at * MS)
    worths = [switching.worth(3.0, (190 + stay) * MS) for stay in (10, 20, 100, 1000)]
    assert worths == pytest.approx([0.03, 0.015, 0.003, 0.001])


def test_first_patterns_go_out_freely() -> None:
    """Until it is known how long patterns stay, the least gain alone decides."""
    switching = Switching(0.02, 1e-3)
    assert switching.worth(3.0, 0) == 0.02
    switching.published(5 * MS)
    assert switching.worth(3.0, 6 * MS) == 0.02


def test_the_balance_loses_least() -> None:
    """A pattern loses a·t of its rate after t: the best stay is √(2 c / a) (renewal reward: minimise a T / 2 + c / T).

    Publishing when the rule says so loses at most a tenth more than the best stay does (the rule, g T = c, stays
    √(c / a): (1/2 + 1) / √2 of the least).
    """
    slope, rate, takes_s = 2.0, 3.0, 2e-5  # bit/s/Hz a second, bit/s/Hz, s
    switching = Switching(0.0, takes_s)
    now, since, lost, stays = 0, 0, 0.0, []
    for now in range(0, 2000 * MS, MS // 50):
        gain = slope * (now - since) / 1e9
        if gain >= switching.worth(rate, now) and now > since:
            switching.published(now)
            stays.append((now - since) / 1e9)
            lost += slope * stays[-1] ** 2 / 2 + rate * takes_s
            since = now
    stay = np.mean(stays[len(stays) // 2 :])
    least = np.sqrt(2 * slope * rate * takes_s)
    assert stay == pytest.approx(np.sqrt(rate * takes_s / slope), rel=0.05)
    assert lost / (now / 1e9) < 1.1 * least


def test_snapshot_goes_on() -> None:
    """A restored one says the same."""
    one, other = Switching(0.01, 1e-3), Switching(0.01, 1e-3)
    for at in (0, 7, 31):
        one.published(at * MS)
    other.load(one.snapshot())
    assert other.worth(2.0, 40 * MS) == one.worth(2.0, 40 * MS) > 0.01
