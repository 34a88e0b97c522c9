"""The channel as the optimizer takes it: an estimate in the delay basis, in units of the noise."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, eq=False)
class Channel:
    """An estimate of the channel, in units of each receiver's noise amplitude on a tone.

    On tone k at receiver r, under states s ∈ {−1, +1}^N::

        H[r, k] = Σ_q basis[k, q] · (direct[r, q] + Σ_n s_n surface[n, r, q])

    Any two reflection states of an element, of any phase difference and unequal loss, fit this form: the mean
    of the two goes into `direct`, half their difference into `surface`.

    Parameters
    ----------
    basis : ndarray of complex128, shape (K, Q)
        Delay basis; its columns are orthonormal.
    direct : ndarray of complex128, shape (R, Q)
        What arrives at each receiver whatever the pattern.
    surface : ndarray of complex128, shape (N, R, Q), C-contiguous
        What each element adds in state +1 (and takes away in state −1).

    Raises
    ------
    ValueError
        The shapes do not fit together.
    """

    basis: NDArray[np.complex128]
    direct: NDArray[np.complex128]
    surface: NDArray[np.complex128]

    def __post_init__(self) -> None:
        if self.basis.ndim != 2 or self.direct.ndim != 2 or self.surface.ndim != 3:
            raise ValueError("a channel takes basis (K, Q), direct (R, Q) and surface (N, R, Q)")
        if self.direct.shape != self.surface.shape[1:] or self.direct.shape[1] != self.basis.shape[1]:
            raise ValueError(
                f"basis {self.basis.shape}, direct {self.direct.shape} and surface {self.surface.shape} "
                "do not fit as (K, Q), (R, Q) and (N, R, Q)"
            )

    @property
    def tones(self) -> int:
        """K, pilot tones."""
        return int(self.basis.shape[0])

    @property
    def delays(self) -> int:
        """Q, columns of the delay basis."""
        return int(self.basis.shape[1])

    @property
    def receivers(self) -> int:
        """R, receivers."""
        return int(self.direct.shape[0])

    @property
    def elements(self) -> int:
        """N, elements of the surface."""
        return int(self.surface.shape[0])
