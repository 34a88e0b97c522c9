"""The table [site]: what stands in the file arrives in the engine, and each mistake gives one line."""

from pathlib import Path

import numpy as np
import pytest

from tracker.assembly import configure
from tracker.engine.estimation.aperture import Columns
from tracker.engine.estimation.region import Mirror, Site, region_basis
from tracker.settings import SettingsError, parse

GOOD = """\
[link]
name = "yard"
[panel]
columns = 6
rows = 4
spacing_mm = 40
row_spacing_mm = 50.0
[tones]
fft = 64
first = 16
count = 32
spacing_khz = 625.0
[aperture]
basis = "region"
size = 5
[site]
carrier_ghz = 3.75
panel_m = [38, 32.0, 11]
facing = [0.1, -1, 0]
transmitter_m = [0, 0, 22]
region_m = [[57.5, -8, 4.5], [58.5, 8, 5.5]]
[[site.mirrors]]
point_m = [0, 0, 0]
normal = [0, 0, 1]
loss_db = 8
"""


def test_the_site_arrives_in_the_engine() -> None:
    """Lengths in m and mm, frequency in GHz: the basis is that of the same site written out in m."""
    aperture = configure(parse(GOOD), Path()).aperture
    site = Site(
        columns=6,
        rows=4,
        column_spacing=0.04,
        row_spacing=0.05,
        centre=(38.0, 32.0, 11.0),
        facing=(0.1, -1.0, 0.0),
        up=(0.0, 0.0, 1.0),
        transmitter=(0.0, 0.0, 22.0),
        corners=((57.5, -8.0, 4.5), (58.5, 8.0, 5.5)),
        wavelength=0.299792458 / 3.75,  # the speed of light, exact by the definition of the metre
        mirrors=(Mirror((0.0, 0.0, 0.0), (0.0, 0.0, 1.0), 8.0),),
    )
    wanted = region_basis(site, 5)
    assert isinstance(aperture, Columns)
    assert (aperture.elements, aperture.size) == (24, 5)
    assert aperture.held == pytest.approx(wanted.held, rel=1e-9)
    columns = aperture.surface(np.eye(5, dtype=np.complex128))
    np.testing.assert_allclose(np.abs(columns.conj().T @ wanted.columns), np.eye(5), atol=1e-6)


def test_rows_are_as_far_apart_as_columns_unless_told() -> None:
    """Without `row_spacing_mm` the elements lie on a square grid."""
    square = configure(parse(GOOD.replace("row_spacing_mm = 50.0\n", "")), Path()).aperture
    told = configure(parse(GOOD.replace("row_spacing_mm = 50.0", "row_spacing_mm = 40.0")), Path()).aperture
    other = configure(parse(GOOD), Path()).aperture
    one = np.eye(5, 1, dtype=np.complex128)
    np.testing.assert_array_equal(square.surface(one), told.surface(one))
    assert not np.allclose(square.surface(one), other.surface(one))


@pytest.mark.parametrize(
    ("good", "bad", "words"),
    [
        ("spacing_mm = 40\n", "", "needs to know where everything is: add panel.spacing_mm"),
        (GOOD[GOOD.index("[site]") :], "", "needs to know where everything is: add the table [site]"),
        ("carrier_ghz", "carier_ghz", "site.carier_ghz: unknown key; did you mean carrier_ghz?"),
        ("carrier_ghz = 3.75\n", "", "site.carrier_ghz: this key is missing"),
        ("carrier_ghz = 3.75", "carrier_ghz = 0", "site.carrier_ghz: found 0, allowed is: greater than 0"),
        ("[38, 32.0, 11]", "[38, 32.0]", "site.panel_m: found [38, 32.0], allowed is: at least 3 items"),
        ("[38, 32.0, 11]", "[38, 32.0, 11, 0]", "site.panel_m: found [38, 32.0, 11, 0], allowed is: at most 3 items"),
        ("[38, 32.0, 11]", '[38, "a", 11]', "site.panel_m.1: found 'a', allowed is: number"),
        ("[38, 32.0, 11]", "[38, nan, 11]", "site.panel_m.1: found nan, allowed is: a finite number"),
        ("point_m", "pont_m", "site.mirrors.0.pont_m: unknown key; did you mean point_m?"),
        ("loss_db = 8", "loss_db = -1", "site.mirrors.0.loss_db: found -1, allowed is: greater than or equal to 0"),
        ("[0.1, -1, 0]", "[0, 0, 2]", "site: facing lies along up"),
        ("transmitter_m = [0, 0, 22]", "transmitter_m = [0, 90, 22]", "site: the transmitter is behind the panel"),
        ("normal = [0, 0, 1]", "normal = [0, 0, 0]", "site: a direction of length zero"),
    ],
)
def test_a_mistake_is_one_line(good: str, bad: str, words: str) -> None:
    """The line says which key, what was found, what is allowed."""
    assert good in GOOD
    with pytest.raises(SettingsError) as caught:
        configure(parse(GOOD.replace(good, bad, 1), "yard.toml"), Path())
    assert words in str(caught.value)
    assert "\n" not in str(caught.value)
