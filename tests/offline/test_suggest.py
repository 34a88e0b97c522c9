"""Suggest: settings derived from a log are those of the channel that made it, and each says why."""

import dataclasses
import itertools
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.special import j0

from tracker.assembly import configure
from tracker.engine.burst import Burst
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker
from tracker.logs import LogError, LogReader, LogWriter
from tracker.messages import decode_pilots, encode_pilots
from tracker.offline.aging import Change, best_memory, coherence_time, measure_change
from tracker.offline.errors import OfflineError
from tracker.offline.suggest import draft, suggest
from tracker.offline.trial import plan
from tracker.settings import Settings, parse

START = 1_780_000_000_000_000_000

SETTINGS = """
[link]
name = "yard"
receivers = 2
[panel]
columns = 3
rows = 5
tied = [[0, 1]]
stuck = { plus = [4] }
[tones]
fft = 256
first = 90
count = 64
spacing_khz = 15.0
[sockets]
publish = "tcp://127.0.0.1:7001"
[journal]
folder = "else\\\\where"
"""


@dataclass
class Yard:
    """A first-order Gauss-Markov channel, each coefficient with autocorrelation e^(−s/τ), and its recorded log."""

    elements: int = 15
    receivers: int = 2
    tones: int = 64
    fft: int = 128
    first: int = 32
    frames: int = 16
    bursts: int = 120
    interval_ns: int = 5_000_000
    noise: float = 1e-2
    tau_s: float = 1e9
    delays: tuple[float, float] = (0.0, 5.0)
    reference_every: int = 4
    offset_hz: float = 0.0
    late_ns: int = 1_000_000
    seed: int = 1

    def record(self, path: Path, *, settings: str | None = None, link: str = "yard") -> Path:
        rng = np.random.default_rng(self.seed)
        tone = (np.arange(self.first, self.first + self.tones) - self.fft // 2) / self.fft
        unknowns = self.elements + 1
        delay = rng.uniform(*self.delays, unknowns)
        delay[:2] = self.delays
        steering = np.exp(-2j * np.pi * delay[:, None] * tone)
        reference = rng.choice([-1, 1], self.elements)
        decay = np.exp(-self.interval_ns / 1e9 / self.tau_s)

        def circular(*shape: int) -> NDArray[np.complex128]:
            return np.asarray((rng.normal(size=shape) + 1j * rng.normal(size=shape)) / np.sqrt(2))

        gains = circular(unknowns, self.receivers) / np.sqrt(unknowns)
        attachments = {} if settings is None else {"settings.toml": settings.encode()}
        with LogWriter(path, attachments=attachments, clock_ns=lambda: START) as log:
            for seq in range(self.bursts):
                states = rng.choice([-1, 1], (self.frames, self.elements))
                if self.reference_every:
                    states[:: self.reference_every] = reference
                regressors = np.hstack([np.ones((self.frames, 1)), states])
                fresh = circular(unknowns, self.receivers) / np.sqrt(unknowns)
                gains = decay * gains + np.sqrt(1 - decay**2) * fresh
                response = np.einsum("bn,nr,nk->brk", regressors, gains, steering, optimize=True)
                start = seq * self.interval_ns
                when = (start + np.arange(self.frames) * 100_000) / 1e9
                response *= np.exp(2j * np.pi * self.offset_hz * when)[:, None, None]
                response += np.sqrt(self.noise) * circular(*response.shape)
                burst = Burst(
                    run=3,
                    seq=seq,
                    t_ns=START + start,
                    dt_ns=100_000,
                    elements=self.elements,
                    patterns=np.packbits(states > 0, axis=1, bitorder="little"),
                    response=response.astype(np.complex64),
                    keep=np.ones(self.frames, np.bool_),
                )
                log.add(f"pilots/{link}", encode_pilots(link, burst), burst.end_ns + self.late_ns, burst.t_ns)
                log.commit()
        return path


def suggested(path: Path) -> Settings:
    return parse(draft(path))


def marked(text: str) -> set[str]:
    """Tables in which something is marked for the user to correct."""
    tables = text.split("\n[")[1:]
    return {table.split("]")[0] for table in tables if "CORRECT THIS" in table}


def test_a_log_without_settings_gives_settings_that_can_be_used(tmp_path: Path) -> None:
    """Name, receivers, elements and tones come from the log; what it cannot tell is marked, and only that."""
    text = draft(Yard(bursts=50).record(tmp_path / "a.mcap", link="north-yard"))
    settings = parse(text)
    assert settings.link.name == "north-yard"
    assert settings.link.receivers == 2
    assert settings.panel.elements == 15
    assert (settings.panel.columns, settings.panel.rows) == (5, 3)
    assert settings.tones.count == 64
    assert settings.tones.first + 32 == settings.tones.fft // 2, "the band is laid around the carrier"
    assert marked(text) == {"panel", "tones"}
    configure(settings, tmp_path)


def test_every_derived_key_says_why(tmp_path: Path) -> None:
    """Each table but the link's has a comment, and the text is the same each time."""
    path = Yard(bursts=50).record(tmp_path / "a.mcap")
    text = draft(path)
    for table in text.split("\n[")[2:]:
        assert "\n# " in table
    assert max(len(line) for line in text.splitlines()) <= 100
    assert draft(path) == text


@pytest.mark.parametrize(
    ("delays", "noise"),
    [((0.0, 5.0), 1e-2), ((-3.0, 9.0), 1e-3), ((2.3, 7.6), 1e-2), ((-20.0, -12.0), 1e-2), ((-6.0, 1.5), 1e-1)],
)
def test_the_length_of_the_channel_is_found(tmp_path: Path, delays: tuple[float, float], noise: float) -> None:
    """Taps and `before` hold every path of the channel, with no more than three samples to spare at an end."""
    settings = suggested(Yard(bursts=100, delays=delays, noise=noise).record(tmp_path / "a.mcap"))
    assert settings.tones.fft == 128
    first, last = -settings.delay.before, settings.delay.taps - 1 - settings.delay.before
    assert min(delays[0], 0) - 3 <= first <= min(delays[0], 0)
    assert delays[1] <= last <= max(delays[1], 0) + 3


def test_delays_are_counted_in_samples_of_the_settings_in_the_log(tmp_path: Path) -> None:
    """With twice the fft around the same tones, the same delays are twice as many samples."""
    yard = Yard(bursts=100, fft=256, first=90, delays=(0.0, 10.0))
    text = draft(yard.record(tmp_path / "a.mcap", settings=SETTINGS))
    settings = parse(text)
    assert (settings.tones.fft, settings.tones.first, settings.tones.spacing_khz) == (256, 90, 15.0)
    assert 11 <= settings.delay.taps - settings.delay.before <= 14
    assert marked(text) == set()


def test_what_the_settings_in_the_log_say_is_kept(tmp_path: Path) -> None:
    """Layout, tied and stuck elements, tones and sockets are taken over; the rest is derived anew."""
    old = parse(SETTINGS)
    new = suggested(Yard(bursts=60, fft=256, first=90).record(tmp_path / "a.mcap", settings=SETTINGS))
    assert new.panel == old.panel
    assert new.tones == old.tones
    assert new.sockets == old.sockets
    assert new.journal == old.journal
    assert new.delay != old.delay


def test_settings_of_other_sizes_are_not_taken_over(tmp_path: Path) -> None:
    """Settings in the log that do not fit its bursts are no help: the layout and tones are marked again."""
    wrong = SETTINGS.replace("rows = 5", "rows = 6").replace("count = 64", "count = 63")
    text = draft(Yard(bursts=60).record(tmp_path / "a.mcap", settings=wrong))
    assert marked(text) == {"panel", "tones"}
    assert parse(text).tones.count == 64


@pytest.mark.parametrize("q", [1e-6, 1e-4, 1e-2])
@pytest.mark.parametrize("unknowns", [8, 65])
def test_the_best_memory_is_the_textbook_optimum_for_a_random_walk(q: float, unknowns: int) -> None:
    """λ = 1 − √(tr(Q R) / (M σ²)) (Haykin, Adaptive Filter Theory, from memory) for steps of variance q, σ² = 1."""
    frame_s = 1e-3
    trace = q * unknowns
    lags = np.geomspace(frame_s, 1e3, 100)
    change = Change(lags, trace * lags / frame_s, power=1e9)
    memory, error = best_memory(change, delays=1, unknowns=unknowns, frame_s=frame_s)
    forgetting = 1.0 - np.sqrt(trace / unknowns)
    assert memory == pytest.approx(max(frame_s / (1.0 - forgetting), unknowns * frame_s), rel=0.05)
    assert error == pytest.approx(unknowns * frame_s / (2 * memory) + trace * memory / frame_s / 2, rel=0.02)


def test_change_is_measured_as_clarkes_model_says() -> None:
    """Isotropic scattering: the autocorrelation is J0(2π f s) (Clarke 1968), values by scipy.special.j0."""
    rng = np.random.default_rng(2)
    doppler, frame_s, moments, paths, noise = 5.0, 1e-3, 4096, 64, 0.3
    time = np.asarray(np.arange(moments) * frame_s, dtype=np.float64)
    angle, phase = rng.uniform(0, 2 * np.pi, (2, 40, paths))
    turns = 2 * np.pi * doppler * np.cos(angle)
    clean = np.exp(1j * (turns[..., None] * time + phase[..., None])).sum(axis=1).T
    heard = clean + np.sqrt(noise / 2) * (rng.normal(size=(*clean.shape, 2)) @ np.array([1, 1j]))
    change = measure_change(time, heard[:, None, :], np.full(moments, noise), turned=False)
    assert change is not None
    assert change.power == pytest.approx(40 * paths, rel=0.05)
    for lag in (0.016, 0.032, 0.064):
        wanted = 2 * (1 - j0(2 * np.pi * doppler * lag))
        assert change.at(np.array([lag]))[0] / change.power == pytest.approx(wanted, rel=0.1)


def test_coherence_time_inverts_the_gauss_markov_law() -> None:
    """S(s) = 2 P (1 − e^(−s/τ)) gives τ back from any lag; a channel that stands still gives a bound."""
    lags = np.geomspace(1e-3, 10.0, 200)
    change = Change(lags, 2 * 7.0 * (1 - np.exp(-lags / 0.25)), power=7.0)
    for memory in (0.002, 0.05, 0.4):
        assert coherence_time(change, memory) == pytest.approx(0.25, rel=0.02)
    still = Change(lags, np.zeros_like(lags), power=7.0)
    assert coherence_time(still, 1.0) == pytest.approx(100.0)


@pytest.mark.parametrize("tau_s", [0.05, 0.4])
def test_the_time_constant_is_that_of_the_channel(tmp_path: Path, tau_s: float) -> None:
    """For coefficients with autocorrelation e^(−s/τ), the model behind `resetting`, about τ comes out, rather less."""
    path = Yard(bursts=200, tau_s=tau_s, noise=0.1).record(tmp_path / "a.mcap")
    assert 0.4 * tau_s < suggested(path).estimator.time_constant_ms / 1e3 < 1.5 * tau_s


def test_a_log_too_short_to_try_on_shows_its_pace_by_the_reference(tmp_path: Path) -> None:
    """With too few bursts to work off, the response under the recurring pattern tells how fast the channel changes."""
    text = draft(Yard(receivers=8, elements=63, bursts=27, tau_s=0.05).record(tmp_path / "a.mcap"))
    assert "response under the commonest pattern" in " ".join(text.replace("#", " ").split())
    assert marked(text) == {"panel", "tones"}
    assert parse(text).estimator.time_constant_ms == pytest.approx(50.0, rel=0.5)


@pytest.mark.parametrize(
    ("forgetting", "tau_s", "noise"),
    [("resetting", 0.3, 1e-2), ("resetting", 5.0, 1.0), ("exponential", 0.3, 1.0), ("exponential", 5.0, 1.0)],
)
def test_the_estimator_errs_least_near_the_suggested_time_constant(
    tmp_path: Path, forgetting: str, tau_s: float, noise: float
) -> None:
    """Over three decades of time constants the engine predicts no better than with the one suggested, within 10 %."""
    yard = Yard(bursts=150, tau_s=tau_s, noise=noise, receivers=1)
    kind = SETTINGS.replace("receivers = 2", "receivers = 1") + f'\n[estimator]\nforgetting = "{forgetting}"\n'
    path = yard.record(tmp_path / "a.mcap", settings=kind.replace("256", "128").replace("90", "32"))
    settings = suggested(path)
    assert settings.estimator.forgetting == forgetting
    best = min(prediction_error(path, settings, tau) for tau in np.geomspace(0.02, 20.0, 10))
    assert prediction_error(path, settings, settings.estimator.time_constant_ms / 1e3) < 1.1 * best


def prediction_error(path: Path, settings: Settings, time_constant_s: float) -> float:
    tracker = Tracker(dataclasses.replace(configure(settings, path.parent), time_constant_s=time_constant_s))
    tracker.hold()
    errors = []
    for record in itertools.islice(LogReader(path), 150):
        burst = decode_pilots(record.body, "yard", None)
        tracker.admit(burst, burst.end_ns)
        errors.append(tracker.advance([burst], Steps(0)).error)
    return float(np.mean(errors[30:]))


def test_a_channel_too_fast_to_sound_is_told(tmp_path: Path) -> None:
    """When much changes while every element is sounded once, the text says what would help."""
    text = draft(Yard(elements=63, tau_s=0.05).record(tmp_path / "a.mcap"))
    assert "changes before every element is sounded" in " ".join(text.replace("#", " ").split())
    calm = draft(Yard(elements=63, tau_s=10.0).record(tmp_path / "b.mcap"))
    assert "changes before every element" not in " ".join(calm.replace("#", " ").split())


@pytest.mark.parametrize(("offset_hz", "phase"), [(0.0, False), (30.0, True)])
def test_a_turning_phase_is_to_be_followed(tmp_path: Path, offset_hz: float, phase: bool) -> None:
    """An oscillator 30 Hz off changes the whole response at once; then following is suggested, else not."""
    yard = Yard(tau_s=1.0, offset_hz=offset_hz, noise=1e-3)
    assert suggested(yard.record(tmp_path / "a.mcap")).follow.phase is phase


@pytest.mark.parametrize(
    ("interval_ns", "every", "budget_ms"), [(5_000_000, 1, 2.5), (500_000, 4, 1.0), (10**9, 1, 100.0)]
)
def test_the_budget_follows_from_the_distance_of_bursts(
    tmp_path: Path, interval_ns: int, every: int, budget_ms: float
) -> None:
    """Half of the time between refreshes, at most every 2 ms and at most 100 ms."""
    yard = Yard(frames=4, bursts=40, interval_ns=interval_ns, reference_every=2)
    refresh = suggested(yard.record(tmp_path / "a.mcap")).refresh
    assert refresh.every_bursts == every
    assert refresh.budget_ms == pytest.approx(budget_ms)


def test_a_log_without_repeats_shows_its_pace_when_tried(tmp_path: Path) -> None:
    """No pattern need recur for time constants to be tried."""
    text = draft(Yard(elements=63, reference_every=0, tau_s=0.1, bursts=100).record(tmp_path / "a.mcap"))
    assert "estimator" not in marked(text)
    assert 40.0 < parse(text).estimator.time_constant_ms < 150.0


def test_a_short_log_without_repeats_does_not_show_its_pace(tmp_path: Path) -> None:
    """Too few bursts to try on, and no recurring pattern: the time constant is the default, and marked."""
    text = draft(Yard(elements=63, reference_every=0, bursts=20).record(tmp_path / "a.mcap"))
    assert "estimator" in marked(text)
    assert parse(text).estimator.time_constant_ms == 500.0


@pytest.mark.parametrize("tones", [1, 4])
def test_a_few_tones_do_not_show_the_length_of_the_channel(tmp_path: Path, tones: int) -> None:
    """Too few tones to resolve delays: what fits the format is given, and marked."""
    text = draft(Yard(tones=tones, first=60, bursts=40).record(tmp_path / "a.mcap"))
    assert "delay" in marked(text)
    assert parse(text).tones.count == tones


def test_one_burst_is_enough_to_start_from(tmp_path: Path) -> None:
    """A log of a single burst gives settings, with more marks."""
    text = draft(Yard(bursts=1).record(tmp_path / "a.mcap"))
    assert {"estimator", "refresh"} <= marked(text)
    assert parse(text).panel.elements == 15


def test_a_clock_that_is_far_off_is_allowed_for(tmp_path: Path) -> None:
    """Bursts that bear times 90 s away from their arrival would be refused by default; the clock's error is named."""
    text = draft(Yard(bursts=5, late_ns=90 * 10**9).record(tmp_path / "a.mcap"))
    assert parse(text).link.clock_skew_s == pytest.approx(180.0)
    assert "Setting the controller's clock" in text


def test_the_link_with_the_most_bursts_is_taken(tmp_path: Path) -> None:
    """A log of two links gives settings for the busier one."""
    path = tmp_path / "both.mcap"
    with LogWriter(path, clock_ns=lambda: START) as log:
        for link, bursts in (("dock", 5), ("yard", 9)):
            for record in LogReader(Yard(bursts=bursts).record(tmp_path / f"{link}.mcap", link=link)):
                log.add(record.topic, record.body, record.log_time_ns, record.publish_time_ns)
    assert suggested(path).link.name == "yard"


def test_a_damaged_log_serves_as_far_as_it_goes(tmp_path: Path) -> None:
    """A cut log gives settings from what is whole, and they say so; of a whole log they say nothing."""
    path = Yard(bursts=60).record(tmp_path / "a.mcap")
    words = "# The log is not whole, and only what can be read of it counts: byte "
    assert words not in draft(path)
    path.write_bytes(path.read_bytes()[:-200_000])
    assert suggested(path).panel.elements == 15
    assert words in draft(path)


def test_the_settings_are_printed(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Standard output holds nothing but the settings, so that it can be sent to a file."""
    path = Yard(bursts=20).record(tmp_path / "a.mcap")
    assert suggest(path, progress=False) == 0
    out, err = capsys.readouterr()
    assert out == draft(path)
    assert err == ""


def test_what_cannot_be_done_is_one_line(tmp_path: Path) -> None:
    """No log, a log without bursts, and a surface that no layout fits are the user's mistakes."""
    with pytest.raises(LogError, match="there is no such file"):
        draft(tmp_path / "nowhere.mcap")
    with LogWriter(tmp_path / "empty.mcap", clock_ns=lambda: START) as log:
        log.add("pilots/yard", b"\xc0", START, START)
    with pytest.raises(OfflineError, match="holds no bursts"):
        draft(tmp_path / "empty.mcap")
    long = Yard(elements=4099, tones=4, first=60, bursts=2, frames=2).record(tmp_path / "long.mcap")
    with pytest.raises(OfflineError, match="4099 elements cannot lie"):  # a prime
        draft(long)


def test_the_work_of_trying_is_bounded() -> None:
    """Stretches lie within the log and apart; fewer are taken as the work grows, and none when it is too much."""
    stretches = plan(bursts=1000, frames=64, unknowns=257, burst_bytes=70_000)
    assert stretches is not None
    length = stretches.warm + stretches.counted
    assert stretches.warm * 64 >= 2 * 257, "the estimate has seen every element twice before its errors count"
    assert [stretches.index(start) for start in stretches.starts] == [0, 1, 2]
    assert stretches.starts[-1] + length == 1000
    assert stretches.index(stretches.starts[0] + length) is None
    larger = plan(bursts=1000, frames=64, unknowns=1025, burst_bytes=70_000)
    assert larger is not None
    assert len(larger.starts) < 3
    assert plan(bursts=10**6, frames=64, unknowns=4097, burst_bytes=70_000) is None
    assert plan(bursts=10, frames=64, unknowns=257, burst_bytes=70_000) is None
