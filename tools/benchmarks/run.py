"""Runs the benchmarks of this folder, prints one table, writes the same as JSON, and draws what can be drawn."""

import argparse
import importlib
import json
import pkgutil
import platform
import sys
import time
from collections.abc import Callable, Iterator
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any, cast

import numpy as np
import scipy
import scipy.linalg
from rich import box
from rich.console import Console
from rich.table import Table
from rich.text import Text
from threadpoolctl import threadpool_info, threadpool_limits

FOLDER = Path(__file__).resolve().parent
sys.path.insert(0, str(FOLDER.parent))  # so that benchmarks find each other as `benchmarks.NAME`

from benchmarks.row import Row  # noqa: E402

NOT_BENCHMARKS = {"row", "run"}


@dataclass(slots=True)
class Outcome:
    """What one benchmark gave.

    Parameters
    ----------
    name : str
        Its module.
    rows : list of Row
        What was measured, up to the failure when there was one.
    seconds : float
        How long it took.
    error : str or None
        Why it failed; None when it did not.
    picture : str or None
        The rows as SVG, from benchmarks that have a function ``picture(rows) -> str``.
    """

    name: str
    rows: list[Row] = field(default_factory=list)
    seconds: float = 0.0
    error: str | None = None
    picture: str | None = None


def benchmarks() -> list[str]:
    """List the modules that may be benchmarks, in alphabetical order."""
    names = (module.name for module in pkgutil.iter_modules([str(FOLDER)]))
    return sorted(name for name in names if name not in NOT_BENCHMARKS and not name.startswith("_"))


def measure(name: str, quick: bool, tell: Callable[[str], None]) -> Outcome | None:
    """Run one benchmark; a failure ends this one alone. None when the module is not a benchmark."""
    outcome = Outcome(name)
    begun = time.perf_counter()
    try:
        module = importlib.import_module(f"benchmarks.{name}")
        if not hasattr(module, "rows"):
            return None
        for row in cast("Iterator[Row]", module.rows(quick)):
            outcome.rows.append(row)
            tell(f"{name}: {row.name}: {figure(row.value)} {row.unit}".rstrip())
        if hasattr(module, "picture"):
            outcome.picture = module.picture(outcome.rows)
    except Exception as error:  # noqa: BLE001 - whatever a benchmark raises, the others go on
        outcome.error = f"{type(error).__name__}: {error}".splitlines()[0]
    outcome.seconds = time.perf_counter() - begun
    return outcome


def figure(value: float) -> str:
    """Write a value with four significant digits, thousands set apart, no exponent where none is needed."""
    if not np.isfinite(value):
        return str(value)
    if value == 0 or 1e-3 <= abs(value) < 1e7:
        digits = 0 if value == 0 else max(0, 3 - int(np.floor(np.log10(abs(value)))))
        text = f"{value:,.{digits}f}"
        return text.rstrip("0").rstrip(".") if "." in text else text
    return f"{value:.3e}"


def table(outcomes: list[Outcome]) -> Table:
    """Lay out all outcomes as one table, a section a benchmark."""
    made = Table(box=box.SIMPLE_HEAD, header_style="bold", pad_edge=False)
    made.add_column("measured", ratio=5)
    made.add_column("value", justify="right", no_wrap=True)
    made.add_column("unit", no_wrap=True)
    made.add_column("target", no_wrap=True)
    made.add_column("met", no_wrap=True)
    made.add_column("note", ratio=4, style="dim")
    for outcome in outcomes:
        made.add_section()
        made.add_row(Text(f"{outcome.name} ({outcome.seconds:.1f} s)", style="bold"))
        for row in outcome.rows:
            met = {True: Text("yes", "green"), False: Text("NO", "bold red"), None: Text("")}[row.met]
            made.add_row(Text(row.name), figure(row.value), Text(row.unit), Text(row.target), met, Text(row.note))
        if outcome.error is not None:
            made.add_row(Text("failed: " + outcome.error, "bold red"), "", "", "", Text("FAIL", "bold red"))
    return made


def as_json(outcomes: list[Outcome], on: dict[str, Any], *, quick: bool) -> str:
    """Write all figures with the machine that they were measured on."""
    each = [{key: value for key, value in asdict(outcome).items() if key != "picture"} for outcome in outcomes]
    return json.dumps({"machine": on, "quick": quick, "benchmarks": each}, indent=2, ensure_ascii=False) + "\n"


def machine() -> dict[str, Any]:
    """Tell what the figures were measured on."""
    blas = sorted({f"{lib['internal_api']} {lib['version']}" for lib in threadpool_info() if lib["user_api"] == "blas"})
    return {
        "system": platform.system(),
        "processor": _processor(),
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "blas": ", ".join(blas),
        "blas_threads": 1,
    }


def _processor() -> str:
    """Read the model of the processor, which `platform` does not know on Linux."""
    try:
        lines = Path("/proc/cpuinfo").read_text(encoding="utf-8").splitlines()
    except OSError:
        lines = []
    models = [line.partition(":")[2].strip() for line in lines if line.startswith("model name")]
    return models[0] if models else platform.processor() or platform.machine()


def arguments() -> argparse.Namespace:
    """Read the command line."""
    parser = argparse.ArgumentParser(prog="tools/bench", description=__doc__)
    parser.add_argument("--quick", action="store_true", help="fewer repeats and sizes, a few minutes for all")
    parser.add_argument("--only", metavar="NAME", action="append", help="run this benchmark alone; may be given again")
    parser.add_argument("--json", metavar="FILE", type=Path, help="where the figures go (default: bench.json here)")
    parser.add_argument("--pictures", metavar="FOLDER", type=Path, help="where pictures go (default: none are drawn)")
    asked = parser.parse_args()
    known = benchmarks()
    if unknown := sorted(set(asked.only or []) - set(known)):
        parser.error(f"--only {unknown[0]}: no such benchmark; there are: {', '.join(known) or 'none yet'}")
    return asked


def main() -> int:
    """Run what was asked for; 1 when a benchmark failed, 130 when interrupted."""
    asked = arguments()
    console = Console()
    if not console.is_terminal:
        console = Console(width=140)  # a log has no width of its own, and 80 columns break every line
    outcomes: list[Outcome] = []
    interrupted = False
    with threadpool_limits(limits=1, user_api="blas"):
        on = machine()
        console.print(f"{on['processor']}, {on['blas']}, one BLAS thread", highlight=False, style="dim")
        for name in asked.only or benchmarks():
            with console.status(f"{name} …") as status:
                # A log file has no use for a spinner: there, a line for each value is the progress.
                tell = status.update if console.is_terminal else lambda line: print(line, flush=True)
                try:
                    outcome = measure(name, asked.quick, tell)
                except KeyboardInterrupt:
                    interrupted = True
                    break
            if outcome is not None:
                outcomes.append(outcome)
    console.print(table(outcomes))

    path = asked.json or FOLDER.parent.parent / "bench.json"
    try:
        path.write_text(as_json(outcomes, on, quick=asked.quick), encoding="utf-8")
        if asked.pictures is not None:
            path = asked.pictures
            path.mkdir(parents=True, exist_ok=True)
            for outcome in outcomes:
                if outcome.picture is not None:
                    (path / f"{outcome.name}.svg").write_text(outcome.picture, encoding="utf-8")
    except OSError as error:
        print(f"tools/bench: {path}: cannot be written: {error.strerror}", file=sys.stderr)
        return 2
    total = sum(outcome.seconds for outcome in outcomes)
    missed = sum(row.met is False for outcome in outcomes for row in outcome.rows)
    failed = [outcome.name for outcome in outcomes if outcome.error is not None]
    console.print(
        f"{sum(len(o.rows) for o in outcomes)} values in {total:.0f} s, {missed} off target, "
        f"failed: {', '.join(failed) or 'none'}; written to {path}",
        highlight=False,
        soft_wrap=True,
    )
    if interrupted:
        return 130
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
