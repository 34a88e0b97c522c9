"""Faults of elements: their names, and a map of them over the panel.

========  ====================================================  ===============================================
fault     what is known                                         what the optimizer makes of it
========  ====================================================  ===============================================
unmoved   does not answer to its bit                            left out, held at +1
stuck+    the same, and stays at +1                             left out, held at +1
stuck-    the same, and stays at −1                             left out, held at −1
weak      answers with a share of what neighbours predict       nothing: the estimate already holds that response
swapped   answers to the bit of another, which answers to its   nothing: the estimate is by bit, not by place
========  ====================================================  ===============================================
"""

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

FAULTS = ("", "unmoved", "stuck+", "stuck-", "weak", "swapped")
"""Names of the codes 0 to 5; code 0 follows its bit, code −1 is not judged."""
NOT_JUDGED, FINE, UNMOVED, STUCK_PLUS, STUCK_MINUS, WEAK, SWAPPED = range(-1, 6)
SILENT = (UNMOVED, STUCK_PLUS, STUCK_MINUS)
"""Codes of elements that do not answer."""
MARKS = {FINE: ".", UNMOVED: "0", STUCK_PLUS: "+", STUCK_MINUS: "-", WEAK: "w", SWAPPED: "x"}
"""How each code is drawn on a map."""
SURE = 0.93
"""Probability of not following from which an element is called faulty."""


@dataclass(frozen=True, slots=True)
class Finding:
    """A fault found.

    Parameters
    ----------
    element : int
    fault : str
        One of `FAULTS`.
    confidence : float
        Probability of it.
    doubt : float
        Probability that the element does not follow its bit, whatever it does.
    """

    element: int
    fault: str
    confidence: float
    doubt: float


def fault_map(faults: Iterable[tuple[int, str, float]], columns: int, rows: int) -> NDArray[np.int8]:
    """Lay faults out over the panel.

    Parameters
    ----------
    faults : iterable of (int, str, float)
        Element, fault, confidence; element i is column i // rows, row i % rows.
    columns, rows : int
        Of the panel.

    Returns
    -------
    ndarray of int8, shape (columns, rows)
        Codes, see `FAULTS`; elements beyond the panel and faults of unknown name are left out.
    """
    codes = np.zeros(columns * rows, dtype=np.int8)
    for element, fault, _ in faults:
        if 0 <= element < codes.size and fault in FAULTS:
            codes[element] = FAULTS.index(fault)
    return codes.reshape(columns, rows)


def map_text(codes: NDArray[np.integer[Any]]) -> str:
    """Draw a map of codes, shape (columns, rows), one character an element, row 0 on top.

    ``.`` follows, ``0`` unmoved, ``+`` and ``-`` stuck, ``w`` weak, ``x`` swapped.
    """
    return "\n".join("".join(MARKS[int(code)] for code in line) for line in codes.T)
