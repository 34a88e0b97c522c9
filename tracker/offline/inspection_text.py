"""An inspection as text for a person."""

from collections.abc import Iterator
from datetime import UTC, datetime
from typing import Any

import numpy as np

METHODS = {
    "outside": "noise from the directions outside the delay basis",
    "repeats": "noise from frames that repeat a pattern, what moved between them included",
    "delays": "noise from the delays with the least power",
    "none": "noise cannot be told apart: no settings, no repeats, too few tones",
}


def render(result: dict[str, Any]) -> str:
    """Write an inspection as text.

    Parameters
    ----------
    result : dict
        As `Inspection.as_dict` gives it.
    """
    lines: list[str] = []
    for log in result["logs"]:
        lines += _log(log)
    for name, link in result["links"].items():
        lines += ["", f"link {name}"]
        lines += [f"  {label:<12}{text}" for label, text in _link(link)]
    if result["strange_topics"]:
        told = ", ".join(f"{topic!r} {count}" for topic, count in sorted(result["strange_topics"].items()))
        lines += ["", f"other topics: {told}"]
    return "\n".join(lines) + "\n"


def _log(log: dict[str, Any]) -> list[str]:
    inside = ", ".join(log["attachments"]) or "no settings"
    lines = [f"{log['path']}: {_bytes(log['size'])}, {log['messages']} messages, with {inside}"]
    if log["settings"]:
        lines.append(f"  its settings cannot be used: {log['settings']}")
    if log["damage"]:
        lines.append(f"  damage: {log['damage']}")
    return lines


def _link(link: dict[str, Any]) -> Iterator[tuple[str, str]]:
    others = {kind: count for kind, count in link["messages"].items() if kind != "pilots"}
    if link["bursts"]:
        yield from _bursts(link)
    else:
        yield "bursts", "none"
    if link["refused"]:
        yield "refused", _counts(link["refused"])
    if link["published"]:
        rate = f", predicted rate {link['rate_predicted']:.2f} bit/s/Hz in the mean"
        yield "published", f"{sum(link['published'].values())} patterns: {_counts(link['published'])}{rate}"
    if link["alarms"]:
        told = [
            f"{kind} {alarm['count']} (first {_clock(alarm['first_ns'])})" for kind, alarm in link["alarms"].items()
        ]
        yield "alarms", ", ".join(told)
    if others:
        yield "messages", _counts(others)


def _bursts(link: dict[str, Any]) -> Iterator[tuple[str, str]]:
    yield "span", f"{_time(link['first_ns'])} to {_time(link['last_ns'])}, {link['span_s']:.3f} s"
    yield "bursts", _order(link)
    yield "sizes", _sizes(link)
    yield "spacing", _spacing(link)
    yield "volume", f"{_bytes(link['bytes'] / link['bursts'])} a burst{_flow(link)}"
    arrival = link["arrival_s"]
    yield "arrival", f"{arrival['median'] * 1e3:.1f} ms after the last frame, {arrival['p99'] * 1e3:.1f} ms at 99 %"
    yield "patterns", _patterns(link)
    for number, level in enumerate(link["receivers"]):
        yield f"receiver {number}", _level(level)
    if link["receivers"]:
        yield "", METHODS[link["receivers"][0]["method"]]


def _order(link: dict[str, Any]) -> str:
    parts = [f"{link['bursts']} in {_plural(link['runs'], 'run')}, {link['frames']} frames"]
    if link["frames_left_out"]:
        parts.append(f"{link['frames_left_out']} left out (not finite)")
    if link["lost"]:
        parts.append(f"{link['lost']} lost in {_plural(link['gaps'], 'gap')} (longest {link['longest_gap']})")
    else:
        parts.append("none lost")
    if link["duplicates"]:
        parts.append(_plural(link["duplicates"], "duplicate"))
    if link["late"]:
        parts.append(f"{link['late']} out of order")
    return ", ".join(parts)


def _sizes(link: dict[str, Any]) -> str:
    told = []
    for size in link["sizes"][:4]:
        text = (
            f"{_plural(size['elements'], 'element')}, {_plural(size['receivers'], 'receiver')}, "
            f"{_plural(size['tones'], 'tone')}, {_plural(size['frames'], 'frame')} a burst"
        )
        told.append(text if len(link["sizes"]) == 1 else f"{text} ({size['bursts']} bursts)")
    if len(link["sizes"]) > 4:
        told.append(f"and {len(link['sizes']) - 4} more")
    if link["unlike_settings"]:
        told.append(f"{link['unlike_settings']} bursts unlike the settings in the log")
    return "; ".join(told)


def _spacing(link: dict[str, Any]) -> str:
    spacings = [f"{int(dt) / 1e3:.3f} µs" for dt in list(link["frame_spacing_ns"])[:3]]
    text = f"frames {' or '.join(spacings)} apart"
    interval = link["burst_interval_s"]
    if interval:
        text += f", bursts {interval['median'] * 1e3:.3f} ms, at most {interval['most'] * 1e3:.3f} ms"
    return text


def _flow(link: dict[str, Any]) -> str:
    return f", {_bytes(link['bytes'] / link['span_s'])}/s" if link["span_s"] > 0 else ""


def _patterns(link: dict[str, Any]) -> str:
    text = f"{100 * link['repeated_share']:.1f} % of the frames repeat a pattern of their burst"
    commonest = link["commonest_pattern"]
    if commonest is None:
        return f"{text}, none recurs between bursts"
    return (
        f"{text}; the commonest is shown in {100 * commonest['frames']:.1f} % of the frames, "
        f"{100 * commonest['bursts']:.1f} % of the bursts"
    )


def _level(level: dict[str, Any]) -> str:
    if level["noise"] is None:
        return f"power {_db(level['signal'])} a tone"
    ratio = "–" if level["ratio_db"] is None else f"{level['ratio_db']:.1f} dB"
    return f"signal {_db(level['signal'])}, noise {_db(level['noise'])}, signal to noise {ratio} a tone"


def _db(power: float | None) -> str:
    return f"{10 * np.log10(power):.1f} dB" if power else "–"


def _counts(counts: dict[str, int]) -> str:
    return ", ".join(f"{name} {count}" for name, count in sorted(counts.items()))


def _plural(count: int, word: str) -> str:
    return f"{count} {word}" if count == 1 else f"{count} {word}s"


def _bytes(count: float) -> str:
    for unit in ("B", "KB", "MB"):
        if count < 1000:
            return f"{count:.0f} B" if unit == "B" else f"{count:.1f} {unit}"
        count /= 1000
    return f"{count:.2f} GB"


def _time(time_ns: int) -> str:
    try:
        return f"{datetime.fromtimestamp(time_ns // 10**9, UTC):%Y-%m-%d %H:%M:%S}.{time_ns % 10**9 // 10**6:03d} UTC"
    except (ValueError, OverflowError, OSError):
        return f"{time_ns} ns"


def _clock(time_ns: int) -> str:
    return _time(time_ns)[11:].removesuffix(" UTC")
