"""The summary of a replay as text for a person."""

from typing import Any


def render(result: dict[str, Any]) -> str:
    """Write a summary as text for a person."""
    counts, logged, replayed = result["counts"], result["logged"], result["replayed"]
    lines = [
        f"{counts.get('bursts', 0)} bursts, {counts.get('frames', 0)} frames over {result['span_s']:.3f} s, "
        f"worked off in {result['took_s']:.2f} s ({result['times_real_time'] or 0:.1f} times real time)",
        f"lost {counts.get('lost', 0)}, refused {counts.get('refused', 0)}, frames left out "
        f"{counts.get('dropped_frames', 0)}",
        "",
        f"{'':24}{'logged':>12}{'replayed':>12}",
    ]
    rows = [
        ("patterns published", "patterns", "d"),
        ("rate measured", "rate_measured", ".3f"),
        ("rate predicted", "rate_predicted", ".3f"),
        ("innovation ratio", "innovation", ".3f"),
        ("prediction error", "prediction_error", ".3f"),
    ]
    for label, key, form in rows:
        lines.append(f"{label:24}{_cell(logged[key], form):>12}{_cell(replayed[key], form):>12}")
    for kind in sorted({*logged["alarms"], *replayed["alarms"]}):
        label = f"alarms: {kind}"
        lines.append(f"{label:24}{logged['alarms'].get(kind, 0):>12}{replayed['alarms'].get(kind, 0):>12}")
    lines += ["", _verdict(result)]
    lines += [f"damage: {text}" for text in result["damage"]]
    return "\n".join(lines) + "\n"


def _verdict(result: dict[str, Any]) -> str:
    same, logged = result["patterns_same"], result["logged"]["patterns"]
    if not logged:
        return "The log holds no published patterns to compare with."
    if not result["own_settings"]:
        return "Other settings than the log's own: what is replayed is what they would have done with the same frames."
    if same == logged and not result["patterns_only_in_replay"]:
        return f"All {logged} patterns came out bit by bit as published."
    parts = [f"{same} of {logged} patterns came out bit by bit as published"]
    if result["first_difference"]:
        parts.append(f"first difference: {result['first_difference']}")
    if result["patterns_only_in_log"] or result["patterns_only_in_replay"]:
        parts.append(f"{result['patterns_only_in_log']} only in the log, {result['patterns_only_in_replay']} only here")
    return "; ".join(parts) + "."


def _cell(value: float | None, form: str) -> str:
    return "–" if value is None else format(value, form)
