"""Rays: lengths and amplitudes from a point to every element of the panel, and from point to point.

Free space between two points at distance d attenuates the amplitude by λ/(4πd) (ITU-R P.525). Walls mirror the
point (image sources), scatterers are bistatic: amplitude λ √σ / ((4π)^{3/2} d₁ d₂) for a radar cross-section σ.
An element of area A collects √(A F / 4π) / d₁ of the field and radiates with power gain G F towards the receiver,
where F = cos^q θ is its power pattern and G = 2(q + 1) its gain; the product of both hops is the far-field formula
of Tang et al., IEEE Trans. Wireless Commun. 20(1), 2021 (from memory), with every distance taken on its own, so
that near-field curvature is kept. Walls are endless planes; polarisation and blocked reflections are left out.
"""

import cmath
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from tracker.simulation.motion import Track, Vector

LIGHT_MPS = 299_792_458.0

Hop = Literal["in", "out", "direct"]
"""in: mast to panel; out: panel to terminal; direct: mast to terminal."""

ALL_HOPS: tuple[Hop, ...] = ("in", "out", "direct")


@dataclass(frozen=True, slots=True)
class PanelConfig:
    """The panel: where it stands, how it is turned, how its elements are laid out and radiate.

    Parameters
    ----------
    columns, rows : int
        Element i is column i // rows, row i % rows; columns run to the right seen from the front, rows upwards.
    centre : tuple of 3 floats
        m.
    facing : tuple of 3 floats
        Direction of the front; any length, not along `up`.
    up : tuple of 3 floats
        Direction that the rows climb, as far as it is not along `facing`.
    spacing_wavelengths : float
        Spacing of elements in both directions; an element's area is its square.
    spacing_m : float or None
        The same in m; overrides `spacing_wavelengths` when given.
    pattern_exponent : float
        q of the power pattern cos^q θ.
    """

    columns: int
    rows: int
    centre: Vector
    facing: Vector
    up: Vector = (0.0, 0.0, 1.0)
    spacing_wavelengths: float = 0.5
    spacing_m: float | None = None
    pattern_exponent: float = 2.0

    @property
    def elements(self) -> int:
        """N."""
        return self.columns * self.rows


@dataclass(frozen=True, slots=True)
class Wall:
    """An endless plane that mirrors: the ground, a row of containers.

    Parameters
    ----------
    point, normal : tuple of 3 floats
        A point on it, m, and its normal, any length.
    loss_db : float
        Loss of amplitude on reflection.
    phase_rad : float
        Phase on reflection.
    hops : tuple of {"in", "out", "direct"}
        The hops that have this reflection.
    """

    point: Vector
    normal: Vector
    loss_db: float = 6.0
    phase_rad: float = np.pi
    hops: tuple[Hop, ...] = ALL_HOPS

    def mirror(self, points: NDArray[np.float64]) -> NDArray[np.float64]:
        """Image of points, shape (B, 3), behind the plane."""
        normal = _unit(self.normal)
        height = (points - np.asarray(self.point)) @ normal
        image: NDArray[np.float64] = points - 2 * height[:, None] * normal
        return image


@dataclass(frozen=True, slots=True)
class Scatterer:
    """A point that scatters alike in all directions: a crane leg, a lamp post, another vehicle.

    Parameters
    ----------
    track : Track
        Where it is.
    cross_section_m2 : float
        Bistatic radar cross-section.
    phase_rad : float
        Phase on scattering.
    hops : tuple of {"in", "out", "direct"}
        The hops that have this detour.
    """

    track: Track
    cross_section_m2: float
    phase_rad: float = 0.0
    hops: tuple[Hop, ...] = ALL_HOPS


Reflector = Wall | Scatterer


@dataclass(frozen=True, slots=True, eq=False)
class Source:
    """A point that a hop's waves seem to come from.

    Parameters
    ----------
    position : ndarray, shape (B, 3)
        The end of the hop itself, its image, or a scatterer, m.
    detour_m : ndarray, shape (B, 1)
        Way already gone when the wave leaves `position`, m.
    factor : ndarray of complex128, shape (B, 1)
        Amplitude of the wave there, to be divided by the distance to the target.
    """

    position: NDArray[np.float64]
    detour_m: NDArray[np.float64]
    factor: NDArray[np.complex128]


def sources(
    end: NDArray[np.float64], t_s: NDArray[np.float64], reflectors: Sequence[Reflector], hop: Hop
) -> Iterator[Source]:
    """Give the point itself, then its image in every wall and every scatterer of the hop.

    Parameters
    ----------
    end : ndarray, shape (B, 3)
        Mast or terminal, m.
    t_s : ndarray, shape (B,)
        Times, s.
    reflectors : sequence of Wall or Scatterer
    hop : {"in", "out", "direct"}
    """
    none = np.zeros((end.shape[0], 1))
    whole = np.ones((end.shape[0], 1), dtype=np.complex128)
    yield Source(end, none, whole)
    for reflector in reflectors:
        if hop not in reflector.hops:
            continue
        turn = cmath.exp(1j * reflector.phase_rad)
        if isinstance(reflector, Wall):
            yield Source(reflector.mirror(end), none, whole * (turn * 10 ** (-reflector.loss_db / 20)))
        else:
            place = reflector.track.at(t_s)
            detour_m = np.linalg.norm(place - end, axis=1, keepdims=True)
            scattered = np.sqrt(reflector.cross_section_m2 / (4 * np.pi)) / detour_m
            yield Source(place, detour_m, whole * turn * scattered)


class Panel:
    """The panel as seen from points in space, in its own axes (columns, rows, front).

    Parameters
    ----------
    config : PanelConfig
    wavelength_m : float

    Raises
    ------
    ValueError
        When the panel has no element, or `facing` is along `up`.
    """

    def __init__(self, config: PanelConfig, wavelength_m: float) -> None:
        if config.columns < 1 or config.rows < 1:
            raise ValueError(
                f"panel of {config.columns} columns and {config.rows} rows: at least one of each is needed"
            )
        self.columns, self.rows, self.elements = config.columns, config.rows, config.elements
        self.exponent = config.pattern_exponent
        self.spacing_m = config.spacing_m or config.spacing_wavelengths * wavelength_m
        self.wavelength_m = wavelength_m
        self.centre = np.asarray(config.centre, dtype=np.float64)
        front = _unit(config.facing)
        across = np.cross(np.asarray(config.up, dtype=np.float64), front)
        if np.linalg.norm(across) < 1e-9:
            raise ValueError("panel: facing lies along up, which leaves its columns without a direction")
        across /= np.linalg.norm(across)
        self.axes = np.stack([across, np.cross(front, across), front])

    @cached_property
    def column_m(self) -> NDArray[np.float64]:
        """Offsets of the columns from the centre, m, shape (columns,)."""
        return _spread(self.columns, self.spacing_m)

    @cached_property
    def row_m(self) -> NDArray[np.float64]:
        """Offsets of the rows from the centre, m, shape (rows,)."""
        return _spread(self.rows, self.spacing_m)

    def positions(self) -> NDArray[np.float64]:
        """Element positions, m, shape (N, 3)."""
        across, up, _ = self.axes
        grid = self.column_m[:, None, None] * across + self.row_m[None, :, None] * up
        positions: NDArray[np.float64] = self.centre + grid.reshape(self.elements, 3)
        return positions

    def distances(self, points: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Distance of points to every element, and their height over the panel's plane.

        Parameters
        ----------
        points : ndarray, shape (B, 3)
            m.

        Returns
        -------
        distance : ndarray, shape (B, N)
            m.
        height : ndarray, shape (B, 1)
            m; below zero behind the panel.
        """
        local = (points - self.centre) @ self.axes.T
        # In the panel's own axes the squared distance is a sum of a term of the column and a term of the row.
        over_columns = (local[:, :1] - self.column_m) ** 2 + local[:, 2:] ** 2
        over_rows = (local[:, 1:2] - self.row_m) ** 2
        squared = over_columns[:, :, None] + over_rows[:, None, :]
        return np.sqrt(squared).reshape(points.shape[0], self.elements), local[:, 2:]

    def amplitude(
        self, distance: NDArray[np.float64], height: NDArray[np.float64], hop: Literal["in", "out"]
    ) -> NDArray[np.float64]:
        """Amplitude over one hop, pattern included, phase left out.

        Parameters
        ----------
        distance : ndarray, shape (B, N)
        height : ndarray, shape (B, 1)
        hop : {"in", "out"}

        Returns
        -------
        ndarray, shape (B, N)
            Zero behind the panel.
        """
        if hop == "in":
            scale = self.spacing_m / np.sqrt(4 * np.pi)
        else:
            scale = np.sqrt(2 * (self.exponent + 1)) * self.wavelength_m / (4 * np.pi)
        # √(cos^q θ) / d with cos θ = height / d
        half = self.exponent / 2
        tilt = np.where(height > 0, np.maximum(height, 0.0) ** half, 0.0)
        result: NDArray[np.float64] = scale * tilt * distance ** -(1 + half)
        return result


def _spread(count: int, spacing_m: float) -> NDArray[np.float64]:
    return np.linspace(-(count - 1) / 2, (count - 1) / 2, count) * spacing_m


def _unit(vector: Vector) -> NDArray[np.float64]:
    array = np.asarray(vector, dtype=np.float64)
    length = np.linalg.norm(array)
    if length == 0:
        raise ValueError("a direction of length zero")
    unit: NDArray[np.float64] = array / length
    return unit
