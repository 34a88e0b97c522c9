"""A timeline as text for a person: heading, table of what happened, and the figures of the whole."""

from datetime import UTC, datetime, timedelta
from typing import Any

from rich.table import Table
from rich.text import Text

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
SOURCES = {
    ("published", None): "as the tracker said it at the time",
    ("replayed", True): "replayed under the log's own settings",
    ("replayed", False): "replayed under other settings than the log's own",
}
WORDS = {
    "silence": "silence",
    "controller": "controller restarted",
    "tracker": "tracker restarted",
}
GRAVE = frozenset({"alarm", "fault", "silence"})


def heading(told: dict[str, Any]) -> Text:
    """Say which link it is about, when, and where the timeline comes from."""
    start_ns, span_ns = told["start_ns"], round(told["span_s"] * 1e9)
    lines = [
        f"link {told['link']}, {utc(start_ns)} to {utc(start_ns + span_ns)} UTC, {duration(told['span_s'])}",
        source(told),
    ]
    return Text("\n".join(lines))


def source(told: dict[str, Any]) -> str:
    """Say where the timeline comes from."""
    return SOURCES[told["source"], told["own_settings"]]


def table(told: dict[str, Any]) -> Table | Text:
    """Lay out what happened, one row each."""
    if not told["happenings"]:
        return Text("Nothing happened: one mode throughout, no alarm.")
    made = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="bold")
    for name in ("UTC", "s"):
        made.add_column(name, no_wrap=True, justify="right" if name == "s" else "left")
    made.add_column("what", min_width=12)
    made.add_column("since", no_wrap=True, justify="right")
    for name in ("evidence", "the tracker", "measured rate, bit/s/Hz"):
        made.add_column(name, min_width=12)
    days = told["span_s"] > 86400
    for each in told["happenings"]:
        clock = utc(each["t_ns"])[5 if days else 11 :]
        cells = (clock, f"{each['t_s']:.2f}", what(each), since(each), evidence(each), done(each), effect(each))
        made.add_row(*(Text(cell) for cell in cells), style="bold" if each["what"] in GRAVE else "")
    return made


def what(each: dict[str, Any]) -> str:
    """Name a happening."""
    if each["what"] == "alarm":
        where = "" if each["receiver"] is None else f" at receiver {each['receiver']}"
        name = f"alarm {each['kind']}{where}"
    elif each["what"] == "pattern":
        name = f"pattern, cause {each['kind']}"
    elif each["what"] == "fault":
        name = f"fault {each['kind']}"
    else:
        name = WORDS.get(each["what"], each["kind"])
    return name if each["count"] == 1 else f"{name}, {each['count']} times until {each['last_s']:.2f} s"


def since(each: dict[str, Any]) -> str:
    """Say when it began, in seconds from the start; empty when it was told at once."""
    return "" if each["since_ns"] == each["t_ns"] else f"{each['since_s']:.2f}"


def evidence(each: dict[str, Any]) -> str:
    """Say what it rests on."""
    if each["kind"] == "gap" and each["what"] == "alarm":
        return f"{each['amount']:.0f} {'burst' if each['amount'] == 1 else 'bursts'} lost"
    if each["what"] == "silence":
        return f"{each['amount']:.2f} s without a state"
    if each["statistic"] is not None and each["threshold"] is not None:
        most = "at most " if each["count"] > 1 else ""
        other = f", else {each['next_kind']}" if each["next_kind"] else ""
        return f"{most}{each['statistic']:.3g} against {each['threshold']:.3g}{other}"
    return str(each["detail"])


def done(each: dict[str, Any]) -> str:
    """Say what the tracker did."""
    parts = [each["action"]] if each["action"] and each["action"] != "none" else []
    if each["mode"]:
        lasted = "to the end" if each["mode_s"] is None else f"for {each['mode_s']:.2f} s"
        parts.append(lasted if each["what"] == "mode" else f"{each['mode']} {lasted}")
    if each["pattern"] is not None:
        parts.append(f"pattern {each['pattern']}")
    return ", ".join(parts)


def effect(each: dict[str, Any]) -> str:
    """Say what became of the measured rate."""
    before, lowest = each["rate_before"], each["rate_lowest"]
    if before is None:
        return ""
    if lowest is None:
        return f"{before:.2f}, then none measured"
    if not each["fell"]:
        return f"{before:.2f}, did not fall"
    if each["back_s"] is None:
        return f"{before:.2f}, fell to {lowest:.2f}, not back"
    return f"{before:.2f}, fell to {lowest:.2f}, back after {each['back_s']:.2f} s"


def figures(told: dict[str, Any]) -> list[tuple[str, str]]:
    """Figures of the whole, each with its name."""
    lost = ", ".join(f"{told[name]} {label}" for name, label in COUNTS if told[name])
    lines = [("states", f"{told['states']:,}" + (f"; {lost}" if lost else "; no burst lost"))]
    modes = ", ".join(f"{mode} {percent(share)}" for mode, share in told["modes"].items())
    lines.append(("modes", modes or "one state only"))
    if told["silent_s"]:
        lines.append(("silence", f"{duration(told['silent_s'])} without a state, in no mode"))
    kinds = ", ".join(f"{kind} {count:,}" for kind, count in told["alarms"].items())
    pace = told["alarms_per_hour"]
    hourly = f"; {pace:,.0f} an hour" if pace and pace >= 100 else f"; {pace:.2g} an hour" if pace else ""
    lines.append(("alarms", kinds + hourly if kinds else "none"))
    causes = ", ".join(f"{cause} {count:,}" for cause, count in told["patterns"].items())
    lines.append(("patterns", causes or "none published"))
    for name, key, unit in SPREADS:
        spread = told[key]
        text = "none" if spread is None else f"{spread['q05']:.2f} / {spread['median']:.2f} / {spread['q95']:.2f}{unit}"
        lines.append((name, text))
    kept = told["promise_kept"]
    if kept is not None:
        lines.append(("promises", f"{percent(kept)} kept of the last 200"))
    for receiver, spread in list(enumerate(told["noise_db"]))[:MOST_RECEIVERS]:
        if spread is not None:
            lines.append((f"noise {receiver}", minus(f"{spread['least']:.1f} to {spread['most']:.1f} dB")))
    if len(told["noise_db"]) > MOST_RECEIVERS:
        lines.append(("", f"and {len(told['noise_db']) - MOST_RECEIVERS} more receivers"))
    if told["faults"]:
        shown = ", ".join(f"{element} {fault}" for element, fault, _ in told["faults"][:6])
        more = f" and {len(told['faults']) - 6} more" if len(told["faults"]) > 6 else ""
        lines.append(("faults", f"elements {shown}{more}"))
    return lines


COUNTS = (
    ("lost", "bursts lost"),
    ("refused", "refused"),
    ("duplicate", "sent twice"),
    ("dropped_frames", "frames left out"),
)
SPREADS = (
    ("measured", "rate_measured", " bit/s/Hz (5 %, median, 95 %)"),
    ("predicted", "rate_predicted", " bit/s/Hz"),
    ("innovation", "innovation", ""),
)
MOST_RECEIVERS = 8


def summary(told: dict[str, Any]) -> str:
    """Write the figures of the whole, where the picture lies, and what was wrong with the logs."""
    lines = [f"{name:<12}{text}" for name, text in figures(told)]
    lines.append(f"{'picture':<12}{told['picture']}")
    if told["unreadable"]:
        lines.append(f"{'unreadable':<12}{told['unreadable']} messages, left out")
    lines += [f"{'note':<12}{text}" for text in told["notes"]]
    lines += [f"{'damage':<12}{text}" for text in told["damage"]]
    return "\n".join(lines)


def percent(share: float) -> str:
    """Write a share; what is not all is never rounded to all, and what is not none never to none."""
    if 0.0 < share < 0.001:
        return "< 0.1 %"
    if 0.999 < share < 1.0:
        return "> 99.9 %"
    return f"{100 * share:.1f} %"


def minus(number: str) -> str:
    """Write the sign of numbers as a minus, not as a hyphen."""
    return number.replace("-", "−")


def duration(seconds: float) -> str:
    """Write a time in the units that suit it."""
    if seconds < 120:
        return f"{seconds:.2f} s"
    minutes, left = divmod(round(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours} h {minutes:02d} min {left:02d} s" if hours else f"{minutes} min {left:02d} s"


def utc(time_ns: int) -> str:
    """Write a time as date and clock, to the millisecond."""
    moment = EPOCH + timedelta(microseconds=time_ns // 1000)
    return f"{moment:%Y-%m-%d %H:%M:%S}.{moment.microsecond // 1000:03d}"
