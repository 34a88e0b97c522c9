"""The file of a basis: it comes back as it was, plain NumPy and zip tools read it, and damage is always told."""

import io
import zipfile
from dataclasses import fields, replace

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.basis_file import BasisError, LearnedBasis, pack_basis, unpack_basis

ELEMENTS, SIZE = 12, 3


def basis() -> LearnedBasis:
    """A basis of three columns for 4 × 3 elements."""
    rng = np.random.default_rng(6)
    columns = np.linalg.qr(rng.normal(size=(ELEMENTS, SIZE)) + 1j * rng.normal(size=(ELEMENTS, SIZE)))[0]
    return LearnedBasis(
        columns=np.ascontiguousarray(columns),
        variances=np.array([4.0, 2.0, 0.5]),
        eigenvalues=np.array([4.1, 2.1, 0.6, 0.2]),
        noise=0.1,
        panel=(4, 3),
        logs=("früh.mcap", "spät.mcap"),
        sha256=("0" * 64, "f" * 64),
        span_ns=(1_700_000_000_000_000_000, 1_700_000_001_000_000_000),
        frames=28_000,
        settings='[link]\nname = "yard"\n',
        version="0.1.0",
        held=0.96,
        held_deviation=0.01,
        sizes=(1, 2, 4),
        errors=(1.3, 1.2, 1.1),
        followed="elements",
        followed_error=1.4,
    )


def test_what_is_packed_comes_back() -> None:
    """Every field, to the last bit; and the same basis gives the same bytes."""
    packed = pack_basis(basis())
    found = unpack_basis(packed)
    for field in fields(LearnedBasis):
        np.testing.assert_array_equal(getattr(found, field.name), getattr(basis(), field.name))
    assert pack_basis(found) == packed


def test_other_tools_read_it() -> None:
    """It is a zip archive whose members pass their CRC (zipfile), and NumPy loads it without pickle."""
    packed = pack_basis(basis())
    with zipfile.ZipFile(io.BytesIO(packed)) as archive:
        assert archive.testzip() is None
        assert "columns.npy" in archive.namelist()
    with np.load(io.BytesIO(packed), allow_pickle=False) as file:
        np.testing.assert_array_equal(file["columns"], basis().columns)
        assert [str(name) for name in file["logs"]] == ["früh.mcap", "spät.mcap"]


def test_fewer_columns_hold_less() -> None:
    """The share of the energy goes with the variances of the columns kept."""
    assert basis().held_by(3) == pytest.approx(0.96)
    assert basis().held_by(64) == pytest.approx(0.96)
    assert basis().held_by(1) == pytest.approx(0.96 * 4.0 / 6.5)


def test_damage_is_told_or_does_not_matter() -> None:
    """Cut anywhere, or with a byte changed, it gives `BasisError` or the very columns that went in, nothing else."""
    packed = pack_basis(basis())
    rng = np.random.default_rng(7)
    told: list[str] = []
    for place in rng.integers(0, len(packed), 300).tolist():
        for spoilt in (packed[:place], packed[:place] + bytes([packed[place] ^ 0x55]) + packed[place + 1 :]):
            try:
                found = unpack_basis(spoilt)
            except BasisError as error:
                told.append(str(error))
            else:
                np.testing.assert_array_equal(found.columns, basis().columns)
    assert len(told) > 400
    assert not any("\n" in words for words in told)


@pytest.mark.parametrize(
    ("changed", "words"),
    [
        ({"columns": 2.0 * basis().columns}, "not orthonormal"),
        ({"columns": np.full((ELEMENTS, SIZE), np.nan, dtype=np.complex128)}, "not orthonormal"),
        ({"panel": (4, 4)}, r"shape \(12, 3\) for a panel of 16 elements"),
        ({"variances": np.array([1.0, 1.0])}, "lacks a variance above zero for each of its 3 columns"),
        ({"variances": np.array([1.0, 0.0, 1.0])}, "lacks a variance above zero"),
        ({"variances": np.array([1.0, np.inf, 1.0])}, "lacks a variance above zero"),
    ],
)
def test_what_cannot_be_a_basis_is_refused(changed: dict[str, NDArray[np.float64]], words: str) -> None:
    """Columns and variances are checked where the file is read, whoever wrote it."""
    with pytest.raises(BasisError, match=words):
        unpack_basis(pack_basis(replace(basis(), **changed)))  # type: ignore[arg-type]


def test_a_later_format_is_told_apart() -> None:
    """A file of a format to come says so, instead of being called damaged."""
    with np.load(io.BytesIO(pack_basis(basis()))) as file:
        arrays = {name: file[name] for name in file.files} | {"format": np.array(2)}
    later = io.BytesIO()
    np.savez(later, **arrays)
    with pytest.raises(BasisError, match="is of format 2, this program reads 1"):
        unpack_basis(later.getvalue())
