"""The wire format: what decoders take, what they refuse and why, and that encoders are their inverse."""

import dataclasses
import struct
from collections.abc import Callable
from typing import Any

import msgpack
import numpy as np
import pytest

from tracker.engine import events
from tracker.engine.burst import Burst
from tracker.messages import (
    MOST_BODY,
    Plan,
    Reason,
    Refused,
    Shape,
    Verb,
    decode_alarm,
    decode_pattern,
    decode_pilots,
    decode_plan,
    decode_reply,
    decode_request,
    decode_state,
    encode_alarm,
    encode_pattern,
    encode_pilots,
    encode_plan,
    encode_reply,
    encode_request,
    encode_state,
    parse_topic,
    topic,
)

SHAPE = Shape(elements=11, receivers=2, tones=5)


def make_burst(frames: int = 3, elements: int = 11, receivers: int = 2, tones: int = 5, seed: int = 0) -> Burst:
    rng = np.random.default_rng(seed)
    states = rng.integers(0, 2, (frames, elements))
    shape = (frames, receivers, tones)
    return Burst(
        run=2**64 - 1,
        seq=2**63,
        t_ns=1_700_000_000_123_456_789,
        dt_ns=35_714,
        elements=elements,
        patterns=np.packbits(states, axis=1, bitorder="little"),
        response=(rng.normal(size=shape) + 1j * rng.normal(size=shape)).astype(np.complex64),
        keep=np.ones(frames, np.bool_),
        pattern_id=9,
    )


def pilots_map(**changes: Any) -> dict[str, Any]:
    """Build the map of a burst key by key from the definition of the format, not by the encoder."""
    values: dict[str, Any] = {
        "v": 1,
        "link": "yard",
        "run": 77,
        "seq": 5,
        "t_ns": 1_700_000_000_000_000_000,
        "dt_ns": 35_714,
        "frames": 2,
        "elements": 11,
        "receivers": 1,
        "tones": 2,
        "patterns": bytes([0b00000101, 0b100, 0b11111111, 0b111]),
        "response": struct.pack("<8f", 1, -2, 3, -4, 5, -6, 7, -8),
    }
    values.update(changes)
    return {key: value for key, value in values.items() if value is not ...}


def same(one: Burst, two: Burst) -> bool:
    return all(
        np.array_equal(getattr(one, field.name), getattr(two, field.name), equal_nan=field.name == "response")
        for field in dataclasses.fields(Burst)
    )


def test_a_burst_is_read_as_the_format_says() -> None:
    """Bits are least significant first, responses little-endian (re, im) in the order frame, receiver, tone."""
    burst = decode_pilots(msgpack.packb(pilots_map()), "yard", Shape(11, 1, 2))
    assert (burst.run, burst.seq, burst.t_ns, burst.dt_ns) == (77, 5, 1_700_000_000_000_000_000, 35_714)
    assert burst.frames == 2
    assert burst.elements == 11
    assert burst.pattern_id is None
    assert burst.patterns.tolist() == [[0b101, 0b100], [0xFF, 0b111]]
    assert burst.response.tolist() == [[[1 - 2j, 3 - 4j]], [[5 - 6j, 7 - 8j]]]
    assert burst.keep.tolist() == [True, True]
    assert burst.response.dtype == np.complex64
    assert burst.patterns.dtype == np.uint8


def test_pilots_come_back_as_they_went_in() -> None:
    """Decoding what was encoded gives the same burst, the largest `run` and `seq` included."""
    burst = make_burst()
    assert same(decode_pilots(encode_pilots("yard", burst), "yard", SHAPE), burst)


@pytest.mark.parametrize("offset", range(8))
def test_any_buffer_will_do(offset: int) -> None:
    """A body at an odd address, in a buffer that is overwritten later, gives an aligned burst of its own."""
    burst = make_burst()
    body = encode_pilots("yard", burst)
    buffer = bytearray(bytes(offset) + body)
    found = decode_pilots(memoryview(buffer)[offset:], "yard", SHAPE)
    buffer[:] = bytes(len(buffer))
    assert same(found, burst)
    assert found.response.flags.aligned
    assert found.response.ctypes.data % 8 == 0
    assert same(decode_pilots(bytearray(body), "yard", SHAPE), burst)


def test_unknown_keys_are_ignored() -> None:
    """Version 1 may grow: values of any type under unknown keys change nothing."""
    extra = {"site": "north", "gains": [1, [2, {"x": None}]], "more": {"a": {"b": msgpack.ExtType(5, b"x")}}}
    plain = decode_pilots(msgpack.packb(pilots_map()), "yard", None)
    assert same(decode_pilots(msgpack.packb(extra | pilots_map()), "yard", None), plain)
    assert same(decode_pilots(msgpack.packb(pilots_map() | extra), "yard", None), plain)


def test_padding_bits_of_patterns_are_ignored() -> None:
    """Bits beyond the last element are cleared, so that equal patterns are equal bytes."""
    noisy = bytes([0b00000101, 0b11111100, 0b11111111, 0b00001111])
    burst = decode_pilots(msgpack.packb(pilots_map(patterns=noisy)), "yard", None)
    assert burst.patterns.tolist() == [[0b101, 0b100], [0xFF, 0b111]]


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf, 2e15, -2e15, 3e38])
@pytest.mark.parametrize("imaginary", [False, True])
def test_frames_with_nan_infinity_or_absurd_magnitudes_are_left_out(bad: float, imaginary: bool) -> None:
    """One bad tone in one frame takes that frame out and no other; the square of what is left is finite."""
    burst = make_burst()
    burst.response[1, 1, 4] = complex(0, bad) if imaginary else bad
    found = decode_pilots(encode_pilots("yard", burst), "yard", SHAPE)
    assert found.keep.tolist() == [True, False, True]
    assert np.isfinite(np.square(np.abs(found.response[found.keep])).sum())


def test_large_but_usable_magnitudes_are_kept() -> None:
    """1e15 is taken: its square summed over a burst is finite in single precision."""
    burst = make_burst()
    burst.response[:] = complex(1e15, -1e15)
    found = decode_pilots(encode_pilots("yard", burst), "yard", SHAPE)
    assert found.keep.all()
    assert np.isfinite(np.square(np.abs(found.response)).sum())


def test_a_burst_with_no_good_frame_is_refused() -> None:
    """When NaN is everywhere nothing is left to use."""
    burst = make_burst()
    burst.response[:, 0, 0] = np.nan
    with pytest.raises(Refused) as caught:
        decode_pilots(encode_pilots("yard", burst), "yard", SHAPE)
    assert caught.value.reason == Reason.NOT_FINITE


WRONG_TYPES: dict[str, list[Any]] = {
    **{
        key: [True, 1.0, "1", None, b"1", [1], {"a": 1}, [], {}]
        for key in ("v", "run", "seq", "t_ns", "dt_ns", "frames", "elements", "receivers", "tones")
    },
    "pattern_id": [True, 1.0, "1", b"1", [], {}],
    "link": [1, None, b"yard", ["yard"], {}, True],
    "patterns": ["abcd", 1, None, [5, 4, 255, 7], {}, False],
    "response": ["x" * 32, 1.0, None, [1.0] * 8, {}],
}


@pytest.mark.parametrize(("key", "value"), [(key, value) for key, values in WRONG_TYPES.items() for value in values])
def test_a_value_of_another_type_is_refused(key: str, value: Any) -> None:
    """Types are exact: a bool or a whole float is no integer, a string is no binary, a list is nothing."""
    with pytest.raises(Refused) as caught:
        decode_pilots(msgpack.packb(pilots_map(**{key: value})), "yard", None)
    assert caught.value.reason == Reason.WRONG_TYPE
    assert f"`{key}`" in caught.value.detail


@pytest.mark.parametrize("key", sorted(pilots_map()))
def test_a_missing_key_is_refused(key: str) -> None:
    """Each key of a burst but `pattern_id` must be there, and the refusal names the one that is not."""
    with pytest.raises(Refused) as caught:
        decode_pilots(msgpack.packb(pilots_map(**{key: ...})), "yard", None)
    assert caught.value.reason == Reason.MISSING_KEY
    assert f"`{key}`" in caught.value.detail


PACKED = msgpack.packb(pilots_map())

REFUSALS: list[tuple[str, bytes, Reason]] = [
    ("empty", b"", Reason.NOT_MSGPACK),
    ("a byte that MessagePack never uses", b"\xc1", Reason.NOT_A_MAP),
    ("that byte as a key", b"\x81\xc1\x01", Reason.NOT_A_MAP),
    ("that byte as a value", b"\x81\xa1v\xc1", Reason.NOT_MSGPACK),
    ("one byte short", PACKED[:-1], Reason.NOT_MSGPACK),
    ("half", PACKED[: len(PACKED) // 2], Reason.NOT_MSGPACK),
    ("only the head", PACKED[:1], Reason.NOT_MSGPACK),
    ("a byte too many", PACKED + b"\x00", Reason.NOT_MSGPACK),
    ("twice", PACKED + PACKED, Reason.NOT_MSGPACK),
    ("invalid UTF-8", PACKED.replace(b"yard", b"\xff\xff\xff\xff"), Reason.NOT_MSGPACK),
    ("nested too deep", msgpack.packb({"x": 0})[:-1] + b"\x91" * 5000 + b"\x00", Reason.NOT_MSGPACK),
    ("a list of four thousand million", b"\xdd\xff\xff\xff\xff", Reason.NOT_A_MAP),
    ("a map of four thousand million", b"\xdf\xff\xff\xff\xff", Reason.TOO_LARGE),
    ("a list", msgpack.packb([1, 2]), Reason.NOT_A_MAP),
    ("an integer", msgpack.packb(1), Reason.NOT_A_MAP),
    ("JSON", b'{"v": 1}', Reason.NOT_A_MAP),
    ("integer keys", msgpack.packb({1: 2}), Reason.NOT_A_MAP),
    ("binary keys", msgpack.packb({b"v": 1}), Reason.NOT_A_MAP),
    ("an empty map", b"\x80", Reason.MISSING_KEY),
    ("beyond the limit", b"\x80" + bytes(MOST_BODY), Reason.TOO_LARGE),
]

CHANGES: list[tuple[dict[str, Any], Reason]] = [
    ({"v": 0}, Reason.VERSION),
    ({"v": 2}, Reason.VERSION),
    ({"link": "dock"}, Reason.LINK),
    ({"link": ""}, Reason.LINK),
    ({"run": -1}, Reason.OUT_OF_RANGE),
    ({"seq": -1}, Reason.OUT_OF_RANGE),
    ({"t_ns": 2**63}, Reason.OUT_OF_RANGE),
    ({"dt_ns": -5}, Reason.OUT_OF_RANGE),
    ({"dt_ns": 0}, Reason.OUT_OF_RANGE),
    ({"dt_ns": 2**64 - 1}, Reason.OUT_OF_RANGE),
    ({"pattern_id": -1}, Reason.OUT_OF_RANGE),
    ({"frames": 0, "patterns": b"", "response": b""}, Reason.OUT_OF_RANGE),
    ({"frames": -2}, Reason.OUT_OF_RANGE),
    ({"frames": 65_537}, Reason.OUT_OF_RANGE),
    ({"elements": 0, "patterns": b""}, Reason.OUT_OF_RANGE),
    ({"elements": 16_385}, Reason.OUT_OF_RANGE),
    ({"receivers": 0, "response": b""}, Reason.OUT_OF_RANGE),
    ({"receivers": 65}, Reason.OUT_OF_RANGE),
    ({"tones": 0, "response": b""}, Reason.OUT_OF_RANGE),
    ({"tones": 8_193}, Reason.OUT_OF_RANGE),
    ({"frames": 3}, Reason.SIZES),
    ({"elements": 17}, Reason.SIZES),
    ({"receivers": 2}, Reason.SIZES),
    ({"tones": 3}, Reason.SIZES),
    ({"patterns": b"abc"}, Reason.SIZES),
    ({"patterns": b""}, Reason.SIZES),
    ({"response": bytes(31)}, Reason.SIZES),
    ({"response": bytes(33)}, Reason.SIZES),
    ({"frames": 65_536, "receivers": 64, "tones": 8_192, "patterns": bytes(2 * 65_536)}, Reason.SIZES),
    ({"elements": 12}, Reason.SETTINGS),
    ({"tones": 1, "receivers": 2}, Reason.SETTINGS),
    ({"frames": 1, "patterns": b"ab", "receivers": 2}, Reason.SETTINGS),
    ({"response": struct.pack("<8f", *[float("nan")] * 8)}, Reason.NOT_FINITE),
]


@pytest.mark.parametrize(
    ("body", "reason"), [row[1:] for row in REFUSALS], ids=[row[0].replace(" ", "-") for row in REFUSALS]
)
def test_what_is_no_message_is_refused(body: bytes, reason: Reason) -> None:
    """Bytes that are not one MessagePack map with string keys are told apart by reason, in one line each."""
    with pytest.raises(Refused) as caught:
        decode_pilots(body, "yard", Shape(11, 1, 2))
    assert caught.value.reason == reason
    assert "\n" not in caught.value.detail


@pytest.mark.parametrize(("changes", "reason"), CHANGES, ids=[str(number) for number in range(len(CHANGES))])
def test_one_wrong_value_is_refused_for_its_reason(changes: dict[str, Any], reason: Reason) -> None:
    """A burst that is right but for one thing is refused for that thing, in one line that names the key."""
    with pytest.raises(Refused) as caught:
        decode_pilots(msgpack.packb(pilots_map(**changes)), "yard", Shape(11, 1, 2))
    assert caught.value.reason == reason
    assert "\n" not in str(caught.value)
    assert str(caught.value).startswith(f"{reason}: pilots: ")


def test_one_frame_needs_no_spacing() -> None:
    """A burst of one frame may have `dt_ns` 0, and one at the very end of time is taken."""
    one = pilots_map(frames=1, dt_ns=0, patterns=b"ab", response=bytes(16), t_ns=2**63 - 1)
    assert decode_pilots(msgpack.packb(one), "yard", None).end_ns == 2**63 - 1


def test_a_null_pattern_id_is_none() -> None:
    """A controller that has no pattern in use may say so or leave the key out."""
    assert decode_pilots(msgpack.packb(pilots_map(pattern_id=None)), "yard", None).pattern_id is None
    assert decode_pilots(msgpack.packb(pilots_map(pattern_id=2**64 - 1)), "yard", None).pattern_id == 2**64 - 1


@pytest.mark.parametrize("elements", [1, 7, 8, 9, 320, 16_384])
def test_the_largest_and_smallest_surfaces(elements: int) -> None:
    """Any number of elements up to 16384 travels, whether or not it fills its last byte."""
    burst = make_burst(frames=2, elements=elements, receivers=1, tones=1)
    assert same(decode_pilots(encode_pilots("yard", burst), "yard", Shape(elements, 1, 1)), burst)


def example_pattern() -> events.Pattern:
    states = np.where(np.random.default_rng(3).random(21) < 0.5, 1, -1).astype(np.int8)
    return events.Pattern(4, 2**64 - 1, 8, -5, states, 3.25, 3.0, 2.5, 4.5, events.Cause.DRIFT, 17)


def test_patterns_travel() -> None:
    """A pattern message carries the keys of the format, and comes back as it went in."""
    event = example_pattern()
    body = encode_pattern("yard", event, 1234)
    raw = msgpack.unpackb(body)
    assert set(raw) == {
        *("v", "link", "run", "seq", "id", "t_ns", "elements", "bits", "rate", "rate_low", "rate_before"),
        *("rate_bound", "cause", "steps", "latency_us"),
    }
    bits = [raw["bits"][i // 8] >> i % 8 & 1 for i in range(21)]
    assert bits == [int(state > 0) for state in event.states]
    found = decode_pattern(body)
    assert (found.link, found.latency_us) == ("yard", 1234)
    assert found.event.states.dtype == np.int8
    assert np.array_equal(found.event.states, event.states)
    for field in dataclasses.fields(event):
        if field.name != "states":
            assert getattr(found.event, field.name) == getattr(event, field.name)


def test_padding_bits_of_a_pattern_are_ignored() -> None:
    """Another program may leave anything in the bits beyond the last element."""
    raw = msgpack.unpackb(encode_pattern("yard", example_pattern(), 0))
    raw["bits"] = raw["bits"][:2] + bytes([raw["bits"][2] | 0xE0])
    assert np.array_equal(decode_pattern(msgpack.packb(raw)).event.states, example_pattern().states)


STATE = events.State(
    run=5,
    seq=6,
    t_ns=7,
    mode=events.Mode.TRACKING,
    bursts=10,
    frames=640,
    lost=1,
    duplicate=2,
    refused=3,
    dropped_frames=4,
    noise=(0.5, 0.25),
    innovation=(1.0, 1.5),
    rate_measured=None,
    rate_predicted=6.5,
    offset_hz=-410.0,
    phase_rad=(0.125, -3.0),
    time_constant_ms=500.0,
    pattern=None,
    faults=((3, "stuck+", 0.75), (9, "weak", 1.0)),
    together=2,
    statistic=1.5,
    threshold=4.0,
)
ALARM = events.Alarm(5, 6, 7, -8, "interference", None, 5.5, 4.75, "noise", "kept the pattern")


def test_states_travel() -> None:
    """A state carries every binding key of the format, and comes back as it went in."""
    body = encode_state("yard", STATE, {"decode": 40, "update": 900})
    binding = {
        *("v", "link", "run", "seq", "t_ns", "mode", "bursts", "frames", "lost", "duplicate", "refused", "noise"),
        *("innovation", "rate_measured", "offset_hz", "phase_rad", "time_constant_ms", "latency_us", "pattern"),
        "faults",
    }
    assert binding <= set(msgpack.unpackb(body))
    found = decode_state(body)
    assert found.event == STATE
    assert (found.link, found.latency_us) == ("yard", {"decode": 40, "update": 900})


def test_a_state_with_numpy_scalars_travels() -> None:
    """Numbers straight from arrays are sent as plain numbers."""
    state = dataclasses.replace(STATE, noise=tuple(np.array([0.5, 0.25], np.float32)), bursts=int(np.int64(10)))
    assert decode_state(encode_state("yard", state, {})).event == STATE


def test_alarms_travel() -> None:
    """An alarm carries the keys of the format, and comes back as it went in."""
    body = encode_alarm("yard", ALARM)
    assert set(msgpack.unpackb(body)) == {
        *("v", "link", "run", "seq", "t_ns", "since_ns", "kind", "receiver", "statistic", "threshold", "next_kind"),
        "action",
    }
    found = decode_alarm(body)
    assert found.event == ALARM
    assert found.link == "yard"


def test_plans_travel() -> None:
    """A plan of patterns to sound comes back in order, with its reference."""
    patterns = np.packbits(np.random.default_rng(4).integers(0, 2, (6, 20)), axis=1, bitorder="little")
    found = decode_plan(encode_plan("yard", Plan(1, 2, 3, 20, patterns, 5)))
    assert np.array_equal(found.event.patterns, patterns)
    assert (found.event.run, found.event.seq, found.event.t_ns) == (1, 2, 3)
    assert (found.event.elements, found.event.reference, found.link) == (20, 5, "yard")


def test_how_often_and_with_what_service_travels() -> None:
    """Share, flags and net rate come back; the flags are bits as in patterns, decoded here by NumPy alone."""
    served = np.arange(11) % 3 == 1
    body = encode_plan("yard", Plan(1, 2, 3, 9, np.zeros((11, 2), np.uint8), 0, 14, served, 2.5))
    found = decode_plan(body).event
    assert (found.every, found.net_rate) == (14, 2.5)
    assert np.array_equal(found.in_service, served)
    bits = np.frombuffer(msgpack.unpackb(body)["in_service"], np.uint8)
    assert np.array_equal(np.unpackbits(bits, count=11, bitorder="little"), served)


def test_a_plan_that_says_only_what_to_sound_is_understood() -> None:
    """Every frame is sounded then, and none is in service."""
    raw = msgpack.unpackb(encode_plan("yard", Plan(1, 2, 3, 9, np.zeros((2, 2), np.uint8), 1, 5)))
    for key in ("every", "in_service", "net_rate"):
        del raw[key]
    found = decode_plan(msgpack.packb(raw)).event
    assert (found.every, found.net_rate, found.in_service.size) == (1, None, 0)


def test_whole_numbers_stand_for_floats() -> None:
    """Languages without a difference between 1 and 1.0 send integers where the format says float."""
    raw = msgpack.unpackb(encode_alarm("yard", ALARM)) | {"statistic": 5, "threshold": 4}
    found = decode_alarm(msgpack.packb(raw)).event
    assert (found.statistic, found.threshold) == (5.0, 4.0)
    assert isinstance(found.statistic, float)


PATTERN_BODY = encode_pattern("yard", example_pattern(), 1)
STATE_BODY = encode_state("yard", STATE, {"update": 1})
ALARM_BODY = encode_alarm("yard", ALARM)
PLAN_BODY = encode_plan("yard", Plan(1, 2, 3, 9, np.zeros((2, 2), np.uint8), 1))
Decoder = Callable[[bytes], object]

REPORT_CHANGES: list[tuple[Decoder, bytes, str, Any, Reason]] = [
    (decode_pattern, PATTERN_BODY, "v", 2, Reason.VERSION),
    (decode_pattern, PATTERN_BODY, "id", 0, Reason.OUT_OF_RANGE),
    (decode_pattern, PATTERN_BODY, "elements", 40, Reason.SIZES),
    (decode_pattern, PATTERN_BODY, "rate", "high", Reason.WRONG_TYPE),
    (decode_pattern, PATTERN_BODY, "rate", True, Reason.WRONG_TYPE),
    (decode_pattern, PATTERN_BODY, "cause", "whim", Reason.OUT_OF_RANGE),
    (decode_pattern, PATTERN_BODY, "steps", -1, Reason.OUT_OF_RANGE),
    (decode_pattern, PATTERN_BODY, "link", "Yard!", Reason.LINK),
    (decode_pattern, PATTERN_BODY, "bits", ..., Reason.MISSING_KEY),
    (decode_state, STATE_BODY, "v", "1", Reason.WRONG_TYPE),
    (decode_state, STATE_BODY, "mode", "asleep", Reason.OUT_OF_RANGE),
    (decode_state, STATE_BODY, "noise", 0.5, Reason.WRONG_TYPE),
    (decode_state, STATE_BODY, "noise", [0.5, "x"], Reason.WRONG_TYPE),
    (decode_state, STATE_BODY, "noise", [0.5] * 65, Reason.OUT_OF_RANGE),
    (decode_state, STATE_BODY, "phase_rad", [0.5], Reason.SIZES),
    (decode_state, STATE_BODY, "faults", [[1, "weak"]], Reason.WRONG_TYPE),
    (decode_state, STATE_BODY, "faults", [[1, 2, 3]], Reason.WRONG_TYPE),
    (decode_state, STATE_BODY, "latency_us", {"update": 1.5}, Reason.WRONG_TYPE),
    (decode_state, STATE_BODY, "latency_us", [1], Reason.WRONG_TYPE),
    (decode_state, STATE_BODY, "bursts", True, Reason.WRONG_TYPE),
    (decode_state, STATE_BODY, "threshold", ..., Reason.MISSING_KEY),
    (decode_alarm, ALARM_BODY, "receiver", 64, Reason.OUT_OF_RANGE),
    (decode_alarm, ALARM_BODY, "kind", None, Reason.WRONG_TYPE),
    (decode_alarm, ALARM_BODY, "kind", "x" * 65, Reason.OUT_OF_RANGE),
    (decode_plan, PLAN_BODY, "reference", 2, Reason.OUT_OF_RANGE),
    (decode_plan, PLAN_BODY, "patterns", b"abc", Reason.SIZES),
    (decode_plan, PLAN_BODY, "patterns", [1, 2], Reason.WRONG_TYPE),
    (decode_plan, PLAN_BODY, "every", 0, Reason.OUT_OF_RANGE),
    (decode_plan, PLAN_BODY, "in_service", b"abc", Reason.SIZES),
    (decode_plan, PLAN_BODY, "net_rate", "much", Reason.WRONG_TYPE),
    (decode_request, encode_request("status"), "do", "dance", Reason.OUT_OF_RANGE),
    (decode_request, encode_request("status"), "do", 1, Reason.WRONG_TYPE),
    (decode_request, encode_request("status"), "v", 3, Reason.VERSION),
    (decode_reply, encode_reply(), "ok", 1, Reason.WRONG_TYPE),
    (decode_reply, encode_reply("no"), "error", ..., Reason.MISSING_KEY),
]


@pytest.mark.parametrize(
    ("decode", "body", "key", "value", "reason"),
    REPORT_CHANGES,
    ids=[f"{row[0].__name__}-{row[2]}-{row[4]}" for row in REPORT_CHANGES],
)
def test_other_messages_are_refused_for_their_reason(
    decode: Decoder, body: bytes, key: str, value: Any, reason: Reason
) -> None:
    """Patterns, states, alarms, plans, requests and answers are checked like bursts."""
    raw = {name: item for name, item in (msgpack.unpackb(body) | {key: value}).items() if item is not ...}
    with pytest.raises(Refused) as caught:
        decode(msgpack.packb(raw))
    assert caught.value.reason == reason


@pytest.mark.parametrize("decode", [decode_pattern, decode_state, decode_alarm, decode_plan, decode_request])
@pytest.mark.parametrize(
    ("body", "reason"),
    [
        (b"\xff", Reason.NOT_A_MAP),
        (b"\x81", Reason.NOT_MSGPACK),
        (msgpack.packb({"x": 1}) + b"\x00", Reason.NOT_MSGPACK),
        (b"\x80" + bytes(MOST_BODY), Reason.TOO_LARGE),
    ],
)
def test_other_messages_must_be_maps(decode: Decoder, body: bytes, reason: Reason) -> None:
    """Bytes that are no map, or too many, are refused by every decoder."""
    with pytest.raises(Refused) as caught:
        decode(body)
    assert caught.value.reason == reason


@pytest.mark.parametrize("verb", list(Verb))
def test_requests_travel(verb: Verb) -> None:
    """A request comes back as its verb and its arguments."""
    found = decode_request(encode_request(verb, bits=b"\x01", note="by hand"))
    assert found.verb is verb
    assert found.args == {"bits": b"\x01", "note": "by hand"}


def test_the_verbs_are_those_of_the_format() -> None:
    """Other programs send these words."""
    assert set(Verb) == {"status", "hold", "resume", "refresh", "relearn", "adopt", "settings", "stop"}


def test_answers_travel() -> None:
    """An answer says that it was done and gives values, or says why not."""
    good = decode_reply(encode_reply(mode="tracking", seq=4))
    assert (good.ok, good.error, good.values) == (True, None, {"mode": "tracking", "seq": 4})
    bad = decode_reply(encode_reply("there is no pattern yet", seq=4))
    assert (bad.ok, bad.error, bad.values) == (False, "there is no pattern yet", {"seq": 4})
    assert msgpack.unpackb(encode_reply("no")) == {"v": 1, "ok": False, "error": "no"}


def test_topics_are_kind_and_link() -> None:
    """A topic is KIND/LINK in ASCII, and is taken apart again."""
    assert topic("pilots", "yard-2") == b"pilots/yard-2"
    assert parse_topic(b"pilots/yard-2") == ("pilots", "yard-2")
    assert parse_topic("state/a") == ("state", "a")


@pytest.mark.parametrize("link", ["", "Yard", "a b", "a/b", "x" * 33, "yärd", "yard\n"])
def test_a_link_that_cannot_be_is_no_topic(link: str) -> None:
    """Links are 1 to 32 of a-z, 0-9 and -; others are refused on arrival, and a fault of the caller when sent."""
    with pytest.raises(ValueError, match="no topic"):
        topic("pilots", link)
    with pytest.raises(Refused) as caught:
        parse_topic(f"pilots/{link}".encode())
    assert caught.value.reason == Reason.LINK
