"""Suggest: settings to start from, derived from a log, each with the reason why."""

import math
import sys
import textwrap
from collections.abc import Iterator
from pathlib import Path

from threadpoolctl import threadpool_limits

from tracker.assembly import configure
from tracker.settings import Delay, Estimator, Link, Settings, SettingsError, parse

from .errors import OfflineError
from .progress import Bars, progress_bar
from .survey import Survey, survey
from .trial import Trial, try_out

# Delay samples added at each end, for what the log happened not to show.
MARGIN = 1
# A refresh every so many ms at most: faster than that little is gained, and the optimizer wants its time.
LEAST_REFRESH_MS = 2.0
MOST_BUDGET_MS = 100.0
# A clock that is off by more than this share of what is allowed gets more room.
CLOCK_SHARE = 0.5

# A channel that changes by more than this share while every element is sounded once cannot be followed well.
MOST_STALE = 0.1
# Limits of the settings.
MOST_COLUMNS = 4096
MOST_TAPS = 1024

CORRECT = "CORRECT THIS:"
AS_RECORDED = "As in the settings in the log."


def draft(path: Path, bars: Bars | None = None) -> str:
    """Write settings that fit a log.

    Parameters
    ----------
    path : Path
    bars : Bars or None
        Told how far the work is: the log is read twice, then time constants are tried on parts of it.

    Returns
    -------
    str
        A settings file that can be used as it is; what the log cannot tell is marked.

    Raises
    ------
    LogError, OfflineError
        One line for the user.
    """
    bars = bars or Bars(None)
    known = survey(path, bars.begin)
    text = _text(path, known, None)
    trial = _trial(path, known, text, bars)
    return text if trial is None else _text(path, known, trial)


def _text(path: Path, known: Survey, trial: Trial | None) -> str:
    lines = [
        f"# Settings to start from, derived from {path.name} by `ris-tracker suggest`.",
        f"# What a log cannot tell is marked {CORRECT[:-1]}; `ris-tracker check` says what the rest amounts to.",
    ]
    if known.damage:
        lines += _why(f"The log is not whole, and only what can be read of it counts: {known.damage}.")
    for table in (_link, _panel, _tones, _delay):
        lines += ["", f"[{table.__name__[1:]}]", *table(known)]
    lines += ["", "[estimator]", *_estimator(known, trial)]
    for table in (_follow, _refresh):
        lines += ["", f"[{table.__name__[1:]}]", *table(known)]
    return "\n".join(lines) + "\n" + _others(known.settings)


def _trial(path: Path, known: Survey, text: str, bars: Bars) -> Trial | None:
    """Try time constants under the other settings, when the log is long enough and the work bearable."""
    if not known.stretches:
        return None
    try:
        config = configure(parse(text), path.parent)
    except SettingsError:  # a file that the settings in the log name is not here
        return None
    return try_out(known.stretches, known.warm, config, bars.begin(f"{path.name}, time constants"))


def suggest(path: Path, progress: bool = True) -> int:
    """Print settings that fit a log.

    Returns
    -------
    int
        Exit status.

    Raises
    ------
    LogError, OfflineError
        One line for the user.
    """
    with threadpool_limits(limits=1), progress_bar(progress, 1) as bars:
        text = draft(path, bars)
    sys.stdout.write(text)
    return 0


def _link(known: Survey) -> Iterator[str]:
    yield f'name = "{known.link}"'
    yield f"receivers = {known.size.receivers}"
    allowed = known.settings.link.clock_skew_s if known.settings else Link(name="any").clock_skew_s
    if known.clock_s > CLOCK_SHARE * allowed:
        yield from _why(
            f"Bursts bear times up to {known.clock_s:.1f} s away from their arrival. Setting the controller's clock is "
            "better than allowing for it."
        )
        yield f"clock_skew_s = {_rounded(2.0 * known.clock_s)}"


def _panel(known: Survey) -> Iterator[str]:
    elements = known.size.elements
    panel = known.settings.panel if known.settings else None
    if panel is not None and panel.elements == elements:
        yield from _why(AS_RECORDED)
        yield f"columns = {panel.columns}"
        yield f"rows = {panel.rows}"
        if panel.tied:
            yield f"tied = {[list(group) for group in panel.tied]}"
        if panel.stuck:
            stuck = ", ".join(f"{state} = {list(which)}" for state, which in panel.stuck.items())
            yield f"stuck = {{ {stuck} }}"
        return
    rows = next((rows for rows in range(math.isqrt(elements), 0, -1) if elements % rows == 0), 1)
    if elements // rows > MOST_COLUMNS:
        raise OfflineError(
            f"link {known.link}: {elements} elements cannot lie in columns and rows of at most {MOST_COLUMNS}; "
            "write the settings by hand"
        )
    yield from _why(
        f"{CORRECT} the log says {elements} elements, not how they lie. Element i is column i // rows, row i % rows."
    )
    yield f"columns = {elements // rows}"
    yield f"rows = {rows}"


def _tones(known: Survey) -> Iterator[str]:
    if known.tones is None:
        yield from _why(
            f"{CORRECT} the log says {known.size.tones} tones, not where they lie. fft and spacing_khz are those of "
            "the OFDM symbol, first is the index of the first pilot tone, fft // 2 the carrier. With another fft, "
            "delay.taps and delay.before change in proportion."
        )
        spacing = 30.0
    else:
        yield from _why(AS_RECORDED)
        spacing = known.tones[2]
    yield f"fft = {known.fft}"
    yield f"first = {known.first}"
    yield f"count = {known.size.tones}"
    yield f"spacing_khz = {spacing!r}"


def _delay(known: Survey) -> Iterator[str]:
    if known.extent is None:
        usual = known.settings.delay if known.settings and known.tones else Delay()
        before = min(usual.before, known.fft - 1)
        yield from _why(
            f"{CORRECT} the log does not show how long the channel is: too few tones, too little signal, or signal at "
            "all delays."
        )
        yield f"taps = {max(min(usual.taps, known.fft), before + 1)}"
        yield f"before = {before}"
        return
    first, last = known.extent
    most = min(known.fft, MOST_TAPS)
    before = min(max(-first + MARGIN, 0), most - 1)
    taps = min(last + MARGIN + before + 1, most)
    yield from _why(
        f"Delays of {first} to {last} samples of the fft hold all that is not noise; {MARGIN} is added at each end for "
        "what the log happened not to show."
    )
    yield f"taps = {max(taps, before + 1)}"
    yield f"before = {before}"


def _estimator(known: Survey, trial: Trial | None) -> Iterator[str]:
    kind = known.settings.estimator.forgetting if known.settings else Estimator().forgetting
    yield f'forgetting = "{kind}"'
    aging = known.aging
    if aging is not None and aging.stale > MOST_STALE:
        yield from _why(
            f"Under the commonest pattern {100 * aging.stale:.0f} % of the channel's power changes before every "
            'element is sounded once. More frames a second, or fewer unknowns ([aperture] basis = "tiles"), will help '
            "more than any time constant."
        )
    sweep = f"{known.size.elements + 1} unknowns take {_rounded(_sweep_ms(known))} ms to sound once."
    if trial is not None:
        told = ", ".join(f"{_rounded(error)} at {_rounded(1e3 * tau)} ms" for tau, error in trial.tried)
        yield from _why(
            "The shortest with which the estimator predicts the next burst about as well as with any. Mean squared "
            f"errors over parts of the log, in units of the noise: {told}. {sweep}"
        )
        seconds = trial.time_constant_s
    elif aging is not None:
        yield from _why(
            "From how the response under the commonest pattern changes, looked at over lags of up to "
            f"{_rounded(aging.longest_s)} s: noise and age of the estimate balance when it remembers "
            f"{_rounded(1e3 * aging.memory_s)} ms. {sweep}"
        )
        seconds = 2.0 * aging.memory_s if kind == "exponential" else aging.coherence_s
    else:
        yield from _why(
            f"{CORRECT} the log does not show how fast the channel changes: too few bursts, or no pattern that recurs "
            f"from burst to burst. {sweep}"
        )
        seconds = Estimator().time_constant_ms / 1e3
    yield f"time_constant_ms = {_rounded(1e3 * seconds)}"


def _follow(known: Survey) -> Iterator[str]:
    if known.aging is None:
        yield from _why("The log does not show whether the phase turns.")
    elif known.aging.follow:
        yield from _why("A phase common to the whole response accounts for most of its change.")
    else:
        yield from _why("A phase common to the whole response accounts for little of its change.")
    yield f"phase = {'true' if known.aging is not None and known.aging.follow else 'false'}"


def _refresh(known: Survey) -> Iterator[str]:
    if known.interval_s is None or known.interval_s <= 0.0:
        yield from _why(f"{CORRECT} no two bursts follow one another in the log, so their distance is not known.")
        yield "every_bursts = 1"
        return
    interval = 1e3 * known.interval_s
    every = max(1, math.ceil(LEAST_REFRESH_MS / interval))
    yield from _why(
        f"Bursts come every {_rounded(interval)} ms. Half of the time between refreshes is left for everything else."
    )
    yield f"every_bursts = {every}"
    yield f"budget_ms = {_rounded(min(0.5 * every * interval, MOST_BUDGET_MS))}"


def _sweep_ms(known: Survey) -> float:
    """Time to sound as many patterns as there are unknowns, ms."""
    return 1e3 * known.frame_s * (known.size.elements + 1)


def _why(text: str) -> list[str]:
    return [f"# {line}" for line in textwrap.wrap(text, 98)]


def _others(settings: Settings | None) -> str:
    """Carry over the tables of the log's settings that a log says nothing about, where they are not as by default."""
    if settings is None:
        return ""
    text = ""
    for name in ("aperture", "drift", "sockets", "journal"):
        table = getattr(settings, name)
        values = {key: value for key, value in table.model_dump().items() if value != type(table)().model_dump()[key]}
        if values:
            lines = [f"{key} = {_toml(value)}" for key, value in values.items()]
            text += "\n".join(["", f"[{name}]", *_why(AS_RECORDED), *lines]) + "\n"
    return text


def _toml(value: object) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        escaped = value.replace("\\", "\\\\").replace('"', '\\"')
        return f'"{escaped}"'
    return repr(value)


def _rounded(value: float) -> str:
    """Round to three figures, without an exponent."""
    digits = 2 - math.floor(math.log10(value)) if value > 0 else 0
    return f"{round(value, digits):.{max(digits, 1)}f}".rstrip("0").removesuffix(".")
