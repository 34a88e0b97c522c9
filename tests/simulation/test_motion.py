"""Tracks: where things are when."""

import numpy as np
import pytest

from tracker.simulation.motion import Still, Straight, Sway, Waypoints


def test_straight_track_waits_then_moves_at_its_speed() -> None:
    """Distance is speed times the time since setting off."""
    track = Straight(start=(1.0, 2.0, 3.0), velocity=(3.0, 0.0, -4.0), from_s=2.0)
    np.testing.assert_allclose(track.at(np.array([0.0, 2.0, 3.0])), [[1, 2, 3], [1, 2, 3], [4, 2, -1]])
    went = np.diff(track.at(np.array([0.0, 1.0, 4.0, 5.0])), axis=0)
    np.testing.assert_allclose(np.linalg.norm(went, axis=1), [0.0, 10.0, 5.0])


def test_waypoints_take_each_leg_at_its_own_speed_and_stay_at_the_end() -> None:
    """4 m at 2 m/s and 3 m at 0.5 m/s take 2 s and 6 s."""
    track = Waypoints(((0, 0, 0), (4, 0, 0), (4, 3, 0)), (2.0, 0.5), from_s=1.0)
    expected: list[list[float]] = [[0, 0, 0], [2, 0, 0], [4, 0, 0], [4, 1.5, 0], [4, 3, 0], [4, 3, 0]]
    np.testing.assert_allclose(track.at(np.array([0.5, 2.0, 3.0, 6.0, 9.0, 99.0])), expected, atol=1e-12)


def test_waypoints_around_repeat_with_the_time_of_a_lap() -> None:
    """A closed way is in the same place a lap later."""
    track = Waypoints(((0, 0, 0), (4, 0, 0), (4, 3, 0)), 1.0, around=True)
    times = np.array([0.3, 5.0, 11.9])
    np.testing.assert_allclose(track.at(times + 12.0), track.at(times), atol=1e-12)
    np.testing.assert_allclose(track.at(np.array([9.5])), [[2.0, 1.5, 0.0]])


@pytest.mark.parametrize(
    ("points", "speed"),
    [
        (((0, 0, 0),), 1.0),
        (((0, 0, 0), (0, 0, 0)), 1.0),
        (((0, 0, 0), (1, 0, 0)), 0.0),
        (((0, 0, 0), (1, 0, 0)), (1, 2)),
    ],
)
def test_waypoints_that_make_no_way_are_refused(points: tuple[tuple[float, float, float], ...], speed: float) -> None:
    """One point, a leg of no length, no speed, or a speed too many: none of them is a way."""
    with pytest.raises(ValueError, match="waypoints"):
        Waypoints(points, speed)


def test_sway_stays_within_its_amplitude_and_returns() -> None:
    """Excursions are sinusoids: the amplitude after a quarter period, back after a whole one."""
    track = Sway(Still((5.0, 5.0, 5.0)), amplitude=(0.1, 0.0, 0.02), period_s=(4.0, 1.0, 8.0))
    at = track.at(np.array([0.0, 1.0, 2.0, 8.0]))
    np.testing.assert_allclose(at[:, 0], [5.0, 5.1, 5.0, 5.0], atol=1e-12)
    np.testing.assert_allclose(at[2, 2], 5.02)
