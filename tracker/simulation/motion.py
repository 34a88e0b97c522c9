"""Where things are at a time: tracks of the mast, the terminals and moving scatterers."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

Vector = tuple[float, float, float]


class Track(Protocol):
    """Anything that is somewhere at any time."""

    def at(self, t_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Give the position, m, shape (B, 3), at times `t_s`, s, shape (B,)."""


@dataclass(frozen=True, slots=True)
class Still:
    """Stays where it is.

    Parameters
    ----------
    position : tuple of 3 floats
        m.
    """

    position: Vector

    def at(self, t_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Position, m, shape (B, 3)."""
        return np.broadcast_to(np.asarray(self.position, dtype=np.float64), (t_s.size, 3))


@dataclass(frozen=True, slots=True)
class Straight:
    """Moves on a straight line at one speed.

    Parameters
    ----------
    start : tuple of 3 floats
        Position until `from_s`, m.
    velocity : tuple of 3 floats
        m/s.
    from_s : float
        When it sets off, s.
    """

    start: Vector
    velocity: Vector
    from_s: float = 0.0

    def at(self, t_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Position, m, shape (B, 3)."""
        driven_s = np.maximum(t_s - self.from_s, 0.0)
        position: NDArray[np.float64] = np.asarray(self.start) + driven_s[:, None] * np.asarray(self.velocity)
        return position


@dataclass(frozen=True, slots=True)
class Waypoints:
    """Drives from point to point, each leg at its own speed, and stays at the last point or goes round.

    Parameters
    ----------
    points : sequence of 3-tuples
        At least two, neighbours apart, m.
    speed_mps : float or sequence of float
        One speed, or one a leg (as many as points − 1, one more when it goes round), m/s.
    from_s : float
        When it sets off, s.
    around : bool
        Drive from the last point back to the first, and on.

    Raises
    ------
    ValueError
        When points, legs and speeds do not fit together.
    """

    points: Sequence[Vector]
    speed_mps: float | Sequence[float]
    from_s: float = 0.0
    around: bool = False

    def __post_init__(self) -> None:
        stops, arrivals_s = self._timetable()
        if len(stops) < 2 or not np.all(np.diff(arrivals_s) > 0) or not np.all(np.isfinite(arrivals_s)):
            raise ValueError("waypoints: two points or more, neighbours apart, every speed above zero")

    def _timetable(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        stops = np.asarray([*self.points, self.points[0]] if self.around else self.points, dtype=np.float64)
        legs_m = np.linalg.norm(np.diff(stops, axis=0), axis=1)
        speeds = np.atleast_1d(np.asarray(self.speed_mps, dtype=np.float64))
        if speeds.size not in (1, legs_m.size) or not np.all(speeds > 0):
            raise ValueError(f"waypoints: {legs_m.size} legs need one speed above zero, or one each")
        return stops, np.concatenate(([0.0], np.cumsum(legs_m / speeds)))

    def at(self, t_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Position, m, shape (B, 3)."""
        stops, arrivals_s = self._timetable()
        driven_s = np.maximum(t_s - self.from_s, 0.0)
        if self.around:
            driven_s = driven_s % arrivals_s[-1]
        return np.stack([np.interp(driven_s, arrivals_s, stops[:, axis]) for axis in range(3)], axis=1)


@dataclass(frozen=True, slots=True)
class Sway:
    """Sways about another track: a mast in the wind, an idling vehicle.

    Parameters
    ----------
    about : Track
    amplitude : tuple of 3 floats
        Peak excursion along each axis, m.
    period_s : tuple of 3 floats
        Period along each axis, s; periods that differ trace a figure instead of a line.
    """

    about: Track
    amplitude: Vector
    period_s: Vector = (1.0, 1.0, 1.0)

    def at(self, t_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Position, m, shape (B, 3)."""
        angle = 2 * np.pi * t_s[:, None] / np.asarray(self.period_s)
        position: NDArray[np.float64] = self.about.at(t_s) + np.asarray(self.amplitude) * np.sin(angle)
        return position
