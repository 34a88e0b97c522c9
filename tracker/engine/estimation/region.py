"""Aperture basis from geometry: the waves between the transmitter and a region where the terminal may be.

From a point at distance d_n from element n a spherical wave arrives as exp(−2πi d_n / λ) / d_n, and by reciprocity it
leaves to a terminal alike: element n contributes the product of both, whatever delays and losses the way has besides.
Planes that mirror (the ground, a wall) give the transmitter and the terminal images, each with a wave of its own
(image sources). Over all positions in the region, with every position counting alike and the waves of one position
taken as uncorrelated, the responses have a correlation matrix whose leading eigenvectors are the basis and whose
eigenvalues are the prior variances.

How many columns count is a property of the aperture: about as many as spots can be told apart in the region, its
space-bandwidth product (Miller, Applied Optics 39, 2000), far fewer than elements.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Vector = tuple[float, float, float]
Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Positions tried at first; they are doubled until the basis holds as much of positions that it has not seen, about.
LEAST_POSITIONS = 256
# Energy that it may hold less of those: at random, two sets of positions differ by a tenth of this.
SETTLED = 1e-2
# Values of the matrix of waves: its memory, 16 bytes each.
MOST_VALUES = 1 << 24
# Columns that hold less than this share of all energy together are left out.
NEGLIGIBLE = 1e-6
# Variance that a column is granted at least, relative to the strongest: geometry is never known to the millimetre.
LEAST_VARIANCE = 1e-4
# Powers of 1 / 1.2207… (the root of x⁴ = x + 1) as steps fill a box evenly without a random source (Roberts, 2018).
STEPS = np.array([1.2207440846057596]) ** -np.arange(1.0, 4.0)


@dataclass(frozen=True, slots=True)
class Mirror:
    """An endless plane that mirrors.

    Parameters
    ----------
    point, normal : tuple of 3 floats
        A point on it, m, and its normal, any length.
    loss_db : float
        Loss on reflection.
    """

    point: Vector
    normal: Vector
    loss_db: float = 6.0

    def image(self, points: Real) -> Real:
        """Images of points (S, 3) behind the plane."""
        normal = _unit(self.normal)
        return np.asarray(points - 2.0 * ((points - np.array(self.point)) @ normal)[:, None] * normal)


@dataclass(frozen=True, slots=True)
class Site:
    """Where everything is; lengths in m.

    Parameters
    ----------
    columns, rows : int
        Of the panel. Element i is column i // rows, row i % rows; seen from the front, columns run to the right and
        rows along `up`.
    column_spacing, row_spacing : float
        From the middle of one to that of the next.
    centre : tuple of 3 floats
        Middle of the panel.
    facing : tuple of 3 floats
        Direction of its front, any length.
    up : tuple of 3 floats
        Direction that the rows climb, as far as it is not along `facing`.
    transmitter : tuple of 3 floats
    corners : pair of tuples of 3 floats
        Two opposite corners of the box, its edges along the axes, that the terminal may be in.
    wavelength : float
    mirrors : tuple of Mirror
    """

    columns: int
    rows: int
    column_spacing: float
    row_spacing: float
    centre: Vector
    facing: Vector
    up: Vector
    transmitter: Vector
    corners: tuple[Vector, Vector]
    wavelength: float
    mirrors: tuple[Mirror, ...] = ()

    def positions(self) -> Real:
        """Positions of the elements, shape (N, 3).

        Raises
        ------
        ValueError
            When `facing` lies along `up`.
        """
        front = _unit(self.facing)
        across = np.cross(np.array(self.up, dtype=np.float64), front)
        if np.linalg.norm(across) < 1e-6 * np.linalg.norm(self.up):
            raise ValueError("facing lies along up, which leaves the columns without a direction")
        across = _unit(across)
        element = np.arange(self.columns * self.rows)
        column = (element // self.rows - (self.columns - 1) / 2) * self.column_spacing
        row = (element % self.rows - (self.rows - 1) / 2) * self.row_spacing
        return np.asarray(np.array(self.centre) + column[:, None] * across + row[:, None] * np.cross(front, across))

    def waves(self, points: Real) -> Complex:
        """Waves from points to the elements, those of their images after them.

        Parameters
        ----------
        points : ndarray, shape (S, 3)

        Returns
        -------
        ndarray of complex, shape (1 + mirrors, S, N)
            Amplitude 1 at 1 m; zero from behind the panel.
        """
        elements = self.positions()
        sources = [(points, 1.0)]
        sources += [(mirror.image(points), 10.0 ** (-mirror.loss_db / 20.0)) for mirror in self.mirrors]
        found = np.empty((len(sources), points.shape[0], elements.shape[0]), dtype=np.complex128)
        for wave, (places, factor) in zip(found, sources, strict=True):
            distance = np.linalg.norm(places[:, None, :] - elements, axis=2)
            before = (places - np.array(self.centre)) @ _unit(self.facing) > 0
            wave[:] = factor * before[:, None] / distance * np.exp((-2j * np.pi / self.wavelength) * distance)
        return found

    def places(self, first: int, count: int) -> Real:
        """Members `first` to `first + count` of an endless sequence that fills the box evenly, shape (count, 3)."""
        low, high = np.array(self.corners, dtype=np.float64)
        member = np.arange(first + 1, first + count + 1)
        return np.asarray(low + (0.5 + member[:, None] * STEPS) % 1.0 * (high - low))


@dataclass(frozen=True, slots=True, eq=False)
class RegionBasis:
    """What the waves of a region span.

    Parameters
    ----------
    columns : ndarray of complex, shape (N, r)
        Orthonormal, the strongest first.
    variances : ndarray, shape (r,)
        Energy in each, the whole region having 1, with a floor.
    held : float
        Share of the energy that the columns hold, at positions other than those that they were worked out from.
    """

    columns: Complex
    variances: Real
    held: float


def region_basis(site: Site, size: int) -> RegionBasis:
    """Work out the columns that hold most of the energy.

    Parameters
    ----------
    site : Site
    size : int
        Columns wanted at most.

    Raises
    ------
    ValueError
        When no wave reaches the front of the panel, or directions make no sense.
    """
    arriving = site.waves(np.array([site.transmitter]))[:, 0]
    if not arriving.any():
        raise ValueError("the transmitter is behind the panel")
    arriving /= np.sqrt(_energy(arriving).sum() / arriving.shape[1])
    most = MOST_VALUES // (arriving.shape[1] * (1 + len(site.mirrors)))
    count = LEAST_POSITIONS
    while True:
        columns, energies = _span(arriving, _leaving(site, 0, count))
        kept = _kept(energies, size)
        columns, seen = columns[:, :kept], float(energies[:kept].sum())
        held = _held(columns, arriving, _leaving(site, count, LEAST_POSITIONS))
        if seen - held < SETTLED or 2 * count > most:
            break
        count *= 2
    return RegionBasis(columns, np.maximum(energies[:kept], LEAST_VARIANCE * energies[0]), held)


def _leaving(site: Site, first: int, count: int) -> Complex:
    """Waves to positions of the region, all those of a position of unit energy in sum, shape (N, waves)."""
    waves = site.waves(site.places(first, count))
    energy = _energy(waves).sum(axis=0)
    if not energy.any():
        raise ValueError("the whole region is behind the panel")
    waves /= np.sqrt(np.where(energy > 0, energy, 1.0))[None, :, None]
    return np.ascontiguousarray(waves.reshape(-1, waves.shape[2]).T)


def _span(arriving: Complex, leaving: Complex) -> tuple[Complex, Real]:
    """Principal directions of all products of an arriving and a leaving wave, and their shares of the energy."""
    # The waves of the region are brought down to what spans them before each is multiplied with each arriving one.
    directions, energies = _principal(leaving)
    strengths = directions * np.sqrt(energies)
    columns, energies = _principal(np.concatenate([wave[:, None] * strengths for wave in arriving], axis=1))
    return columns, energies / energies.sum()


def _principal(waves: Complex) -> tuple[Complex, Real]:
    """Left singular vectors and squared singular values, falling, those that count."""
    wide = waves.shape[1] > waves.shape[0]
    gram = waves @ waves.conj().T if wide else waves.conj().T @ waves
    energies, vectors = np.linalg.eigh(gram)
    energies, vectors = energies[::-1], vectors[:, ::-1]
    # Squaring costs half of the digits: what lies below is rounding.
    count = int(np.count_nonzero(energies > 1e-10 * energies[0]))
    energies, vectors = energies[:count], vectors[:, :count]
    return (vectors if wide else (waves @ vectors) / np.sqrt(energies)), energies


def _kept(energies: Real, size: int) -> int:
    """Columns that count, at most `size`."""
    left = 1.0 - np.cumsum(energies)
    return min(size, int(np.count_nonzero(left > NEGLIGIBLE)) + 1)


def _held(columns: Complex, arriving: Complex, leaving: Complex) -> float:
    products: Iterator[Complex] = (wave[:, None] * leaving for wave in arriving)
    inside = total = 0.0
    for product in products:
        inside += float(_energy(columns.conj().T @ product).sum())
        total += float(_energy(product).sum())
    return inside / total


def _energy(values: Complex) -> Real:
    """Sum of |values|² over the last axis."""
    return np.asarray((values.real**2 + values.imag**2).sum(axis=-1))


def _unit(vector: Vector | Real) -> Real:
    array = np.array(vector, dtype=np.float64)
    length = float(np.linalg.norm(array))
    if length == 0.0:
        raise ValueError("a direction of length zero")
    return array / length
