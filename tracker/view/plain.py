"""One line about a link, for logs, for small terminals and for output that is no terminal."""

import time
from collections.abc import Callable
from typing import TextIO

import numpy as np

from tracker.engine.events import Plan
from tracker.view.model import LinkModel
from tracker.view.stream import Stream

SILENT_S = 3.0


def figure(value: float | None, digits: int = 2) -> str:
    """Write a number with so many digits after the point, or a dash when it is not known."""
    return "–" if value is None else f"{value:,.{digits}f}"


def sounding(plan: Plan) -> str:
    """Say how a plan has frames sounded."""
    served = int(np.count_nonzero(plan.in_service))
    return f"1 frame in {plan.every}" + (f", {100 * served // len(plan.patterns)} % in service" if served else "")


def silence(model: LinkModel, now: float, since: float) -> str | None:
    """Say that nothing is heard, when that is so.

    Parameters
    ----------
    model : LinkModel
    now, since : float
        Seconds; `since` is when this view began to listen.
    """
    if model.heard_at is None:
        return f"nothing heard yet, waiting for {now - since:.0f} s"
    if now - model.heard_at > SILENT_S:
        return f"silent for {now - model.heard_at:.0f} s"
    return None


def line(model: LinkModel, now: float, since: float) -> str:
    """Put what matters most about a link into one line.

    Parameters
    ----------
    model : LinkModel
    now, since : float
        Seconds; `since` is when this view began to listen.
    """
    parts = [model.link]
    if silent := silence(model, now, since):
        parts.append(silent)
    state = model.state
    if state is None:
        return ", ".join(parts)
    parts.append(str(state.mode))
    parts.append(f"burst {state.bursts}")
    rate = f"rate {figure(model.measured.last)} predicted {figure(model.predicted.last)}"
    if model.truth is not None:
        rate += f" best {figure(model.truth.best)}"
    if model.truth is not None and model.truth.net is not None:
        rate += f" net {figure(model.truth.net)}"
    if model.achieved is not None:
        rate += f" achieved {100 * model.achieved:.1f} %"
    parts.append(rate)
    parts.append(f"innovation {figure(model.innovation.last)}")
    parts.append(f"drift {figure(model.drift.last)} of threshold")
    if latency := model.latency_ms(now):
        parts.append(f"latency {latency[0]:.1f} / {latency[1]:.1f} ms")
    parts.append(f"patterns {model.patterns}")
    if model.plan is not None:
        parts.append(f"sounding {sounding(model.plan)}")
    if state.faults:
        parts.append(f"faulty elements {len(state.faults)}")
    parts.append(f"lost {state.lost} refused {state.refused}")
    parts.append(f"alarms {model.alarms.total()}")
    return ", ".join(parts)


def write_lines(stream: Stream, out: TextIO, running: Callable[[], bool]) -> None:
    """Write a line a second, one at least, and one for each event as it comes, for as long as `running` says so.

    Parameters
    ----------
    stream : Stream
    out : TextIO
    running : callable
        Asked several times a second.
    """
    since = time.monotonic()
    first, told = since + 1.0, stream.model.noted
    due = first
    while running():
        stream.receive(min(0.2, max(0.0, due - time.monotonic())))
        now = time.monotonic()
        clock = time.strftime("%H:%M:%S")
        fresh = stream.model.noted - told
        told += fresh
        for note in list(stream.model.notes)[len(stream.model.notes) - min(fresh, len(stream.model.notes)) :]:
            out.write(f"{clock} {'!' if note.grave else '·'} {stream.model.link}, {note.kind}: {note}\n")
        if now >= due:
            out.write(f"{clock} {line(stream.model, now, since)}\n")
            due = (due if now < due + 1.0 else now) + 1.0  # after a pause of the machine one line, not two at once
        out.flush()
    if due == first:
        out.write(f"{time.strftime('%H:%M:%S')} {line(stream.model, time.monotonic(), since)}\n")
