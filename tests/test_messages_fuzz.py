"""Whatever the bytes, a decoder returns a checked value or raises `Refused`: 300 000 seeded mutations."""

import random
import tracemalloc
from collections.abc import Callable, Iterator
from typing import Any

import msgpack
import numpy as np
import pytest

from tracker.engine.burst import Burst
from tracker.messages import (
    MOST_BODY,
    Refused,
    Shape,
    decode_alarm,
    decode_pattern,
    decode_pilots,
    decode_plan,
    decode_reply,
    decode_request,
    decode_state,
    encode_pilots,
)

SHAPE = Shape(elements=19, receivers=2, tones=3)


def seed_body(frames: int = 2) -> bytes:
    rng = np.random.default_rng(1)
    burst = Burst(
        run=2**60,
        seq=3,
        t_ns=1_700_000_000_000_000_000,
        dt_ns=35_714,
        elements=19,
        patterns=rng.integers(0, 256, (frames, 3), np.uint8),
        response=rng.normal(size=(frames, 2, 6)).astype(np.float32).view(np.complex64),
        keep=np.ones(frames, np.bool_),
        pattern_id=1,
    )
    return encode_pilots("yard", burst)


def check(body: bytes, shape: Shape | None) -> bool:
    """Decode; a burst that comes out must be whole in itself. Returns whether one did."""
    try:
        burst = decode_pilots(body, "yard", shape)
    except Refused:
        return False
    frames, receivers, tones = burst.response.shape
    assert burst.patterns.shape == (frames, (burst.elements + 7) // 8)
    assert burst.keep.shape == (frames,)
    assert burst.keep.any()
    assert np.isfinite(burst.response[burst.keep]).all()
    assert 0 <= burst.run < 2**64
    assert 0 <= burst.seq < 2**64
    assert -(2**63) <= burst.t_ns <= burst.end_ns < 2**63
    assert shape is None or (burst.elements, receivers, tones) == (shape.elements, shape.receivers, shape.tones)
    return True


def flipped(rng: random.Random, body: bytes) -> bytes:
    data = bytearray(body)
    for _ in range(rng.choice((1, 1, 1, 2, 5))):
        data[rng.randrange(len(data))] = rng.randrange(256)
    return bytes(data)


def flipped_head(rng: random.Random, body: bytes) -> bytes:
    """Change one byte ahead of the binaries, where the types and counts lie."""
    data = bytearray(body)
    data[rng.randrange(body.index(b"patterns"))] = rng.randrange(256)
    return bytes(data)


def cut(rng: random.Random, body: bytes) -> bytes:
    return body[: rng.randrange(len(body))]


def spliced(rng: random.Random, body: bytes) -> bytes:
    """Take out, double or put in a run of bytes."""
    start, length = rng.randrange(len(body)), rng.randrange(1, 12)
    middle = rng.choice((b"", body[start : start + length] * 2, rng.randbytes(length)))
    return body[:start] + middle + body[start + length :]


def noise(rng: random.Random, body: bytes) -> bytes:
    return rng.choice((b"", b"\x8d", body[:40])) + rng.randbytes(rng.randrange(60))


def value(rng: random.Random, depth: int = 0) -> Any:
    """Make any value that MessagePack can carry, often at the edges of its range."""
    kind = rng.randrange(9 if depth < 3 else 7)
    if kind == 0:
        return rng.choice((0, 1, -1, 2, 3, 19, 127, 128, 2**31, 2**32, 2**63 - 1, 2**63, 2**64 - 1, -(2**63)))
    if kind == 1:
        return rng.choice((None, True, False, msgpack.ExtType(rng.randrange(128), rng.randbytes(3))))
    if kind == 2:
        return rng.choice((0.0, 1.0, float("nan"), float("inf"), 1e300))
    if kind == 3:
        return rng.choice(("", "yard", "é" * 5, "x" * 40))
    if kind in (4, 5, 6):
        return rng.randbytes(rng.choice((0, 1, 6, 32, 96)))
    if kind == 7:
        return [value(rng, depth + 1) for _ in range(rng.randrange(4))]
    return {rng.choice("abc"): value(rng, depth + 1) for _ in range(rng.randrange(4))}


def changed(rng: random.Random, body: bytes) -> bytes:
    """Change the map itself: values swapped for others of any type, keys lost, renamed or added."""
    values = dict(msgpack.unpackb(body))
    for _ in range(rng.choice((1, 1, 2, 4))):
        key = rng.choice(sorted(values, key=str))
        what = rng.randrange(4)
        if what == 0:
            del values[key]
        elif what == 1:
            values[rng.choice(("x", 7, b"seq", key + "s" if isinstance(key, str) else None))] = values.pop(key)
        elif what == 2 and isinstance(values[key], int):
            values[key] = max(-(2**63), min(2**64 - 1, values[key] + rng.choice((-1, 1, 256))))
        else:
            values[key] = value(rng)
    packed: bytes = msgpack.packb(values)
    return packed


Mutation = Callable[[random.Random, bytes], bytes]
MUTATIONS: tuple[Mutation, ...] = (flipped, flipped_head, cut, spliced, noise, changed)


@pytest.mark.parametrize("mutation", MUTATIONS, ids=lambda mutation: mutation.__name__)
@pytest.mark.parametrize("shape", [SHAPE, None], ids=["settings", "any"])
def test_mutated_bursts_are_refused_or_whole(mutation: Mutation, shape: Shape | None) -> None:
    """25 000 mutations of a kind: never another error than `Refused`, never a burst that is not whole."""
    body = seed_body()
    assert check(body, shape)
    rng = random.Random(f"{mutation.__name__} {shape}")
    taken = sum(check(mutation(rng, body), shape) for _ in range(25_000))
    assert taken < 25_000, "the mutations must do some harm"


HEAD = {"v": 1, "link": "yard", "run": 1, "seq": 2, "t_ns": 3}
RATES = {"rate": 3.0, "rate_low": 2.0, "rate_before": 1.0, "rate_bound": 4.0}
COUNTS = dict.fromkeys(("bursts", "frames", "lost", "duplicate", "refused", "dropped_frames", "together"), 1)
OTHERS: tuple[dict[str, Any], ...] = (
    {"id": 4, "elements": 9, "bits": b"ab", **RATES, "cause": "first", "steps": 5, "latency_us": 6},
    {"frames": 2, "elements": 9, "patterns": b"abcd", "reference": 1},
    {"since_ns": 1, "kind": "noise", "receiver": 0, "statistic": 5.0, "threshold": 4.0, "next_kind": "", "action": ""},
    {"do": "adopt", "ok": True, "bits": b"ab"},
    {
        **COUNTS,
        **{"mode": "tracking", "noise": [1.0], "innovation": [1.0], "offset_hz": 0.0, "phase_rad": [0.0, 0.0]},
        **{"time_constant_ms": 500.0, "latency_us": {"update": 1}, "faults": [[1, "weak", 0.5]]},
        **{"statistic": 1.0, "threshold": 2.0},
    },
)


@pytest.mark.parametrize(
    "decode", [decode_pattern, decode_state, decode_alarm, decode_plan, decode_request, decode_reply]
)
def test_other_decoders_refuse_noise(decode: Callable[[bytes], object]) -> None:
    """Random maps and bytes raise nothing but `Refused` from any decoder, and each decoder takes its own kind."""
    seeds = tuple(msgpack.packb({**HEAD, **values}) for values in OTHERS)
    rng = random.Random(2)
    taken = sum(accepted(decode, body) for body in seeds)
    assert taken == 1
    assert 0 < sum(accepted(decode, body) for body in mutated(rng, seeds, 4000)) < 2000


def accepted(decode: Callable[[bytes], object], body: bytes) -> bool:
    try:
        decode(body)
    except Refused:
        return False
    return True


def mutated(rng: random.Random, seeds: tuple[bytes, ...], count: int) -> Iterator[bytes]:
    for _ in range(count):
        yield rng.choice((flipped, cut, spliced, changed))(rng, rng.choice(seeds))


def test_a_hostile_body_costs_no_memory() -> None:
    """Lists of empty maps, which unpack to 64 times their size, are stepped over or refused, never built."""
    bomb = b"\xdd" + (4_000_000).to_bytes(4, "big") + b"\x80" * 4_000_000
    known, unknown = b"\x81\xa4link" + bomb, b"\x81\xa4heap" + bomb
    tracemalloc.start()
    assert not check(known, None)
    assert not check(unknown, None)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert len(bomb) < MOST_BODY
    assert peak < 3 * len(bomb)
