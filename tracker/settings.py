"""The settings file: one TOML file a link, validated once, with errors that a person can act on."""

import difflib
import re
import tomllib
from pathlib import Path
from typing import Annotated, Any, Literal, get_args

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator


class SettingsError(Exception):
    """The settings cannot be used; the message is one line for the user."""


Positive = Annotated[int, Field(ge=1)]
PositiveFloat = Annotated[float, Field(gt=0, allow_inf_nan=False)]
_LINK = r"^[a-z0-9-]{1,32}$"
_PORT = r"(\*|\d{1,4}|[1-5]\d{4}|6[0-4]\d{3}|65[0-4]\d\d|655[0-2]\d|6553[0-5])"
_ENDPOINT = rf"^(tcp://\S+:{_PORT}|(ipc|inproc)://\S+)$"
_PATTERNS = {
    _LINK: "1 to 32 characters from a-z, 0-9 and -",
    _ENDPOINT: "an endpoint such as tcp://127.0.0.1:5600, its port at most 65535, or ipc:///run/pilots",
}
Endpoint = Annotated[str, Field(pattern=_ENDPOINT)]
Finite = Annotated[float, Field(allow_inf_nan=False)]
Vector = Annotated[list[Finite], Field(min_length=3, max_length=3)]


class Table(BaseModel):
    """A table of the file: unknown keys are errors, values are not guessed from other types."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True)


class Link(Table):
    """Which link this is."""

    name: Annotated[str, Field(pattern=_LINK)]
    receivers: Annotated[int, Field(ge=1, le=64)] = 1
    clock_skew_s: PositiveFloat = 60.0


class Panel(Table):
    """The reflecting surface: element i is column i // rows, row i % rows.

    Seen from the front, columns run to the right and rows upwards. Spacings are from the middle of one element to that
    of the next; rows are as far apart as columns unless told otherwise.
    """

    columns: Annotated[int, Field(ge=1, le=4096)]
    rows: Annotated[int, Field(ge=1, le=4096)]
    spacing_mm: PositiveFloat | None = None
    row_spacing_mm: PositiveFloat | None = None
    stuck: dict[Literal["plus", "minus"], list[Annotated[int, Field(ge=0)]]] = Field(default_factory=dict)
    tied: list[Annotated[list[Annotated[int, Field(ge=0)]], Field(min_length=2)]] = Field(default_factory=list)

    @property
    def elements(self) -> int:
        """N, elements on the panel."""
        return self.columns * self.rows

    @model_validator(mode="after")
    def _elements_exist(self) -> "Panel":
        plus, minus = self.stuck.get("plus", []), self.stuck.get("minus", [])
        tied = [element for group in self.tied for element in group]
        for element in (*plus, *minus, *tied):
            if element >= self.elements:
                raise ValueError(f"element {element} does not exist, the panel has 0 to {self.elements - 1}")
        if both := set(plus) & set(minus):
            raise ValueError(f"element {min(both)} is given as stuck in both states")
        if len(set(tied)) != len(tied):
            raise ValueError("an element may stand in one tied group only, once")
        if self.elements > 16384:
            raise ValueError(f"{self.elements} elements, at most 16384 are supported")
        return self


class Tones(Table):
    """The pilot tones: `count` neighbours from index `first`; fft // 2 is the carrier."""

    fft: Annotated[int, Field(ge=2, le=65536)]
    first: Annotated[int, Field(ge=0)]
    count: Annotated[int, Field(ge=1, le=8192)]
    spacing_khz: PositiveFloat

    @model_validator(mode="after")
    def _inside_band(self) -> "Tones":
        if self.first + self.count > self.fft:
            raise ValueError(f"first + count = {self.first + self.count} is beyond fft = {self.fft}")
        return self


class Delay(Table):
    """How long the channel lasts, in samples of 1 / (fft · spacing)."""

    taps: Annotated[int, Field(ge=1, le=1024)] = 16
    before: Annotated[int, Field(ge=0, le=1024)] = 1


class Aperture(Table):
    """In what basis the element responses are estimated."""

    basis: Literal["elements", "tiles", "learned", "region"] = "elements"
    file: str | None = None
    size: Positive = 64
    tile_columns: Positive = 2
    tile_rows: Positive = 2


class Mirror(Table):
    """An endless plane that mirrors, such as the ground or a wall: a point on it, its normal, the loss."""

    point_m: Vector
    normal: Vector
    loss_db: Annotated[float, Field(ge=0, allow_inf_nan=False)] = 6.0


class Site(Table):
    """Where everything is, for `basis = "region"`: any right-handed axes, the same for all, lengths in m."""

    carrier_ghz: PositiveFloat
    panel_m: Vector
    facing: Vector
    up: Vector = Field(default_factory=lambda: [0.0, 0.0, 1.0])
    transmitter_m: Vector
    region_m: Annotated[list[Vector], Field(min_length=2, max_length=2)]
    mirrors: list[Mirror] = Field(default_factory=list)


class Estimator(Table):
    """How the estimate forgets."""

    forgetting: Literal["resetting", "exponential"] = "resetting"
    time_constant_ms: PositiveFloat = 500.0
    bank: Annotated[int, Field(ge=1, le=7)] = 1


class Follow(Table):
    """Whether phase is followed."""

    phase: bool = False


class Drift(Table):
    """How rarely the drift alarm may cry wolf."""

    false_alarm_hours: PositiveFloat = 10.0


class Refresh(Table):
    """When a refreshed pattern is worked out and published."""

    budget_ms: PositiveFloat = 5.0
    every_bursts: Positive = 1
    least_gain: Annotated[float, Field(ge=0, allow_inf_nan=False)] = 0.01
    switching_ms: Annotated[float, Field(ge=0, allow_inf_nan=False)] = 0.02
    most_steps: Positive = 400
    most_changes: Positive | None = None


class Sounding(Table):
    """Whether the tracker plans what is sounded, and within what limits."""

    plan: bool = False
    frame_us: PositiveFloat = 35.714
    burst_ms: PositiveFloat = 20.0
    most_frames: Annotated[int, Field(ge=2, le=4096)] = 64
    least_share: Annotated[float, Field(gt=0, le=1)] = 0.005
    most_share: Annotated[float, Field(gt=0, le=1)] = 0.5
    in_service: bool = False
    least_service: Annotated[float, Field(ge=0, le=1)] = 0.8

    @model_validator(mode="after")
    def _ordered(self) -> "Sounding":
        if self.least_share > self.most_share:
            raise ValueError(f"least_share = {self.least_share} must not be above most_share = {self.most_share}")
        return self


class Sockets(Table):
    """Where bursts come from and patterns go to."""

    pilots: Endpoint = "tcp://127.0.0.1:5600"
    publish: Endpoint = "tcp://127.0.0.1:5601"
    control: Endpoint = "tcp://127.0.0.1:5602"
    queue_mb: Annotated[float, Field(gt=0, le=1e5, allow_inf_nan=False)] = 512.0

    @model_validator(mode="after")
    def _apart(self) -> "Sockets":
        # A port that the system chooses is another one each time.
        fixed = [end for end in (self.pilots, self.publish, self.control) if not end.endswith((":*", ":0"))]
        if len(set(fixed)) < len(fixed):
            raise ValueError("pilots, publish and control must be three different endpoints")
        return self


class Journal(Table):
    """Where everything is recorded."""

    folder: str = "journal"
    rotate_mb: PositiveFloat = 256.0
    required: bool = True


class Settings(Table):
    """All settings of one link."""

    link: Link
    panel: Panel
    tones: Tones
    delay: Delay = Delay()
    aperture: Aperture = Aperture()
    site: Site | None = None
    estimator: Estimator = Estimator()
    follow: Follow = Follow()
    drift: Drift = Drift()
    refresh: Refresh = Refresh()
    sounding: Sounding = Sounding()
    sockets: Sockets = Sockets()
    journal: Journal = Journal()

    @model_validator(mode="after")
    def _fit_together(self) -> "Settings":
        if self.delay.before >= self.delay.taps:
            raise ValueError(f"delay.before = {self.delay.before} must be below delay.taps = {self.delay.taps}")
        if self.delay.taps > self.tones.fft:
            raise ValueError(f"delay.taps = {self.delay.taps} is longer than a symbol, tones.fft = {self.tones.fft}")
        if self.aperture.basis == "learned" and self.aperture.file is None:
            raise ValueError(
                'aperture.file is missing, basis = "learned" needs the file that `ris-tracker learn` wrote'
            )
        if self.aperture.basis == "region":
            needs = 'aperture.basis = "region" needs to know where everything is'
            if self.site is None:
                raise ValueError(f"{needs}: add the table [site], or choose another basis")
            if self.panel.spacing_mm is None:
                raise ValueError(f"{needs}: add panel.spacing_mm, the distance from element to element")
        return self


def not_allowed(text: str, *, endpoint: bool = False) -> str | None:
    """Say in one line why a text cannot name a link, or an endpoint; None when it can."""
    pattern = _ENDPOINT if endpoint else _LINK
    return None if re.fullmatch(pattern, text) else f"found {text!r}, allowed is: {_PATTERNS[pattern]}"


def load(path: Path) -> Settings:
    """Read a settings file.

    Raises
    ------
    SettingsError
        One line: the file, the key, what was found, what is allowed.
    """
    try:
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError:
        raise SettingsError(f"{path}: there is no such file") from None
    except OSError as error:
        raise SettingsError(f"{path}: cannot be read: {error.strerror}") from None
    except UnicodeDecodeError as error:
        raise SettingsError(f"{path}: not valid TOML: byte {error.start} is not UTF-8") from None
    return parse(text, str(path))


def parse(text: str, name: str = "settings.toml") -> Settings:
    """Parse and validate the text of a settings file.

    Parameters
    ----------
    text : str
    name : str
        What to call the file in an error.

    Raises
    ------
    SettingsError
        One line: the file, the key, what was found, what is allowed.
    """
    try:
        raw = tomllib.loads(text.removeprefix("\ufeff"))  # some editors begin every file with that mark
    except tomllib.TOMLDecodeError as error:
        raise SettingsError(f"{name}: not valid TOML: {error}") from None
    try:
        return Settings.model_validate(raw)
    except ValidationError as error:
        # A misspelt table is also a missing one: what stands in the file comes first.
        first = min(error.errors(include_url=False), key=lambda problem: problem["type"] != "extra_forbidden")
        more = error.error_count() - 1
        tail = f" (and {more} more)" if more else ""
        raise SettingsError(f"{name}: {_sentence(dict(first), raw)}{tail}") from None


def _sentence(problem: dict[str, Any], raw: dict[str, Any]) -> str:
    """Turn one validation error into one sentence: key, what was found, what is allowed."""
    where = [part for part in problem["loc"] if part != "[key]"]
    key = ".".join(str(part) for part in where)
    if problem["type"] == "extra_forbidden":
        known = _known_keys([str(part) for part in where[:-1]])
        near = difflib.get_close_matches(str(where[-1]), known, n=1)
        hint = f"did you mean {near[0]}? " if near else ""
        return f"{key}: unknown key; {hint}known here: {', '.join(known)}"
    if problem["type"] == "missing":
        kind = "table" if len(where) == 1 else "key"
        return f"{key}: this {kind} is missing and has no default"
    if problem["type"] == "value_error":
        text = str(problem["msg"]).removeprefix("Value error, ")
        return f"{key}: {text}" if key else text
    if problem["type"] == "string_pattern_mismatch":
        return f"{key}: found {_found(raw, where)}, allowed is: {_PATTERNS[problem['ctx']['pattern']]}"
    if problem["type"] == "too_short":
        return f"{key}: found {_found(raw, where)}, allowed is: at least {problem['ctx']['min_length']} items"
    if problem["type"] == "too_long":
        return f"{key}: found {_found(raw, where)}, allowed is: at most {problem['ctx']['max_length']} items"
    allowed = str(problem["msg"]).removeprefix("Input should be ").removeprefix("a valid ")
    return f"{key}: found {_found(raw, where)}, allowed is: {allowed}"


def _known_keys(where: list[str]) -> list[str]:
    """List the keys allowed in the table at `where`, in the order of the file."""
    model: type[BaseModel] = Settings
    for part in where:
        if part.isdigit():  # a place in a list
            continue
        field = model.model_fields.get(part)
        tables = [kind for kind in _kinds(field.annotation) if issubclass(kind, BaseModel)] if field else []
        if not tables:
            return []
        model = tables[0]
    return list(model.model_fields)


def _kinds(annotation: Any) -> list[type]:
    """List the classes that an annotation is made of, such as `Site` for `Site | None`."""
    inner = get_args(annotation)
    if not inner:
        return [annotation] if isinstance(annotation, type) else []
    return [kind for part in inner for kind in _kinds(part)]


def _found(raw: Any, where: list[Any]) -> str:
    for part in where:
        try:
            raw = raw[part]
        except (KeyError, IndexError, TypeError):
            break
    return repr(raw)
