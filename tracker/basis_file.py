"""The file of a learned aperture basis: NumPy's .npz, without pickle, with what it rests on.

========================  ==========================================================================================
name                      what
========================  ==========================================================================================
format                    1
columns                   complex128 (N, r): orthonormal columns, the strongest first
variances                 float64 (r,): variance of each coefficient, free of what noise adds
eigenvalues               float64 (w,): of all columns sought, as the frames showed them, noise included
noise                     float64: what noise adds to each eigenvalue
panel                     int64 (2,): columns and rows of the panel
logs, sha256              str (n,): names of the logs, and the SHA-256 of each
span_ns                   int64 (2,): first and last frame, ns since the Unix epoch
frames                    int64: frames learned from
settings                  str: text of the settings
version                   str: of the program that wrote it
held, held_deviation      float64: share of the surface's energy in held-out frames that the columns hold, its standard
                          deviation; NaN when it could not be told
sizes, errors             int64, float64 (m,): numbers of columns tried, and the mean squared error of predicting
                          held-out frames with each, in units of the noise
followed, followed_error   str, float64: aperture basis that the logs were followed in to learn, and the same with it
========================  ==========================================================================================
"""

import io
import zipfile
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

FORMAT = 1
# Columns of a file are orthonormal to this.
ORTHONORMAL = 1e-6


class BasisError(Exception):
    """The bytes are no basis that can be used; the message says why, for the user."""


@dataclass(frozen=True, slots=True, eq=False)
class LearnedBasis:
    """A learned basis and what it rests on; see the table above."""

    columns: NDArray[np.complex128]
    variances: NDArray[np.float64]
    eigenvalues: NDArray[np.float64]
    noise: float
    panel: tuple[int, int]
    logs: tuple[str, ...]
    sha256: tuple[str, ...]
    span_ns: tuple[int, int]
    frames: int
    settings: str
    version: str
    held: float
    held_deviation: float
    sizes: tuple[int, ...]
    errors: tuple[float, ...]
    followed: str
    followed_error: float

    def held_by(self, size: int) -> float:
        """Share of the energy that the first columns hold."""
        return self.held * float(self.variances[:size].sum() / self.variances.sum())


def pack_basis(basis: LearnedBasis) -> bytes:
    """Write a basis; the same basis gives the same bytes."""
    arrays = {field.name: np.asarray(getattr(basis, field.name)) for field in fields(basis)}
    file = io.BytesIO()
    np.savez(file, allow_pickle=False, format=np.array(FORMAT), **arrays)
    return file.getvalue()


def unpack_basis(data: bytes) -> LearnedBasis:
    """Read a basis.

    Raises
    ------
    BasisError
        When the bytes are not one, or of a later format, or damaged.
    """
    try:
        with np.load(io.BytesIO(data), allow_pickle=False) as file:
            found = {name: file[name] for name in file.files}
        if int(found["format"]) != FORMAT:
            raise BasisError(f"is of format {int(found['format'])}, this program reads {FORMAT}")
        basis = LearnedBasis(
            columns=np.ascontiguousarray(found["columns"], dtype=np.complex128),
            variances=np.array(found["variances"], dtype=np.float64),
            eigenvalues=np.array(found["eigenvalues"], dtype=np.float64),
            noise=float(found["noise"]),
            panel=(int(found["panel"][0]), int(found["panel"][1])),
            logs=tuple(found["logs"].tolist()),
            sha256=tuple(found["sha256"].tolist()),
            span_ns=(int(found["span_ns"][0]), int(found["span_ns"][1])),
            frames=int(found["frames"]),
            settings=str(found["settings"]),
            version=str(found["version"]),
            held=float(found["held"]),
            held_deviation=float(found["held_deviation"]),
            sizes=tuple(found["sizes"].tolist()),
            errors=tuple(found["errors"].tolist()),
            followed=str(found["followed"]),
            followed_error=float(found["followed_error"]),
        )
    except (OSError, ValueError, TypeError, LookupError, EOFError, zipfile.BadZipFile, NotImplementedError) as error:
        raise BasisError(
            f"is not a basis that `ris-tracker learn` wrote, or damaged ({type(error).__name__})"
        ) from None
    _check(basis)
    return basis


def _check(basis: LearnedBasis) -> None:
    elements = basis.panel[0] * basis.panel[1]
    if basis.columns.ndim != 2 or basis.columns.shape[0] != elements or basis.columns.shape[1] > elements:
        raise BasisError(f"has columns of shape {basis.columns.shape} for a panel of {elements} elements")
    size = basis.columns.shape[1]
    if basis.variances.shape != (size,) or not (basis.variances > 0).all() or not np.isfinite(basis.variances).all():
        raise BasisError(f"lacks a variance above zero for each of its {size} columns")
    gram = basis.columns.conj().T @ basis.columns
    if not np.abs(gram - np.eye(size)).max() < ORTHONORMAL:
        raise BasisError("has columns that are not orthonormal")
