"""What a log shows of a link that settings can be derived from: a reading in two passes."""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from tracker.engine.burst import Burst
from tracker.engine.estimation.delay import delay_basis
from tracker.engine.estimation.noise import FLOOR, LEAST_OUTSIDE, outside
from tracker.engine.refusal import Refused
from tracker.logs import LogReader
from tracker.messages import Shape, decode_pilots, parse_topic
from tracker.settings import Settings, SettingsError, parse

from .aging import Change, best_memory, coherence_time, measure_change
from .contents import Contents, Sizes
from .errors import OfflineError
from .extent import extent
from .trial import plan

Complex = NDArray[np.complex128]

# Single responses kept to find the length of the channel.
MOST_SNAPSHOTS = 400
# Memory for the responses under the reference pattern, bytes.
MOST_REFERENCE = 128 * 1024 * 1024
# Following the phase is worth while when it lowers the error by this factor,
WORTH_FOLLOWING = 0.7
# and the error is no less than this share of the noise.
LEAST_ERROR = 0.1


@dataclass(frozen=True, slots=True)
class Aging:
    """How fast the channel changes.

    Parameters
    ----------
    memory_s : float
        Memory that trades noise against age best, s.
    coherence_s : float
        Time constant of the Gauss-Markov channel that changes as much over that memory, s.
    longest_s : float
        Longest lag seen, s.
    stale : float
        Share of the channel's power that changes while as many patterns are sounded as there are unknowns.
    follow : bool
        Whether following the phase would pay.
    """

    memory_s: float
    coherence_s: float
    longest_s: float
    stale: float
    follow: bool


@dataclass(frozen=True, slots=True)
class Survey:
    """What is known of the link.

    Parameters
    ----------
    link : str
    size : Sizes
        The commonest sizes of its bursts.
    settings : Settings or None
        Those in the log, if they are of this link.
    tones : (int, int, float) or None
        fft, first and spacing in kHz, when the settings in the log fit the bursts.
    fft, first : int
        Those, or placeholders.
    extent : (int, int) or None
        First and last delay, samples of the fft; None when it cannot be told.
    aging : Aging or None
        None when no pattern recurs from burst to burst.
    frame_s : float
        Mean distance of frames, pauses included, s.
    interval_s : float or None
        Median distance of bursts, s.
    clock_s : float
        Largest distance between a burst's time and its arrival, s.
    stretches : list of list of Burst
        Bursts to try time constants on; empty when there are too few, or too much work in them.
    warm : int
        Bursts of each to begin with.
    damage : str or None
        Where the log is not whole.
    """

    link: str
    size: Sizes
    settings: Settings | None
    tones: tuple[int, int, float] | None
    fft: int
    first: int
    extent: tuple[int, int] | None
    aging: Aging | None
    frame_s: float
    interval_s: float | None
    clock_s: float
    stretches: list[list[Burst]]
    warm: int
    damage: str | None


def survey(path: Path, begin: Callable[[str], Callable[[int, int], None]]) -> Survey:
    """Read a log twice: for what it holds, then for how its channel behaves.

    Parameters
    ----------
    path : Path
    begin : callable
        Starts a progress bar; see `Bars.begin`.

    Raises
    ------
    LogError
        When the file is no log.
    OfflineError
        When it holds no bursts.
    """
    contents, damage = _contents(path, begin(f"{path.name}, contents"))
    size, first_ns, last_ns = contents.size, contents.first_ns, contents.last_ns
    if size is None or first_ns is None or last_ns is None or contents.measured is None:
        raise OfflineError(f"{path}: holds no bursts that can be read; `ris-tracker inspect` says what it holds")
    settings = _settings(path, contents.link)
    tones = None
    if settings is not None and settings.tones.count == size.tones:
        tones = (settings.tones.fft, settings.tones.first, settings.tones.spacing_khz)
    fft = tones[0] if tones else 1 << (size.tones + size.tones // 8).bit_length()
    first = tones[1] if tones else (fft - size.tones) // 2
    samples = _Samples(size, contents)
    samples.read(path, contents.link, begin(f"{path.name}, channel"))
    span = extent(contents.measured.profile, contents.measured.frames, samples.scaled(), fft)
    basis = None if span is None else delay_basis(fft, first, size.tones, span[1] - span[0] + 1, -span[0])
    samples.refine(basis)
    frame_s = (last_ns - first_ns) / 1e9 / max(contents.frames - 1, 1)
    return Survey(
        link=contents.link,
        size=size,
        settings=settings,
        tones=tones,
        fft=fft,
        first=first,
        extent=span,
        aging=samples.aging(basis, frame_s) if frame_s > 0 else None,
        frame_s=frame_s,
        interval_s=float(np.median(contents.interval_s)) if contents.interval_s else None,
        clock_s=float(np.max(np.abs(contents.arrival_s))),
        stretches=samples.stretches,
        warm=samples.plan.warm if samples.plan else 0,
        damage=damage,
    )


def _contents(path: Path, advanced: Callable[[int, int], None]) -> tuple[Contents, str | None]:
    """Take stock of the link with the most bursts, and tell where the log is not whole."""
    reader = LogReader(path)
    links: dict[str, Contents] = {}
    for record in reader:
        try:
            kind, link = parse_topic(record.topic)
        except Refused:
            continue
        if kind == "pilots":
            links.setdefault(link, Contents(link)).take(kind, record)
        advanced(reader.tell(), reader.size)
    return max(links.values(), key=lambda contents: contents.bursts, default=Contents("none")), reader.damage


def _settings(path: Path, link: str) -> Settings | None:
    text = LogReader(path).attachments.get("settings.toml")
    if text is None:
        return None
    try:
        settings = parse(text.decode(errors="replace"))
    except SettingsError:
        return None
    return settings if settings.link.name == link else None


class _Samples:
    """Responses kept from a second reading."""

    def __init__(self, size: Sizes, contents: Contents) -> None:
        self._size = size
        noise = [level.noise for level in contents.levels]
        self._noise = None if None in noise else np.array(noise, dtype=np.float64)
        self._stride = max(1, contents.bursts * size.receivers // MOST_SNAPSHOTS)
        self._most = MOST_REFERENCE // (8 * size.receivers * size.tones)
        commonest = contents.commonest
        self._reference = np.frombuffer(commonest[0], np.uint8) if commonest else None
        burst_bytes = contents.bytes // contents.bursts
        self.plan = plan(contents.bursts, size.frames, size.elements + 1, burst_bytes)
        self.stretches: list[list[Burst]] = [[] for _ in self.plan.starts] if self.plan else []
        self._snapshots: list[NDArray[np.complex64]] = []
        self._time_ns: list[int] = []
        self._counts: list[int] = []
        self._means: list[NDArray[np.complex64]] = []

    def read(self, path: Path, link: str, advanced: Callable[[int, int], None]) -> None:
        shape = Shape(self._size.elements, self._size.receivers, self._size.tones)
        reader = LogReader(path)
        count = 0
        for record in reader:
            if record.topic != f"pilots/{link}":
                continue
            try:
                burst = decode_pilots(record.body, link, shape)
            except Refused:
                continue
            if count % self._stride == 0:
                self._snapshots.append(burst.response[int(np.argmax(burst.keep))])
            stretch = self.plan.index(count) if self.plan else None
            if stretch is not None:
                self.stretches[stretch].append(burst)
            count += 1
            self._take_reference(burst)
            advanced(reader.tell(), reader.size)

    def scaled(self) -> Complex:
        """Single responses, in units of each receiver's noise amplitude, shape (S, K)."""
        if not self._snapshots:
            return np.zeros((0, self._size.tones), np.complex128)
        return np.concatenate([response * self._scale() for response in self._snapshots])

    def refine(self, basis: Complex | None) -> None:
        """Take the noise from outside the delay basis, where nothing that moves adds to it."""
        if basis is None or not self._snapshots or basis.shape[0] - basis.shape[1] < LEAST_OUTSIDE:
            return
        response = np.stack(self._snapshots).astype(np.complex128)
        self._noise = outside(response, response @ basis.conj())

    def aging(self, basis: Complex | None, frame_s: float) -> Aging | None:
        """Tell how fast the channel changes from the responses under the reference pattern."""
        if len(self._means) < 2 or self._noise is None or not (self._noise > 0).all():
            return None
        if basis is None:
            basis = np.eye(self._size.tones, dtype=np.complex128)
        order = np.argsort(self._time_ns, kind="stable")
        time_s = (np.asarray(self._time_ns)[order] - self._time_ns[int(order[0])]) / 1e9
        response = np.stack([self._means[index] * self._scale() @ basis.conj() for index in order])
        noise = 1.0 / np.asarray(self._counts, dtype=np.float64)[order]
        plain = measure_change(time_s, response, noise, turned=False)
        turned = measure_change(time_s, response, noise, turned=True)
        if plain is None or turned is None:
            return None
        return self._choose(plain, turned, basis.shape[1], frame_s)

    def _choose(self, plain: Change, turned: Change, delays: int, frame_s: float) -> Aging:
        unknowns = self._size.elements + 1
        memory, error = best_memory(plain, delays, unknowns, frame_s)
        other, less = best_memory(turned, delays, unknowns, frame_s)
        follow = less < WORTH_FOLLOWING * error and error > LEAST_ERROR * delays
        change, memory = (turned, other) if follow else (plain, memory)
        stale = float(change.at(np.array([frame_s * unknowns]))[0]) / (2.0 * change.power)
        return Aging(memory, coherence_time(change, memory), float(change.lag_s[-1]), stale, follow)

    def _scale(self) -> NDArray[np.float64]:
        noise = np.ones(self._size.receivers) if self._noise is None else np.maximum(self._noise, FLOOR)
        return np.asarray(1.0 / np.sqrt(noise))[:, None]

    def _take_reference(self, burst: Burst) -> None:
        if self._reference is None or len(self._means) >= self._most:
            return
        shown = np.flatnonzero((burst.patterns == self._reference).all(axis=1) & burst.keep)
        if not len(shown):
            return
        self._means.append(burst.response[shown].mean(axis=0))
        self._counts.append(len(shown))
        self._time_ns.append(burst.t_ns + round(float(shown.mean()) * burst.dt_ns))
