"""The region basis, held against spherical waves written out, Fermat's principle and the space-bandwidth product."""

import cmath
import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import minimize

from tracker.engine.estimation.region import Mirror, Site, region_basis

GROUND = Mirror(point=(0.0, 0.0, 0.0), normal=(0.0, 0.0, 2.0), loss_db=8.0)
YARD = Site(
    columns=8,
    rows=6,
    column_spacing=0.04,
    row_spacing=0.05,
    centre=(38.0, 32.0, 11.0),
    facing=(0.0, -3.0, 0.0),
    up=(0.0, 0.0, 1.0),
    transmitter=(0.0, 0.0, 22.0),
    corners=((57.0, -8.0, 4.0), (59.0, 8.0, 6.0)),
    wavelength=0.08,
)


def test_elements_lie_where_the_panel_has_them() -> None:
    """Element i is column i // rows, row i % rows; from the front columns run to the right, rows upwards."""
    places = YARD.positions()
    assert places.shape == (48, 3)
    np.testing.assert_allclose(places.mean(axis=0), YARD.centre, atol=1e-12)
    # Who stands south of the panel and looks north has the east on the right.
    np.testing.assert_allclose(places[1] - places[0], (0.0, 0.0, 0.05), atol=1e-12)
    np.testing.assert_allclose(places[6] - places[0], (0.04, 0.0, 0.0), atol=1e-12)


def response(site: Site, terminal: tuple[float, float, float]) -> np.ndarray:
    """Element responses by way of the panel, element by element: exp(−2πi (d₁ + d₂) / λ) / (d₁ d₂)."""
    values = []
    for element in site.positions().tolist():
        first, second = math.dist(site.transmitter, element), math.dist(element, terminal)
        values.append(cmath.exp(-2j * math.pi * (first + second) / site.wavelength) / (first * second))
    return np.array(values)


@pytest.mark.parametrize("size", [1, 3, 8])
def test_columns_hold_as_much_of_spherical_waves_as_they_say(size: int) -> None:
    """At random positions of the box the written-out waves lie in the columns as far as `held` says."""
    basis = region_basis(YARD, size)
    assert basis.columns.shape == (48, size)
    np.testing.assert_allclose(basis.columns.conj().T @ basis.columns, np.eye(size), atol=1e-9)
    rng = np.random.default_rng(5)
    low, high = np.array(YARD.corners)
    shares = []
    for _ in range(300):
        x, y, z = rng.uniform(low, high).tolist()
        wave = response(YARD, (x, y, z))
        shares.append(float(np.linalg.norm(basis.columns.conj().T @ wave) ** 2 / np.linalg.norm(wave) ** 2))
    assert basis.held == pytest.approx(np.mean(shares), abs=0.01)
    assert (np.diff(basis.variances) <= 0).all()


def test_a_mirrored_wave_takes_the_shortest_way() -> None:
    """The way by way of the ground is the shortest over all points of it (Fermat; SciPy's minimiser finds it)."""
    site = replace(YARD, mirrors=(GROUND,))
    terminal = (58.0, 1.0, 5.0)
    direct, mirrored = site.waves(np.array([terminal]))[:, 0]
    for number, element in enumerate(site.positions().tolist()):

        def way(ground: np.ndarray, element: list[float] = element) -> float:
            point = (float(ground[0]), float(ground[1]), 0.0)
            return math.dist(terminal, point) + math.dist(point, element)

        shortest = minimize(way, (50.0, 15.0), tol=1e-14).fun
        wanted = cmath.exp(-2j * math.pi * shortest / site.wavelength) / shortest * 10 ** (-8.0 / 20)
        # The minimiser leaves a micrometre or two: 1e-4 rad.
        assert abs(mirrored[number] - wanted) < 1e-3 * abs(wanted)
        distance = math.dist(terminal, element)
        assert direct[number] == pytest.approx(cmath.exp(-2j * math.pi * distance / site.wavelength) / distance)


@pytest.mark.parametrize(("width", "length"), [(1.28, 40.0), (1.28, 80.0), (2.56, 40.0), (2.56, 80.0)])
def test_columns_that_count_are_the_space_bandwidth_product(width: float, length: float) -> None:
    """Between parallel lines of D and W at distance L about D W / (λ L) columns are strong, then they fall off.

    Source: Miller, Applied Optics 39 (2000) 1681: numbers of communication modes (from memory).
    """
    away, wavelength = 200.0, 0.08
    site = replace(
        YARD,
        columns=round(width / 0.04),
        rows=1,
        centre=(0.0, 0.0, 0.0),
        facing=(0.0, -1.0, 0.0),
        transmitter=(0.0, -300.0, 0.0),
        corners=((-length / 2, -away, 0.0), (length / 2, -away, 0.0)),
        wavelength=wavelength,
    )
    product = width * length / (wavelength * away)
    variances = region_basis(site, 32).variances
    strong = np.count_nonzero(variances > 0.5 * variances[0])
    assert abs(strong - product) < 1.0
    faint = int(np.ceil(product)) + 4
    assert (variances[faint:] < 0.02 * variances[0]).all()


def test_a_wall_adds_columns_of_its_own() -> None:
    """What comes by way of a mirror lies outside of the columns for the straight way, and inside those for both."""
    wall = Mirror(point=(72.0, 0.0, 0.0), normal=(-1.0, 0.0, 0.0), loss_db=3.0)
    site = replace(YARD, columns=16, rows=16, row_spacing=0.04)
    mirrored = (
        site.waves(np.array([site.transmitter]))[0, 0]
        * replace(site, mirrors=(wall,)).waves(np.array([[58.0, 0.0, 5.0]]))[1, 0]
    )
    shares = [
        float(np.linalg.norm(basis.columns.conj().T @ mirrored) ** 2 / np.linalg.norm(mirrored) ** 2)
        for basis in (region_basis(site, 8), region_basis(replace(site, mirrors=(wall,)), 16))
    ]
    assert shares[0] < 0.2
    assert shares[1] > 0.99


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"transmitter": (38.0, 60.0, 11.0)}, "the transmitter is behind the panel"),
        ({"corners": ((30.0, 40.0, 0.0), (31.0, 41.0, 1.0))}, "the whole region is behind the panel"),
        ({"facing": (0.0, 0.0, 5.0)}, "facing lies along up"),
        ({"facing": (0.0, 0.0, 0.0)}, "length zero"),
    ],
)
def test_a_site_that_cannot_be_is_refused(changes: dict[str, tuple[float, float, float]], words: str) -> None:
    """No wave reaches a panel from behind, and a panel needs a front."""
    with pytest.raises(ValueError, match=words):
        region_basis(replace(YARD, **changes), 8)  # type: ignore[arg-type]
