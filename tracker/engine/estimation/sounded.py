"""What frames sound, in the terms of whoever asks: as regressors, or as rows of a sweep."""

from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .aperture import ApertureBasis


class Sounded:
    """Patterns of some frames.

    Parameters
    ----------
    patterns : ndarray of uint8, shape (B, ceil(N/8))
        Packed.
    aperture : ApertureBasis
    rows : ndarray of int, shape (B,), or None
        Row of the sweep that each frame sounds, −1 outside of it; None where no sweep is sounded.
    """

    def __init__(
        self, patterns: NDArray[np.uint8], aperture: ApertureBasis, rows: NDArray[np.intp] | None = None
    ) -> None:
        self.patterns = patterns
        self.rows = rows
        self._aperture = aperture

    @cached_property
    def regressors(self) -> NDArray[Any]:
        """Regressors z, shape (B, r + 1): worked out when first asked for, for a sweep has no need of them."""
        return self._aperture.regressors_of_bits(self.patterns)

    @property
    def single_regressors(self) -> NDArray[Any]:
        """The same in single precision, good enough for statistics."""
        if "regressors" not in self.__dict__:
            return self._aperture.single_regressors_of_bits(self.patterns)
        return self.regressors.astype(np.complex64 if self._aperture.is_complex else np.float32)

    def part(self, frames: slice | NDArray[Any]) -> "Sounded":
        """Take some of the frames."""
        part = Sounded(self.patterns[frames], self._aperture, self.rows[frames] if self.rows is not None else None)
        if "regressors" in self.__dict__:
            part.__dict__["regressors"] = self.regressors[frames]
        return part
