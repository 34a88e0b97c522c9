"""Settings: the example of the format loads, and each mistake gives one line that says what, where and what to do."""

import tomllib
from pathlib import Path

import pytest

from tracker.settings import Settings, SettingsError, load, parse

LEAST = """\
[link]
name = "yard"

[panel]
columns = 20
rows = 16

[tones]
fft = 256
first = 28
count = 200
spacing_khz = 156.25
"""

WHOLE = (
    LEAST
    + """
[delay]
taps = 16
before = 1

[aperture]
basis = "learned"
file = "yard-basis.npz"
size = 64

[estimator]
forgetting = "exponential"
time_constant_ms = 250

[follow]
phase = true

[drift]
false_alarm_hours = 24.0

[refresh]
budget_ms = 5.0
every_bursts = 2
least_gain = 0.0
most_steps = 100
most_changes = 40

[sockets]
pilots = "tcp://127.0.0.1:5600"
publish = "ipc:///run/yard/publish"
control = "tcp://127.0.0.1:5602"

[journal]
folder = "journal"

[panel.stuck]
plus = [0, 7]
minus = [319]
"""
)


def test_three_tables_are_enough() -> None:
    """Link, panel and tones must be given; each other key has a default that fits."""
    settings = parse(LEAST)
    assert settings.panel.elements == 320
    assert settings.link.receivers == 1
    assert (settings.delay.taps, settings.delay.before) == (16, 1)
    assert settings.aperture.basis == "elements"
    assert settings.estimator.forgetting == "resetting"
    assert settings.estimator.time_constant_ms == 500.0
    assert settings.refresh.budget_ms == 5.0
    assert settings.refresh.every_bursts == 1
    assert settings.refresh.most_changes is None
    assert settings.follow.phase is False
    assert settings.sockets.pilots == "tcp://127.0.0.1:5600"


def test_every_key_that_is_given_counts() -> None:
    """A file that sets everything gives those values; whole numbers are taken where a float is meant."""
    settings = parse(WHOLE)
    assert settings.aperture.file == "yard-basis.npz"
    assert settings.estimator.time_constant_ms == 250.0
    assert settings.estimator.forgetting == "exponential"
    assert settings.refresh.most_changes == 40
    assert settings.refresh.every_bursts == 2
    assert settings.drift.false_alarm_hours == 24.0
    assert settings.follow.phase is True
    assert settings.sockets.publish == "ipc:///run/yard/publish"
    assert settings.panel.stuck == {"plus": [0, 7], "minus": [319]}


def test_the_mark_that_some_editors_put_first_is_no_mistake() -> None:
    """A file that begins with U+FEFF reads as without it."""
    assert parse("\ufeff" + LEAST) == parse(LEAST)


def test_every_port_that_there_is_can_be_named() -> None:
    """Ports 0 to 65535 are taken, on names and on addresses of either kind."""
    for end in ("tcp://127.0.0.1:65535", "tcp://mast.example:1", "tcp://[::1]:60000", "ipc:///run/pilots"):
        assert parse(LEAST + f'[sockets]\npilots = "{end}"\n').sockets.pilots == end


def test_settings_cannot_be_changed_afterwards() -> None:
    """What was validated stays so."""
    settings = parse(LEAST)
    with pytest.raises(ValueError, match="frozen"):
        settings.link.receivers = 100  # type: ignore[misc]


def test_the_same_text_gives_equal_settings() -> None:
    """Replays tell by this whether a log was made under the same settings, comments and order aside."""
    assert parse(LEAST) == parse("# the yard\n" + LEAST + "\n[delay]\nbefore = 1\n")
    assert parse(LEAST) != parse(LEAST.replace("200", "199"))


MISTAKES: list[tuple[str, str, str]] = [
    ('name = "yard"', 'name = "Yard 1"', "link.name: found 'Yard 1', allowed is: 1 to 32 characters from a-z, 0-9"),
    ('name = "yard"', 'name = "yard\\n"', "link.name: found 'yard\\n'"),
    ('name = "yard"', "name = 5", "link.name: found 5, allowed is: string"),
    ('name = "yard"', 'name = "yard"\nreceivers = true', "link.receivers: found True, allowed is: integer"),
    ('name = "yard"', 'name = "yard"\nreceivers = 1.0', "link.receivers: found 1.0, allowed is: integer"),
    (
        'name = "yard"',
        'name = "yard"\nreceivers = 65',
        "link.receivers: found 65, allowed is: less than or equal to 64",
    ),
    ('name = "yard"', 'name = "yard"\nrecievers = 2', "link.recievers: unknown key; did you mean receivers?"),
    ('name = "yard"', 'name = "yard"\nqqq = 2', "link.qqq: unknown key; known here: name, receivers"),
    ("[panel]", "[pannel]", "pannel: unknown key; did you mean panel?"),
    ("[panel]\ncolumns = 20\nrows = 16\n", "", "panel: this table is missing and has no default"),
    ("columns = 20\n", "", "panel.columns: this key is missing and has no default"),
    ("rows = 16", "rows = 2000", "panel: 40000 elements, at most 16384 are supported"),
    ("rows = 16", "rows = 0", "panel.rows: found 0, allowed is: greater than or equal to 1"),
    ("rows = 16", "rows = 16\ntied = [[1]]", "panel.tied.0: found [1], allowed is: at least 2 items"),
    ("rows = 16", "rows = 16\ntied = [[1, 2], [2, 3]]", "panel: an element may stand in one tied group only"),
    ("rows = 16", "rows = 16\ntied = [[1, 320]]", "panel: element 320 does not exist, the panel has 0 to 319"),
    ("rows = 16", "rows = 16\nstuck = { plus = [320] }", "panel: element 320 does not exist, the panel has 0 to 319"),
    ("rows = 16", "rows = 16\nstuck = { plus = [5], minus = [5] }", "panel: element 5 is given as stuck in both"),
    (
        "rows = 16",
        "rows = 16\nstuck = { broken = [5] }",
        "panel.stuck.broken: found [5], allowed is: 'plus' or 'minus'",
    ),
    ("first = 28", "first = 100", "tones: first + count = 300 is beyond fft = 256"),
    ("156.25", "0", "tones.spacing_khz: found 0, allowed is: greater than 0"),
    ("156.25", "nan", "tones.spacing_khz: found nan, allowed is: a finite number"),
    ("156.25", "inf", "tones.spacing_khz: found inf, allowed is: a finite number"),
    ("156.25", "true", "tones.spacing_khz: found True, allowed is: number"),
    ("156.25", '"156"', "tones.spacing_khz: found '156', allowed is: number"),
    ("[tones]", "[delay]\ntaps = 4\nbefore = 4\n[tones]", "delay.before = 4 must be below delay.taps = 4"),
    ("[tones]", "[delay]\ntaps = 257\n[tones]", "delay.taps = 257 is longer than a symbol, tones.fft = 256"),
    ("[tones]", '[aperture]\nbasis = "learned"\n[tones]', "aperture.file is missing"),
    ("[tones]", '[aperture]\nbasis = "lerned"\n[tones]', "aperture.basis: found 'lerned', allowed is: 'elements', "),
    (
        "[tones]",
        '[sockets]\npilots = "localhost"\n[tones]',
        "sockets.pilots: found 'localhost', allowed is: an endpoint",
    ),
    (
        "[tones]",
        '[sockets]\npilots = "tcp://127.0.0.1"\n[tones]',
        "sockets.pilots: found 'tcp://127.0.0.1', allowed is: an endpoint such as tcp://127.0.0.1:5600, its port",
    ),
    (
        "[tones]",
        '[sockets]\npublish = "tcp://127.0.0.1:65536"\n[tones]',
        "sockets.publish: found 'tcp://127.0.0.1:65536', allowed is: an endpoint",
    ),
    ("[tones]", "[sockets]\nqueue_mb = 2e5\n[tones]", "sockets.queue_mb: found 200000.0, allowed is: less than or"),
    ("[tones]", '[sockets]\npilots = "tcp://127.0.0.1:5602"\n[tones]', "sockets: pilots, publish and control must be"),
    ("[tones]", "[refresh]\nmost_changes = 0\n[tones]", "refresh.most_changes: found 0, allowed is: greater than or"),
    ("[tones]", "[refresh]\nleast_gain = -1.0\n[tones]", "refresh.least_gain: found -1.0, allowed is: greater than"),
    ("[tones]", "[tones", "not valid TOML"),
    ("[tones]", "[link]\n[tones]", "not valid TOML"),
    ("rows = 16", "rows = 16\nrows = 17", "not valid TOML"),
]


@pytest.mark.parametrize(("good", "bad", "words"), MISTAKES, ids=[row[1].split("\n")[-1][:40] for row in MISTAKES])
def test_a_mistake_gives_one_line_that_says_what_and_where(good: str, bad: str, words: str) -> None:
    """The line begins with the name of the file, then the key, what was found and what is allowed."""
    assert good in LEAST
    with pytest.raises(SettingsError) as caught:
        parse(LEAST.replace(good, bad, 1), "yard.toml")
    text = str(caught.value)
    assert text.startswith("yard.toml: " + words)
    assert "\n" not in text


def test_further_mistakes_are_counted() -> None:
    """One line names the first mistake and says how many more there are."""
    with pytest.raises(SettingsError, match=r"\(and 1 more\)"):
        parse(LEAST.replace("rows = 16", "rows = 0").replace("fft = 256", "fft = 0"))


def test_two_ports_left_to_the_system_are_no_clash() -> None:
    """`tcp://HOST:*` lets the system choose a port, another one each time."""
    ends = '[sockets]\npublish = "tcp://127.0.0.1:*"\ncontrol = "tcp://127.0.0.1:*"\n'
    assert parse(LEAST + ends).sockets.control == "tcp://127.0.0.1:*"


def test_files_are_loaded_by_path(tmp_path: Path) -> None:
    """A file on disk gives what its text gives."""
    path = tmp_path / "yard.toml"
    path.write_text(LEAST, encoding="utf-8")
    assert load(path) == parse(LEAST)


def test_files_that_cannot_be_read_are_one_line(tmp_path: Path) -> None:
    """A missing file, a folder, and a file that is no text are told apart, each by its path."""
    binary = tmp_path / "binary.toml"
    binary.write_bytes(b"\xff\xfe\x00")
    for path, words in (
        (tmp_path / "nowhere.toml", "there is no such file"),
        (tmp_path, "cannot be read: Is a directory"),
        (binary, "not valid TOML: byte 0 is not UTF-8"),
    ):
        with pytest.raises(SettingsError) as caught:
            load(path)
        assert str(caught.value) == f"{path}: {words}"


def test_settings_go_through_toml_unharmed() -> None:
    """Every field of the model is a key of the file under the same name: nothing is renamed on the way."""
    assert set(tomllib.loads(WHOLE)) <= set(Settings.model_fields)
    dumped = parse(WHOLE).model_dump()
    for table, values in tomllib.loads(WHOLE).items():
        for key, value in values.items():
            assert dumped[table][key] == value


def test_shares_of_a_sounding_plan_must_be_in_order() -> None:
    """One line names the table, both values and what is wrong with them; by default nothing is planned."""
    assert parse(LEAST).sounding.plan is False
    with pytest.raises(SettingsError) as raised:
        parse(LEAST + "[sounding]\nplan = true\nleast_share = 0.6\nmost_share = 0.5\n")
    assert str(raised.value) == ("settings.toml: sounding: least_share = 0.6 must not be above most_share = 0.5")
