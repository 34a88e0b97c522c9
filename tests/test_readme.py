"""The pages against the program: examples run, tables match the code, links and commands exist."""

import ast
import os
import re
import signal
import socket
import stat
import subprocess
import sys
import time
import tomllib
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import fields
from functools import cache
from importlib import import_module
from pathlib import Path
from typing import Any, get_args
from unittest.mock import Mock, create_autospec
from xml.etree import ElementTree

import msgpack
import numpy as np
import pytest
import zmq
from numpy.typing import NDArray
from pydantic import BaseModel
from rich.text import Text

from tracker.assembly import configure
from tracker.basis_file import LearnedBasis, pack_basis
from tracker.cli import COMMANDS
from tracker.engine.burst import Burst
from tracker.engine.detection.changes import Verdict, judge
from tracker.engine.detection.evidence import Evidence
from tracker.engine.detection.reaction import react
from tracker.engine.estimation.estimator import Estimator
from tracker.engine.events import Alarm, Cause, Mode, Pattern, Plan, State
from tracker.engine.health.faults import FAULTS, Finding
from tracker.engine.publishing.report import Stand, elements_alarm, gap_alarm, lock_alarm
from tracker.engine.refusal import Reason
from tracker.messages import Verb, encode_alarm, encode_pattern, encode_pilots, encode_plan, encode_state
from tracker.service.notices import Notices
from tracker.settings import Settings, SettingsError, parse

ROOT = Path(__file__).resolve().parent.parent
PAGES = {
    name: (ROOT / name).read_text(encoding="utf-8")
    for name in ("README.md", "tracker/messages/README.md", "DEVELOPERS.md")
}
README, MESSAGES = PAGES["README.md"], PAGES["tracker/messages/README.md"]
PATIENCE_S = 60.0
UNITS = {"_s": "s", "_ms": "ms", "_us": "µs", "_khz": "kHz", "_ghz": "GHz", "_mb": "MB", "_hours": "h"}
UNITS |= {"_mm": "mm", "_m": "m", "_db": "dB"}


def blocks(page: str, language: str) -> list[str]:
    """Code blocks of a page."""
    return re.findall(rf"^```{language}\n(.*?)^```$", page, re.MULTILINE | re.DOTALL)


def section(heading: str) -> str:
    """What stands under a heading that one page for users has, up to the next of any level."""
    found = [
        each[1]
        for page in (README, MESSAGES)
        for each in re.finditer(rf"^#+ {re.escape(heading)}\n(.*?)(?=^#|\Z)", page, re.MULTILINE | re.DOTALL)
    ]
    assert len(found) == 1, f"{len(found)} headings {heading!r}"
    return found[0]


def rows(heading: str) -> list[list[str]]:
    """Cells of the first table under a heading, without its head."""
    lines = section(heading).splitlines()
    first = next(number for number, line in enumerate(lines) if line.startswith("|---"))
    made = []
    for line in lines[first + 1 :]:
        if not line.startswith("|"):
            break
        made.append([cell.strip() for cell in re.split(r"(?<!\\)\|", line)[1:-1]])
    return made


def names(cell: str) -> list[str]:
    """What stands in backticks."""
    return re.findall(r"`([^`]+)`", cell)


(CONTROLLER,), (ASKING,) = blocks(README, "python"), blocks(MESSAGES, "python")
SETTINGS, REGION = blocks(README, "toml")


# Links and pictures


def without_code(page: str) -> str:
    """Take the code blocks out of a page."""
    return re.sub(r"^```.*?^```$", "", page, flags=re.MULTILINE | re.DOTALL)


def anchors(page: str) -> set[str]:
    """What a link may name of a page: its headings, as they are made into anchors."""
    headings = re.findall(r"^#+ (.+)$", without_code(page), re.MULTILINE)
    return {re.sub(r"[^\w\- ]", "", heading.lower()).replace(" ", "-") for heading in headings}


@pytest.mark.parametrize("page", PAGES)
def test_every_link_leads_somewhere(page: str) -> None:
    """Links and pictures name files of the checkout, and headings that the page has or the other page."""
    text = without_code(PAGES[page])
    targets = re.findall(r"\]\(([^)\s]+)\)|(?:src|srcset)=\"([^\"]+)\"", text)
    found = [link or picture for link, picture in targets]
    assert len(found) > 10
    for target in found:
        if target.startswith("https://"):
            continue
        path, _, anchor = target.partition("#")
        lead = (ROOT / page).parent / path if path else ROOT / page
        assert lead.exists(), target
        if anchor:
            assert anchor in anchors(lead.read_text(encoding="utf-8")), target


@pytest.mark.parametrize("picture", sorted((ROOT / "tools" / "pictures").glob("*.svg")), ids=lambda path: path.stem)
def test_pictures_are_whole_and_need_nothing_from_elsewhere(picture: Path) -> None:
    """Each is well-formed XML with a title, and names no other file or host; each exists for light and for dark."""
    text = picture.read_text(encoding="utf-8")
    root = ElementTree.fromstring(text)
    assert root.findtext("{http://www.w3.org/2000/svg}title")
    assert not re.search(r"https?://", text.replace("http://www.w3.org/2000/svg", ""))
    assert {ending.stem for ending in picture.parent.glob("*.svg")} == {
        f"{name}-{theme}" for name in ("live", "loop") for theme in ("light", "dark")
    }


def test_the_drawing_of_the_loop_is_the_one_that_its_script_makes(monkeypatch: pytest.MonkeyPatch) -> None:
    """Running the script again would change nothing."""
    monkeypatch.syspath_prepend(ROOT / "tools")
    loop, theme = import_module("pictures.loop"), import_module("pictures.theme")
    for each in theme.THEMES:
        drawn = ROOT / "tools" / "pictures" / f"loop-{each.name}.svg"
        assert drawn.read_text(encoding="utf-8") == loop.svg(each)


def test_a_screen_is_drawn_with_all_its_words(monkeypatch: pytest.MonkeyPatch) -> None:
    """Words of a screen are text in the picture; blocks are shapes, so no font decides how they join."""
    monkeypatch.syspath_prepend(ROOT / "tools")
    screen, theme = import_module("pictures.screen"), import_module("pictures.theme")
    root = ElementTree.fromstring(screen.svg(Text("rate & drift ███▄ <ok>\n──"), 30, 2, theme.DARK, "a test"))
    texts = [text.text for text in root.iter("{http://www.w3.org/2000/svg}text")]
    assert texts == ["rate & drift", "<ok>"]
    boxes = [float(box.get("width", "0")) for box in root.iter("{http://www.w3.org/2000/svg}rect")]
    assert boxes[1:] == [3 * screen.WIDE, screen.WIDE]
    assert len(list(root.iter("{http://www.w3.org/2000/svg}path"))) == 2


def test_the_map_of_files_is_the_one_that_its_script_makes(monkeypatch: pytest.MonkeyPatch) -> None:
    """A file that was added, removed or reworded is so in DEVELOPERS.md too; else run tools/make_map.py."""
    monkeypatch.syspath_prepend(ROOT / "tools")
    page = PAGES["DEVELOPERS.md"]
    assert import_module("make_map").with_map(page) == page, "run tools/make_map.py"
    for folder in ("tracker", "tools"):
        for path in (ROOT / folder).rglob("*.py"):
            if path.name != "__init__.py":
                assert f"({path.relative_to(ROOT).as_posix()})" in page


@pytest.mark.parametrize("page", PAGES)
def test_every_file_that_is_named_exists(page: str) -> None:
    """Paths in backticks are paths of the checkout."""
    named = re.findall(r"`((?:tracker|tools|tests|replay_logs|\.ci)/[\w./-]*)`", PAGES[page])
    assert named
    for path in named:
        assert (ROOT / path).exists(), path


def test_constants_stand_where_developers_are_sent() -> None:
    """Each constant in the table of the most consequential is given its value at the head of the file named."""
    table = PAGES["DEVELOPERS.md"].partition("## How numbers were chosen")[2]
    lines = [names(line) for line in table.splitlines() if line.startswith("| `")]
    assert len(lines) > 5
    for *constants, path in lines:
        text = (ROOT / path).read_text(encoding="utf-8")
        given = {name for heads in re.findall(r"^([A-Z_, ]+) = ", text, re.MULTILINE) for name in heads.split(", ")}
        assert set(constants) <= given, path


# Commands


@cache
def help_of(*command: str) -> str:
    """What a command says to --help."""
    done = subprocess.run(
        [sys.executable, *command, "--help"], cwd=ROOT, capture_output=True, text=True, timeout=60, check=False
    )
    assert done.returncode == 0, command
    return done.stdout


def help_for(words: list[str]) -> str | None:
    """Help that knows the options of a command line; None when its options are another program's."""
    match words:
        case ["ris-tracker", command, *_]:
            return help_of("-m", "tracker", command)
        case ["python", "-m", "tracker.simulation", command, *_]:
            return help_of("-m", "tracker.simulation", command)
        case ["tools/demo", *_]:
            return help_of("tools/demo.py")
        case ["tools/bench", *_]:
            return help_of("tools/benchmarks/run.py")
        case ["python", script, *_] if script.startswith("tools/"):
            return help_of(script)
        case ["tools/test", *_] | [_, "-m", "pytest", *_] | ["python", "-m", "pip", "install", "."]:
            return None
    raise AssertionError(f"not a command of this project: {words}")


@pytest.mark.parametrize(
    "line", [line for page in PAGES.values() for block in blocks(page, "sh") for line in block.splitlines()]
)
def test_commands_in_code_blocks_exist(line: str) -> None:
    """Scripts can be run, commands and options are known to their help, files under version control are there."""
    words = line.partition(" > ")[0].split()
    if words[0].startswith("tools/"):
        assert (ROOT / words[0]).stat().st_mode & stat.S_IXUSR
    text = help_for(words)
    for word in words[1:]:
        if word.startswith("--") and text is not None:
            assert word in text
        if word.startswith(("replay_logs/", "tests/", "tools/")):
            assert (ROOT / word.partition("::")[0]).exists()


def test_the_table_of_commands_is_complete() -> None:
    """One row a command, with options that its help knows."""
    table = {names(cells[0])[0].split()[1]: cells[1] for cells in rows("Commands")}
    assert set(table) == set(COMMANDS)
    for command, text in table.items():
        for option in re.findall(r"`(--[a-z]+)`", text):
            assert option in help_of("-m", "tracker", command)


# Tables against the code


def plain(schema: dict[str, Any]) -> dict[str, Any]:
    """Take the part of a JSON schema that is not null."""
    return next((part for part in schema.get("anyOf", []) if part.get("type") != "null"), schema)


def allowed(schema: dict[str, Any]) -> str | None:
    """Say in the words of the table what a JSON schema allows; None where the table uses words of its own."""
    values = schema.get("enum") or ([schema["const"]] if "const" in schema else None)
    if values:
        return ", ".join(f'`"{value}"`' for value in values)
    if schema.get("type") == "boolean":
        return "`true`, `false`"
    if schema.get("type") == "array" and schema.get("minItems") == schema.get("maxItems", 0):
        count, inner = schema["minItems"], schema["items"]
        return f"{count} numbers" if inner["type"] == "number" else f"{count} × {allowed(inner)}"
    if schema.get("exclusiveMinimum") == 0:
        return "above 0" + (f", at most {schema['maximum']:g}" if "maximum" in schema else "")
    if "minimum" in schema and "maximum" in schema:
        return f"{schema['minimum']} to {schema['maximum']}"
    return f"{schema['minimum']} or more" if "minimum" in schema else None


def toml(value: object) -> str:
    """Write a default as the table does."""
    if value is None or value in ([], {}):
        return "none"
    if isinstance(value, bool):
        return f"`{str(value).lower()}`"
    return f'`"{value}"`' if isinstance(value, str) else f"`{value!r}`"


def models(annotation: Any) -> list[type[BaseModel]]:
    """Tables of the file that an annotation is made of, such as `Site` for `Site | None` or `list[Site]`."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    return [model for part in get_args(annotation) for model in models(part)]


def keys(name: str, model: type[BaseModel]) -> Iterator[tuple[str, str | None, str, str | None]]:
    """Keys of a table and of the tables in it: key, unit, default, what is allowed."""
    properties = model.model_json_schema()["properties"]
    for key, inner in model.model_fields.items():
        default = "required" if inner.is_required() else toml(inner.get_default(call_default_factory=True))
        unit = next((unit for ending, unit in UNITS.items() if key.endswith(ending)), None)
        below = models(inner.annotation)
        may = f"tables `[[{name}.{key}]]`" if below else allowed(plain(properties[key]))
        yield f"`{name}.{key}`", unit, default, may
        for each in below:
            yield from keys(f"{name}.{key}", each)


def test_the_table_of_settings_is_the_settings() -> None:
    """Each key stands there once, in the order of the file, with its unit, its default and what is allowed."""
    table = rows("Settings")
    wanted: list[tuple[str, str | None, str, str | None]] = []
    for name, field in Settings.model_fields.items():
        (model,) = models(field.annotation)
        wanted += keys(name, model)
    assert [cells[0] for cells in table] == [key for key, *_ in wanted]
    for (key, unit, default, may), cells in zip(wanted, table, strict=True):
        assert len(cells) == 5, key
        assert (unit or cells[1], default, may or cells[3]) == (cells[1], cells[2], cells[3]), key
        assert cells[3], key
        assert len(cells[4]) > 10, key


@pytest.mark.parametrize("basis", ["elements", "tiles", "learned", "region"])
def test_each_basis_can_be_had_as_the_readme_says(basis: str, tmp_path: Path) -> None:
    """The table of bases names those that the settings allow, and each has the unknowns that it gives."""
    (row,) = (cells for cells in rows("Settings") if cells[0] == "`aperture.basis`")
    assert row[3] == ", ".join(cells[0] for cells in rows("Which basis"))
    (unknowns,) = (cells[1] for cells in rows("Which basis") if cells[0] == f'`"{basis}"`')
    text = f'{SETTINGS}\n[aperture]\nbasis = "{basis}"\n'
    if basis == "region":
        parts = re.split(r"(?m)^(?=\[panel\]|\[tones\])", SETTINGS)
        text = f"{parts[0]}{REGION}\n{parts[2]}"
    if basis == "learned":
        learned = LearnedBasis(
            columns=np.linalg.qr(np.random.default_rng(1).normal(size=(64, 5)) + 0j)[0],
            variances=np.ones(5),
            eigenvalues=np.ones(5),
            noise=0.1,
            panel=(8, 8),
            logs=(),
            sha256=(),
            span_ns=(0, 1),
            frames=1,
            settings="",
            version="",
            held=0.9,
            held_deviation=0.1,
            sizes=(5,),
            errors=(1.0,),
            followed="elements",
            followed_error=1.0,
        )
        (tmp_path / "basis.npz").write_bytes(pack_basis(learned))
        text += 'file = "basis.npz"\n'
    found = configure(parse(text), tmp_path).aperture
    told = {"N + 1": 64, "tiles + 1": 16, "columns kept + 1": 5, "`aperture.size` + 1": 16}
    assert (found.elements, found.size) == (64, told[unknowns])


@pytest.mark.parametrize(("basis", "missing"), [("learned", "aperture.file"), ("region", r"\[site\]")])
def test_a_basis_that_lacks_what_the_readme_asks_for_is_refused(basis: str, missing: str) -> None:
    """The error names the key or the table that the table of settings says it needs."""
    with pytest.raises(SettingsError, match=missing):
        configure(parse(f'{SETTINGS}\n[aperture]\nbasis = "{basis}"\n'), Path())


def kinds() -> dict[str, set[str]]:
    """Every kind of alarm that the program can send, each with the actions that it can name."""
    rng = np.random.default_rng(2)

    def draw(*shape: int) -> NDArray[np.complex128]:
        return rng.normal(size=shape).astype(np.complex128)

    frames, elements, tones, size = 24, 4, 12, 3
    states = np.sign(draw(frames, elements).real)
    z = np.ones((frames, elements))  # one column less than the elements, so that the basis can be wrong
    z[:, 1:] = states[:, : elements - 1]
    model = draw(elements, 1, size)
    verdict = judge(
        Evidence(
            outputs=np.tensordot(z, model, axes=1) + draw(frames, 1, size),
            regressors=z,
            states=states,
            model=model,
            elements=draw(elements, 1, size),
            prior=np.ones(elements),
            outside=draw(frames, 1, tones),
            basis=np.linalg.qr(draw(tones, size))[0],
            doubt=np.zeros((frames, frames)),
            time_s=np.arange(frames) / 1e3,
        )
    )
    mend = np.ones(1, np.complex128), np.ones(1, np.complex128)
    estimator = create_autospec(Estimator, instance=True)
    found = {kind: {react(estimator, Verdict(kind, "", 9.0, mend=mend))} for kind in (*verdict.scores, "unclear")}
    stand = Stand(1, 2, 3)
    alarms = [lock_alarm(0, 0.1, 0.3, stand), gap_alarm(1, 2, stand)]
    alarms += [elements_alarm((Finding(1, fault, 0.98, 0.99),), stand) for fault in FAULTS[1:]]
    for required in (True, False):
        notices = Notices(Mock(), required=required)
        for _ in range(8):
            notices.load(full=True)
        notices.clock("")
        notices.disk("")
        alarms += notices.take(1, 2)
    for alarm in alarms:
        found.setdefault(alarm.kind, set()).add(alarm.action)
    return found


def test_the_table_of_alarms_is_complete() -> None:
    """Every kind that can be sent has one row, with every action that it can name, and evidence and advice."""
    table = {names(cells[0])[0]: cells for cells in rows("Alarms")}
    assert len(table) == len(rows("Alarms"))
    sent_kinds = kinds()
    assert set(table) == set(sent_kinds)
    for kind, actions in sent_kinds.items():
        assert actions <= set(names(table[kind][3])), kind
        assert all(len(cells) > 0 for cells in table[kind]), kind


def sent() -> dict[str, dict[str, Any]]:
    """One message of each kind as it goes over the wire, unpacked by the library alone."""
    states = np.ones(8, np.int8)
    burst = Burst(1, 2, 3, 4, 8, np.zeros((1, 1), np.uint8), np.zeros((1, 1, 4), np.complex64), np.ones(1, np.bool_), 5)
    pattern = Pattern(1, 1, 2, 3, states, 1.0, 1.0, 1.0, 1.0, Cause.FIRST, 1)
    values: dict[str, Any] = {field.name: 1 for field in fields(State)}
    values |= {"mode": Mode.TRACKING, "noise": (1.0,), "innovation": (1.0,), "phase_rad": (0.0, 0.0), "faults": ()}
    state = State(**values)
    alarm = Alarm(1, 2, 3, 3, "channel", None, 1.0, 1.0, "", "none")
    plan = Plan(1, 2, 3, 8, np.zeros((1, 1), np.uint8), 0, 4, np.ones(1, np.bool_), 1.0)
    bodies = {
        "`pilots/LINK`: controller to tracker": encode_pilots("bench", burst),
        "`pattern/LINK`: tracker to controller": encode_pattern("bench", pattern, 1),
        "`plan/LINK`: tracker to controller": encode_plan("bench", plan),
        "`state/LINK`: one a burst": encode_state("bench", state, {}),
        "`alarm/LINK`": encode_alarm("bench", alarm),
    }
    return {heading: msgpack.unpackb(body) for heading, body in bodies.items()}


@pytest.mark.parametrize("heading", sent())
def test_tables_of_messages_name_the_keys_that_are_sent(heading: str) -> None:
    """Every key on the wire stands in the table, and no other."""
    told = [name for cells in rows(heading) for name in names(cells[0])]
    assert sorted(told) == sorted(sent()[heading])


def test_lists_of_words_on_the_wire_are_complete() -> None:
    """Reasons of refusal, verbs, causes and modes are those that the program knows."""
    assert [names(cells[0])[0] for cells in rows("Why a burst is refused")] == [str(reason) for reason in Reason]
    assert [names(cells[0])[0] for cells in rows("Control: REQ to REP")] == [str(verb) for verb in Verb]
    control = next(cells for cells in rows("Messages") if cells[0].startswith("[control]"))
    assert names(control[1]) == [str(verb) for verb in Verb]
    faults = next(cells for cells in rows("`state/LINK`: one a burst") if cells[0] == "`faults`")
    assert set(FAULTS[1:]) <= set(names(faults[2]))
    assert [name for cells in rows("Element health") for name in names(cells[0])] == list(FAULTS[1:])
    causes = next(cells for cells in rows("`pattern/LINK`: tracker to controller") if cells[0] == "`cause`")
    assert names(causes[2]) == [str(cause) for cause in Cause]
    modes = next(cells for cells in rows("`state/LINK`: one a burst") if cells[0] == "`mode`")
    assert names(modes[2]) == [str(mode) for mode in Mode]
    assert [names(cells[0])[0] for cells in rows("Modes")] == [str(mode) for mode in Mode]


def test_every_dependency_is_accounted_for() -> None:
    """The table names the packages of pyproject.toml, and no other."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    wanted = [*project["dependencies"], *project["optional-dependencies"]["test"]]
    told = [name for cells in rows("Dependencies") for name in names(cells[0])]
    assert sorted(told) == sorted(re.split(r"[<>=~!\[; ]", each)[0] for each in wanted)


# The example


def test_the_example_needs_little() -> None:
    """The controller is short, and imports pyzmq, msgpack, NumPy and the standard library alone."""
    imported = {
        alias.name for node in ast.walk(ast.parse(CONTROLLER)) if isinstance(node, ast.Import) for alias in node.names
    }
    assert imported == {"itertools", "time", "msgpack", "numpy", "zmq"}
    assert "from " not in re.sub(r"#.*", "", CONTROLLER)
    assert len(CONTROLLER.splitlines()) <= 30


@pytest.fixture
def ports() -> dict[str, str]:
    """Endpoints of the example, each with a free port in its place."""
    taken = [socket.create_server(("127.0.0.1", 0)) for _ in range(3)]
    free = {
        f"tcp://127.0.0.1:{port}": f"tcp://127.0.0.1:{each.getsockname()[1]}"
        for port, each in zip((5600, 5601, 5602), taken, strict=True)
    }
    for each in taken:
        each.close()
    return free


@contextmanager
def running(*command: str | Path, folder: Path) -> Iterator[subprocess.Popen[bytes]]:
    """Run a program; it has ended when this is left."""
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "OPENBLAS_NUM_THREADS": "1"}
    with (folder / "said.txt").open("ab") as said:
        process = subprocess.Popen(
            [sys.executable, *map(str, command)], cwd=folder, env=environment, stdout=said, stderr=subprocess.STDOUT
        )
    try:
        yield process
    finally:
        process.kill()
        process.wait()


def states_until(endpoint: str, bursts: int, service: subprocess.Popen[bytes]) -> list[dict[str, Any]]:
    """States of the link as a listener of its own hears them, until so many bursts are worked off."""
    heard: list[dict[str, Any]] = []
    until = time.monotonic() + PATIENCE_S
    with zmq.Context() as context, context.socket(zmq.SUB) as listener:
        listener.connect(endpoint)
        listener.subscribe(b"state/bench")
        while not heard or heard[-1]["bursts"] < bursts:
            assert service.poll() is None, "the service ended by itself; what it said is in said.txt"
            assert time.monotonic() < until, "too few bursts came in time"
            if listener.poll(500):
                heard.append(msgpack.unpackb(listener.recv_multipart()[1]))
    return heard


def test_the_example_controller_makes_its_link_good(ports: dict[str, str], tmp_path: Path) -> None:
    """Settings, service, controller and request of the README, together: the rate measured is what theory promises.

    With N paths of amplitude 1 some pattern gives at least the amplitude 2N/π, since the mean of |cos| over a turn is
    2/π, and none gives more than N (power grows with N²: Wu and Zhang, IEEE Trans. Commun. 68(3), 2020). The noise
    has variance 2 · 4² on a tone.
    """

    def with_ports(text: str) -> str:
        for default, free in ports.items():
            text = text.replace(default, free)
        return text

    pilots, publish, control = ports.values()
    sockets = f'[sockets]\npilots = "{pilots}"\npublish = "{publish}"\ncontrol = "{control}"\n'
    (tmp_path / "bench.toml").write_text(f"{SETTINGS}\n{sockets}", encoding="utf-8")
    (tmp_path / "controller.py").write_text(with_ports(CONTROLLER), encoding="utf-8")

    def ask(verb: str) -> Any:
        text = with_ports(ASKING).replace('"status"', f'"{verb}"')
        done = subprocess.run(
            [sys.executable, "-c", text], capture_output=True, text=True, timeout=PATIENCE_S, check=True
        )
        return ast.literal_eval(done.stdout)

    with (
        running("-m", "tracker", "serve", "bench.toml", folder=tmp_path) as service,
        running("controller.py", folder=tmp_path),
    ):
        begun = states_until(publish, 30, service)[-1]["bursts"]
        # Patterns may have been published before the controller's subscription stood.
        assert ask("refresh")["ok"]
        heard = states_until(publish, begun + 60, service)
        reply = ask("status")
        service.send_signal(signal.SIGTERM)
        assert service.wait(PATIENCE_S) == 0
    noise = 2 * 4.0**2
    least, most = np.log2(1 + (2 * 64 / np.pi) ** 2 / noise), np.log2(1 + 64**2 / noise)
    assert heard[-1]["noise"][0] == pytest.approx(noise, rel=0.1)
    late = [state["rate_measured"] for state in heard[-20:] if state["rate_measured"] is not None]
    assert len(late) >= 10
    assert 0.97 * least < np.mean(late) < most
    told = names(section("Control: REQ to REP").partition("Status is")[2])
    assert reply["ok"]
    assert set(reply) - {"v", "ok"} == set(told) - set(reply["latency_us"])
    assert set(reply["latency_us"]) <= set(told)
    said = (tmp_path / "said.txt").read_text(encoding="utf-8")
    assert re.search(r"^pattern \d+, operator: \d\.\d\d bit/s/Hz$", said, re.MULTILINE)
