"""Snapshots as bytes: what goes in comes out to the last bit, and bytes of any kind raise one documented error."""

from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.service.station import RESTLESS, bursts, settings_text
from tracker.assembly import configure
from tracker.engine.events import Event, Pattern, State
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker
from tracker.settings import parse
from tracker.snapshots import SnapshotError, Start, pack_start, unpack_start

ARRAYS = [
    np.arange(6, dtype=np.float64).reshape(2, 3),
    np.asfortranarray(np.arange(6, dtype=np.float64).reshape(2, 3)),
    np.array([np.nan, -np.nan, np.inf, -0.0, 5e-324]),
    np.array([1 + 2j, -3j], dtype=np.complex64),
    np.array([[1, -1]], dtype=np.int8),
    np.array([True, False]),
    np.zeros((0, 3)),
    np.array(2.5),
    np.arange(12.0)[::2],
    np.arange(4, dtype=">f8"),
]


@pytest.mark.parametrize("array", ARRAYS, ids=lambda array: f"{array.dtype} {array.shape}")
def test_arrays_come_back_as_they_were(array: np.ndarray[Any, Any]) -> None:
    """Values, kind, shape and order in memory: sums run in the order of memory, and so do their rounding errors."""
    snapshot = unpack_start(pack_start(Start(1, {"a": array}))).snapshot
    assert snapshot is not None
    back = snapshot["a"]
    assert (back.dtype, back.shape) == (array.dtype, array.shape)
    assert back.tobytes() == array.tobytes()
    assert back.flags.writeable
    if array.flags.f_contiguous != array.flags.c_contiguous:
        assert back.flags.f_contiguous == array.flags.f_contiguous


PLAIN = st.recursive(
    st.none() | st.booleans() | st.integers(-(2**63), 2**64 - 1) | st.floats(allow_nan=False) | st.text() | st.binary(),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(), inner, max_size=4),
    max_leaves=20,
)


@given(first_id=st.integers(1, 2**64 - 1), snapshot=st.none() | st.dictionaries(st.text(), PLAIN, max_size=4))
def test_plain_values_come_back_as_they_were(first_id: int, snapshot: dict[str, Any] | None) -> None:
    """Numbers, text, bytes, lists and maps, nested as they like."""
    back = unpack_start(pack_start(Start(first_id, snapshot)))
    assert (back.first_id, back.snapshot) == (first_id, snapshot)


@given(st.binary(max_size=200))
def test_bytes_of_any_kind_raise_one_error(data: bytes) -> None:
    """One line for the user, never anything else."""
    with pytest.raises(SnapshotError) as caught:
        unpack_start(data)
    assert "\n" not in str(caught.value)


@given(at=st.integers(0), bit=st.integers(0, 7), end=st.integers(0))
def test_spoilt_snapshots_raise_the_same_error_or_none(at: int, bit: int, end: int) -> None:
    """A bit flipped or the end missing."""
    data = bytearray(pack_start(Start(5, {"a": ARRAYS[0], "b": [1, 2.5, None, "text"]})))
    data[at % len(data)] ^= 1 << bit
    for spoilt in (bytes(data), bytes(data[: end % len(data)])):
        try:
            assert isinstance(unpack_start(spoilt), Start)
        except SnapshotError as error:
            assert "\n" not in str(error)  # noqa: PT017 - whether it raises depends on the bit


def test_objects_are_never_unpacked() -> None:
    """An array of Python objects would be memory addresses from a file."""
    head = msgpack.packb(["|O", [1], "C"])
    data = msgpack.packb({"v": 1, "first_id": 1, "snapshot": {"a": msgpack.ExtType(1, head + b"\x00" * 8)}})
    with pytest.raises(SnapshotError):
        unpack_start(data)


def test_what_is_no_plain_value_cannot_be_packed() -> None:
    """A fault of ours: it must show when the snapshot is made, not when it is needed."""
    with pytest.raises(TypeError, match="set"):
        pack_start(Start(1, {"a": {1, 2}}))


def said(events: list[Event]) -> list[tuple[object, ...]]:
    """What patterns and states say, floats to the last bit."""
    found: list[tuple[object, ...]] = []
    for event in events:
        if isinstance(event, Pattern):
            found.append((event.id, event.seq, event.states.tobytes(), event.rate.hex(), event.rate_low.hex()))
        elif isinstance(event, State):
            found.append((event.seq, event.mode, event.noise, event.innovation, event.statistic, event.rate_measured))
    return found


@pytest.mark.parametrize("follow", ["false", "true"])
@pytest.mark.parametrize("at", [0, 1, 7, 25])
def test_a_tracker_goes_on_from_its_snapshot_bit_by_bit(at: int, follow: str) -> None:
    """Packed and unpacked amid a stream of bursts, with verbs outstanding, another tracker does what the first does."""
    config = configure(
        parse(settings_text("tcp://127.0.0.1:1", estimator=RESTLESS, follow=f"phase = {follow}")), Path()
    )
    played = bursts(50)
    first = Tracker(config, 40)
    for burst in played[:at]:
        first.admit(burst, burst.end_ns)
        first.advance([burst], Steps(12))
    first.refresh()
    start = unpack_start(pack_start(Start(first.next_id, first.snapshot())))
    second = Tracker(config, start.first_id)
    assert start.snapshot is not None
    second.load(start.snapshot)
    for burst in played[at:]:
        for each in (first, second):
            each.admit(burst, burst.end_ns)
        assert said(first.advance([burst], Steps(12)).events) == said(second.advance([burst], Steps(12)).events)
    assert pack_start(Start(1, first.snapshot())) == pack_start(Start(1, second.snapshot()))
