"""One line of the benchmark table.

A benchmark is a module in this folder with ``rows(quick: bool) -> Iterator[Row]``; ``tools/bench`` finds it by itself.
It imports this class as ``from benchmarks.row import Row``.
"""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Row:
    """One measured value beside its target.

    Parameters
    ----------
    name : str
        What was measured, for example "burst of 64, N = 1024, against this core's matrix multiply".
    value : float
    unit : str
        Unit of `value`, for example "ms", "frames/s", "%" or "of peak"; empty for a pure ratio.
    target : str
        What it is held against, as a person reads it, for example "≥ 0.5"; empty when there is none.
    met : bool or None
        Whether the target is met; None when there is none.
    note : str
        Where the target comes from, spread, caveats.
    curve, x : str, float or None
        The curve that the value is a point of, and where on it; empty and None when it is none.
    """

    name: str
    value: float
    unit: str
    target: str = ""
    met: bool | None = None
    note: str = ""
    curve: str = ""
    x: float | None = None
