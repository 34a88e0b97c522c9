"""The file of faulty elements: plain TOML that a person can read and keep, and that the settings can take."""

import os
from collections.abc import Sequence
from pathlib import Path
from time import gmtime, strftime

from tracker.engine.events import State
from tracker.engine.health.faults import FAULTS, SILENT, STUCK_MINUS, fault_map, map_text
from tracker.settings import Settings

SILENT_NAMES = frozenset(FAULTS[code] for code in SILENT)


def faults_text(settings: Settings, state: State) -> str:
    """Write down the faults of a state.

    Parameters
    ----------
    settings : Settings
        In force; what they hold in `panel.stuck` is written along, so that the table can take its place.
    state : State

    Returns
    -------
    str
        A TOML file whose one table is ``[panel.stuck]``; weak and swapped elements stand in its remarks alone.
    """
    panel = settings.panel
    plus, minus = set(panel.stuck.get("plus", ())), set(panel.stuck.get("minus", ()))
    known = [(element, "stuck+", 1.0) for element in plus] + [(element, "stuck-", 1.0) for element in minus]
    for element, fault, _ in state.faults:
        if fault in SILENT_NAMES and element not in plus | minus:
            (minus if fault == FAULTS[STUCK_MINUS] else plus).add(element)
    time = strftime("%Y-%m-%dT%H:%M:%SZ", gmtime(state.t_ns // 1_000_000_000))
    remarks = [
        f"Elements of link {settings.link.name} that do not follow their bits, as found up to {time}, run {state.run},",
        f"burst {state.seq}. Found: {len(state.faults)}.",
        "",
        "To hold them for good, put the table at the end in place of panel.stuck in the settings. It holds what was",
        "there already. Elements that are unmoved are held at +1: in which state they stay is not known.",
        "",
        *_list(state.faults, panel.rows),
        "Row 0 on top; . follows, 0 unmoved, + and - stuck, w weak, x swapped:",
        "",
        *map_text(fault_map([*known, *state.faults], panel.columns, panel.rows)).splitlines(),
    ]
    table = ["[panel.stuck]", f"plus = {sorted(plus)}", f"minus = {sorted(minus)}"]
    return "\n".join([*(f"# {line}".rstrip() for line in remarks), "", *table, ""])


def write_faults(path: Path, text: str) -> None:
    """Write the file, whole or not at all; what stood there is replaced.

    Raises
    ------
    OSError
        When the disk fails.
    """
    part = path.with_name(path.name + ".part")
    part.write_text(text, encoding="utf-8")
    os.replace(part, path)


def _list(faults: Sequence[tuple[int, str, float]], rows: int) -> list[str]:
    """List faults as a table, closed by an empty line; nothing where there are none."""
    if not faults:
        return []
    lines = [f"{'element':>7}  {'column':>6}  {'row':>4}  {'fault':<8}  probability"]
    for element, fault, probability in faults:
        column, row = divmod(element, rows)
        lines.append(f"{element:>7}  {column:>6}  {row:>4}  {fault:<8}  {probability:.3f}")
    return [*lines, ""]
