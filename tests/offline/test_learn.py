"""Learning a basis: from simulated logs, whose truth is known, and from logs that nothing can be learned from."""

import base64
import struct
import zlib
from dataclasses import dataclass, replace
from hashlib import sha256
from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker import __version__
from tracker.assembly import configure, shape
from tracker.basis_file import LearnedBasis, unpack_basis
from tracker.cli import entry
from tracker.engine.estimation.aperture import Columns
from tracker.logs import LogReader, LogWriter
from tracker.offline.recorded import Plan, take_stock
from tracker.settings import SettingsError, parse
from tracker.simulation.closed_loop import EngineInLoop, turns
from tracker.simulation.config import ToneGrid
from tracker.simulation.impairments import Oscillator
from tracker.simulation.motion import Waypoints
from tracker.simulation.record import record
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import Scenario, lane, yard

START_NS = 1_750_000_000_000_000_000
SECONDS = 0.3
BURSTS_PER_S = 437.5  # 28 000 frames/s in bursts of 64


@dataclass(frozen=True, slots=True)
class Pass:
    """A recorded pass of a carrier, and what is true of it."""

    log: Path
    settings: str
    testbed: Testbed

    def responses(self) -> NDArray[np.complex128]:
        """True responses of the elements along the pass, side by side, shape (64, n)."""
        times = np.linspace(0.05, SECONDS, 30)
        return np.concatenate([self.testbed.scene.truth(time)[1].reshape(64, -1)[:, ::4] for time in times], axis=1)


def drive(folder: Path, snr_db: float, seconds: float = SECONDS) -> Pass:
    """Record a carrier that drives at 1 m/s past 8 × 8 elements, its oscillator 150 Hz off, the tracker in the loop."""
    scene = yard((Waypoints(lane(0.0, 2.0), 1.0),), shadow_db=42.0, snr_db=snr_db, columns=8, rows=8)
    terminals = tuple(replace(one, oscillator=Oscillator(150.0)) for one in scene.terminals)
    scene = replace(scene, tones=ToneGrid(fft=64, first=16, count=32, spacing_hz=625e3), terminals=terminals)
    config = TestbedConfig(scene)
    scenario = Scenario("pass", "a carrier drives by", config, BURSTS_PER_S, 100.0, follow_phase=True)
    text = scenario.settings()
    testbed = Testbed(config, seed=4, start_ns=START_NS)
    log = folder / "pass.mcap"
    loop = turns(testbed, START_NS, BURSTS_PER_S, round(seconds * BURSTS_PER_S), EngineInLoop(parse(text)))
    record(loop, log, "yard", text)
    return Pass(log, text, testbed)


def share(columns: NDArray[np.complex128], responses: NDArray[np.complex128]) -> float:
    """Share of the energy of responses that lies in orthonormal columns."""
    inside = np.linalg.norm(columns.conj().T @ responses) ** 2
    return float(inside / np.linalg.norm(responses) ** 2)


@pytest.fixture(scope="module")
def clear(tmp_path_factory: pytest.TempPathFactory) -> Pass:
    """A pass with hardly any noise."""
    return drive(tmp_path_factory.mktemp("clear"), snr_db=40.0)


@pytest.fixture(scope="module")
def noisy(tmp_path_factory: pytest.TempPathFactory) -> Pass:
    """A pass at 6 dB a tone under random patterns."""
    return drive(tmp_path_factory.mktemp("noisy"), snr_db=6.0)


def learn(one: Pass, *more: str) -> LearnedBasis:
    """Learn through the command line."""
    out = one.log.with_name("basis.npz")
    assert entry(["learn", str(one.log), "--out", str(out), "--quiet", *more]) == 0
    return unpack_basis(out.read_bytes())


def test_without_noise_the_true_responses_lie_in_the_columns(clear: Pass) -> None:
    """At 40 dB a few columns hold all of the simulator's true responses but the last thousandth of their energy."""
    basis = learn(clear)
    true = clear.responses()
    assert basis.columns.shape[1] <= 32
    assert share(basis.columns, true) > 0.999
    # As many columns of the truth itself, its leading singular vectors, are the best there can be.
    best = np.linalg.svd(true, full_matrices=False)[0][:, :4]
    assert share(basis.columns[:, :4], true) > share(best, true) - 0.002


def test_what_the_columns_hold_is_told_right_in_noise(noisy: Pass) -> None:
    """The share of energy told is that of the simulator's true responses, within three standard deviations."""
    for size in ("1", "2", "8"):
        basis = learn(noisy, "--size", size)
        assert basis.columns.shape == (64, int(size))
        assert 0.001 < basis.held_deviation < 0.03
        assert abs(basis.held - share(basis.columns, noisy.responses())) < 3.0 * basis.held_deviation


def test_held_out_frames_are_predicted_better_than_element_by_element(noisy: Pass) -> None:
    """The number of columns chosen predicts about as well as the best of those tried, and better than all elements."""
    basis = learn(noisy)
    chosen = basis.errors[basis.sizes.index(basis.columns.shape[1])]
    assert 1.0 < chosen < basis.followed_error
    assert chosen < min(basis.errors) * 1.01
    assert share(basis.columns, noisy.responses()) > 0.97


def test_the_file_says_what_it_rests_on(noisy: Pass) -> None:
    """Logs by name and SHA-256 (hashlib), their span of time, settings and version; plain NumPy reads it."""
    basis = learn(noisy, "--size", "4")
    assert basis.logs == ("pass.mcap",)
    assert basis.sha256 == (sha256(noisy.log.read_bytes()).hexdigest(),)
    assert basis.settings == noisy.settings
    assert basis.version == __version__
    assert basis.panel == (8, 8)
    assert basis.span_ns[0] == START_NS
    assert basis.span_ns[1] == pytest.approx(START_NS + SECONDS * 1e9, abs=1e7)
    with np.load(noisy.log.with_name("basis.npz"), allow_pickle=False) as file:
        np.testing.assert_array_equal(file["columns"], basis.columns)
        np.testing.assert_allclose(basis.columns.conj().T @ basis.columns, np.eye(4), atol=1e-9)


def test_learning_twice_gives_the_same_bytes(noisy: Pass) -> None:
    """No clock and no chance of this machine goes into the file."""
    learn(noisy, "--size", "4")
    before = noisy.log.with_name("basis.npz").read_bytes()
    learn(noisy, "--size", "4")
    assert noisy.log.with_name("basis.npz").read_bytes() == before


def test_the_tracker_runs_in_the_basis(noisy: Pass) -> None:
    """Settings that name the file give an engine of so many columns, and no more than are asked for."""
    learn(noisy, "--size", "6")
    for size, wanted in ((64, 6), (4, 4)):
        text = f'{noisy.settings}\n[aperture]\nbasis = "learned"\nfile = "basis.npz"\nsize = {size}\n'
        config = configure(parse(text), noisy.log.parent)
        assert isinstance(config.aperture, Columns)
        assert config.aperture.size == wanted
        assert config.aperture.held is not None
        loop = EngineInLoop(parse(text), noisy.log.parent)
        made = Testbed(noisy.testbed.config, seed=4, start_ns=START_NS)
        last = list(turns(made, START_NS, BURSTS_PER_S, 30, loop))[-1]
        assert any(np.mean(getattr(event, "innovation", (9.0,))) < 1.3 for event in last.events)


def test_the_settings_may_fix_the_number_of_columns(noisy: Pass, tmp_path: Path) -> None:
    """`aperture.size` in the settings counts, unless --size says otherwise."""
    path = tmp_path / "yard.toml"
    path.write_text(f"{noisy.settings}\n[aperture]\nsize = 3\n", encoding="utf-8")
    assert learn(noisy, "--settings", str(path)).columns.shape == (64, 3)
    assert learn(noisy, "--settings", str(path), "--size", "2").columns.shape == (64, 2)


def test_the_picture_shows_the_columns_on_the_panel(noisy: Pass, capsys: pytest.CaptureFixture[str]) -> None:
    """The SVG is well-formed XML; each image in it is a PNG of the panel whose chunks have the right CRC (zlib)."""
    basis = learn(noisy, "--size", "3")
    picture = noisy.log.with_name("basis.svg")
    assert str(picture) in capsys.readouterr().out
    images = ElementTree.parse(picture).findall(".//{http://www.w3.org/2000/svg}image")
    assert len(images) == 3
    for number, image in enumerate(images):
        pixels = decoded(base64.b64decode(image.attrib["href"].removeprefix("data:image/png;base64,")))
        assert pixels.shape == (8, 8, 3)
        # Element i is column i // rows, row i % rows, and row 0 is at the bottom of the picture.
        values = np.abs(basis.columns[:, number]).reshape(8, 8).T[::-1]
        bright = pixels.max(axis=2)
        assert np.unravel_index(int(bright.argmax()), (8, 8)) is not None
        assert np.corrcoef(values.ravel(), bright.ravel().astype(float))[0, 1] > 0.8


def decoded(data: bytes) -> NDArray[np.uint8]:
    """Pixels of an unfiltered PNG of 8-bit colours, its chunks checked."""
    assert data[:8] == b"\x89PNG\r\n\x1a\n"
    chunks, place = {}, 8
    while place < len(data):
        (length,) = struct.unpack_from(">I", data, place)
        kind, body = data[place + 4 : place + 8], data[place + 8 : place + 8 + length]
        assert struct.unpack_from(">I", data, place + 8 + length)[0] == zlib.crc32(kind + body)
        chunks[kind], place = body, place + 12 + length
    width, height, depth, colour = struct.unpack_from(">IIBB", chunks[b"IHDR"])
    assert (depth, colour) == (8, 2)
    lines = np.frombuffer(zlib.decompress(chunks[b"IDAT"]), np.uint8).reshape(height, 1 + 3 * width)
    assert not lines[:, 0].any()
    return lines[:, 1:].reshape(height, width, 3)


def rewritten(one: Pass, path: Path, attachments: dict[str, bytes], bursts: int) -> Path:
    """The first bursts of a pass in a log with other attachments."""
    with LogWriter(path, attachments=attachments, clock_ns=lambda: 0) as writer:
        for record_, _ in zip((r for r in LogReader(one.log) if r.topic == "pilots/yard"), range(bursts), strict=False):
            writer.add(record_.topic, record_.body, record_.log_time_ns, record_.publish_time_ns)
            writer.commit()
    return path


def test_a_damaged_log_serves_as_far_as_it_goes_and_says_so(
    noisy: Pass, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Of a cut log what is whole is learned from, and the last line says where it was cut."""
    log, out = tmp_path / "cut.mcap", tmp_path / "basis.npz"
    log.write_bytes(noisy.log.read_bytes()[:-200_000])
    assert entry(["learn", str(log), "--out", str(out), "--size", "1", "--quiet"]) == 0
    told = capsys.readouterr().out
    assert told.startswith("1 column for 64 elements")
    assert told.splitlines()[-1].startswith(f"damage: {log}: byte ")
    assert out.exists()


@pytest.mark.parametrize(
    ("change", "bursts", "words"),
    [
        (None, 5, "holds no settings; give them with --settings"),
        (("", ""), 2, "too short: 128 frames, at least 195 are needed for 64 elements; record more"),
        (("", ""), 0, "holds no bursts of link 'yard'"),
        (('name = "yard"', 'name = "quay"'), 5, "holds no bursts of link 'quay'"),
        (("columns = 8", "columns = 9"), 5, "its bursts do not fit the settings: "),
        (("receivers = 1", "receivers = 2"), 5, "its bursts do not fit the settings: "),
    ],
)
def test_logs_that_nothing_can_be_learned_from(
    noisy: Pass,
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    change: tuple[str, str] | None,
    bursts: int,
    words: str,
) -> None:
    """One line that names the log and says why; nothing is written."""
    attachments = {} if change is None else {"settings.toml": noisy.settings.replace(*change).encode()}
    log = rewritten(noisy, tmp_path / "short.mcap", attachments, bursts)
    assert entry(["learn", str(log), "--out", str(tmp_path / "basis.npz"), "--quiet"]) == 2
    error = capsys.readouterr().err
    assert error.startswith(f"ris-tracker learn: {log}: {words}")
    assert error.count("\n") == 1
    assert not (tmp_path / "basis.npz").exists()


@pytest.mark.parametrize(
    ("out", "more", "words"),
    [
        ("basis.txt", [], "the name of a basis must end in .npz"),
        ("basis.npz", ["--size", "64"], "64 columns for 64 elements: a basis must have fewer columns than elements"),
        ("nowhere/basis.npz", ["--size", "2"], "cannot be written: No such file or directory"),
    ],
)
def test_mistakes_in_the_arguments(
    noisy: Pass, tmp_path: Path, capsys: pytest.CaptureFixture[str], out: str, more: list[str], words: str
) -> None:
    """One line."""
    assert entry(["learn", str(noisy.log), "--out", str(tmp_path / out), "--quiet", *more]) == 2
    error = capsys.readouterr().err
    assert words in error
    assert error.count("\n") == 1


def test_of_long_logs_parts_are_taken(noisy: Pass) -> None:
    """With work for a third of the frames, four parts spread over the log are taken, each without gaps."""
    settings = parse(noisy.settings)
    log = take_stock(noisy.log, "yard", shape(settings), lambda done, size: None)
    assert (log.bursts, log.frames) == (round(SECONDS * BURSTS_PER_S), 64)
    plan = Plan([log], log.bursts * 64 // 3)
    taken = [number for number in range(log.bursts) if plan.part(log, number) is not None]
    assert len(taken) == pytest.approx(log.bursts / 3, abs=4)
    parts = np.array([plan.part(log, number) for number in taken])
    assert sorted(set(parts.tolist())) == [0, 1, 2, 3]
    assert int(np.count_nonzero(np.diff(taken) > 1)) == 3
    pieces = list(plan.pieces("yard", shape(settings), lambda name: lambda done, size: None))
    assert [piece.number for piece in pieces] == list(range(len(taken)))
    assert [piece.part for piece in pieces] == parts.tolist()
    assert pieces[-1].frames.time_ns[-1] > START_NS + 0.8 * SECONDS * 1e9


@pytest.mark.parametrize(
    ("spoil", "words"),
    [
        (lambda data: data[: len(data) // 2], "is not a basis that `ris-tracker learn` wrote, or damaged"),
        (lambda data: b"", "is not a basis that `ris-tracker learn` wrote, or damaged"),
        (lambda data: b"PK\x03\x04" + bytes(100), "is not a basis that `ris-tracker learn` wrote, or damaged"),
        (lambda data: None, "there is no such file; `ris-tracker learn` writes it from a log"),
    ],
)
def test_a_file_that_is_no_basis_is_the_users_mistake(noisy: Pass, tmp_path: Path, spoil, words: str) -> None:  # type: ignore[no-untyped-def]
    """One line that names key and file."""
    learn(noisy, "--size", "4")
    spoilt = spoil(noisy.log.with_name("basis.npz").read_bytes())
    if spoilt is not None:
        (tmp_path / "basis.npz").write_bytes(spoilt)
    text = f'{noisy.settings}\n[aperture]\nbasis = "learned"\nfile = "basis.npz"\n'
    with pytest.raises(SettingsError, match=r"^aperture.file: ") as caught:
        configure(parse(text), tmp_path)
    assert words in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_basis_of_another_panel_is_refused(noisy: Pass) -> None:
    """As many elements in another layout are another panel."""
    learn(noisy, "--size", "4")
    text = f'{noisy.settings}\n[aperture]\nbasis = "learned"\nfile = "basis.npz"\n'
    text = text.replace("columns = 8", "columns = 16").replace("rows = 8", "rows = 4")
    with pytest.raises(SettingsError, match=r"learned on a panel of 8 columns × 8 rows, .panel. has 16 × 4"):
        configure(parse(text), noisy.log.parent)
