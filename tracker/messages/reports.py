"""`state` and `alarm`, tracker → whoever listens."""

from collections.abc import Mapping
from dataclasses import dataclass

from tracker.engine import events
from tracker.engine.refusal import Reason
from tracker.messages.fields import INT64, MOST_ELEMENTS, MOST_RECEIVERS, UINT64, Body, Fields, encode, read_nested

_COUNTS = ("bursts", "frames", "lost", "duplicate", "refused", "dropped_frames", "together")


@dataclass(frozen=True, slots=True)
class StateMessage:
    """The state after a burst, its link, and how long each stage took, µs."""

    link: str
    event: events.State
    latency_us: dict[str, int]


@dataclass(frozen=True, slots=True)
class AlarmMessage:
    """An alarm and its link."""

    link: str
    event: events.Alarm


def encode_state(link: str, event: events.State, latency_us: Mapping[str, int]) -> bytes:
    """Encode the state after a burst."""
    return encode(
        link,
        event,
        mode=str(event.mode),
        **{key: int(getattr(event, key)) for key in _COUNTS},
        noise=[float(value) for value in event.noise],
        innovation=[float(value) for value in event.innovation],
        rate_measured=_float_or_none(event.rate_measured),
        rate_predicted=_float_or_none(event.rate_predicted),
        offset_hz=float(event.offset_hz),
        phase_rad=[float(value) for value in event.phase_rad],
        time_constant_ms=float(event.time_constant_ms),
        latency_us={stage: int(value) for stage, value in latency_us.items()},
        pattern=event.pattern,
        faults=[[int(element), str(fault), float(confidence)] for element, fault, confidence in event.faults],
        statistic=float(event.statistic),
        threshold=float(event.threshold),
        promise_kept=_float_or_none(event.promise_kept),
    )


def decode_state(body: Body) -> StateMessage:
    """Decode the state after a burst.

    Raises
    ------
    Refused
    """
    fields = read_nested("state", body)
    head = fields.head()
    phase = fields.numbers("phase_rad", 2)
    if len(phase) != 2:
        raise fields.refuse(Reason.SIZES, f"`phase_rad` has {len(phase)} items, must have 2: direct, surface")
    event = events.State(
        **head,
        mode=fields.member("mode", events.Mode),
        **{key: fields.integer(key, 0, UINT64) for key in _COUNTS},
        noise=fields.numbers("noise", MOST_RECEIVERS),
        innovation=fields.numbers("innovation", MOST_RECEIVERS),
        rate_measured=fields.optional_number("rate_measured"),
        rate_predicted=fields.optional_number("rate_predicted"),
        offset_hz=fields.number("offset_hz"),
        phase_rad=(phase[0], phase[1]),
        time_constant_ms=fields.number("time_constant_ms"),
        pattern=fields.optional_integer("pattern", 0, UINT64),
        faults=_faults(fields),
        statistic=fields.number("statistic"),
        threshold=fields.number("threshold"),
        promise_kept=fields.optional_number("promise_kept") if "promise_kept" in fields.values else None,
    )
    return StateMessage(fields.check_link(), event, _latencies(fields))


def decode_rates(body: Body) -> tuple[float | None, float | None, tuple[float, ...]]:
    """Decode no more of a state than measured rate, predicted rate and innovation ratios; see `decode_state`.

    Raises
    ------
    Refused
    """
    fields = read_nested("state", body)
    fields.check_version()
    measured, predicted = fields.optional_number("rate_measured"), fields.optional_number("rate_predicted")
    return measured, predicted, fields.numbers("innovation", MOST_RECEIVERS)


def encode_alarm(link: str, event: events.Alarm) -> bytes:
    """Encode an alarm."""
    return encode(
        link,
        event,
        since_ns=int(event.since_ns),
        kind=str(event.kind),
        receiver=event.receiver,
        statistic=float(event.statistic),
        threshold=float(event.threshold),
        next_kind=str(event.next_kind),
        action=str(event.action),
    )


def decode_alarm(body: Body) -> AlarmMessage:
    """Decode an alarm.

    Raises
    ------
    Refused
    """
    fields = read_nested("alarm", body)
    event = events.Alarm(
        **fields.head(),
        since_ns=fields.integer("since_ns", -INT64 - 1, INT64),
        kind=fields.text("kind", 64),
        receiver=fields.optional_integer("receiver", 0, MOST_RECEIVERS - 1),
        statistic=fields.number("statistic"),
        threshold=fields.number("threshold"),
        next_kind=fields.text("next_kind", 64),
        action=fields.text("action"),
    )
    return AlarmMessage(fields.check_link(), event)


def _faults(fields: Fields) -> tuple[tuple[int, str, float], ...]:
    wanted = "a list of [element, fault, confidence]"
    found = []
    for item in fields.items("faults", MOST_ELEMENTS):
        if type(item) is not list or len(item) != 3:
            raise fields.wrong_type("faults", wanted)
        element, fault, confidence = item
        if type(element) is not int or type(fault) is not str or type(confidence) not in (int, float):
            raise fields.wrong_type("faults", wanted)
        found.append((element, fault, float(confidence)))
    return tuple(found)


def _latencies(fields: Fields) -> dict[str, int]:
    value = fields["latency_us"]
    if type(value) is not dict or any(type(k) is not str or type(v) is not int for k, v in value.items()):
        raise fields.wrong_type("latency_us", "a map of stage to integer")
    return value


def _float_or_none(value: float | None) -> float | None:
    return None if value is None else float(value)
