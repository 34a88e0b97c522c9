"""The service over its sockets: a burst in, a state and a pattern out, and what an operator's program can ask."""

import random
from collections.abc import Callable

import msgpack
import numpy as np
import pytest

from tests.service.station import Controller, bursts, running
from tracker.engine import panel
from tracker.engine.events import Cause, Mode


def test_a_burst_in_gives_a_pattern_and_a_state_out(controller: Controller) -> None:
    """The first burst already leads to a pattern with id 1, and to a state; both name the burst they rest on."""
    with running(controller):
        (burst,) = bursts(1)
        controller.send(burst)
        heard = controller.listen(lambda heard: bool(heard.state))
    (pattern,), (state,) = heard.pattern, heard.state
    assert (pattern.id, pattern.cause) == (1, Cause.FIRST)
    assert (pattern.run, pattern.seq, pattern.t_ns) == (burst.run, burst.seq, burst.end_ns)
    assert (state.run, state.seq, state.t_ns) == (burst.run, burst.seq, burst.end_ns)
    assert (state.bursts, state.frames) == (1, burst.frames)
    assert set(np.unique(pattern.states)) <= {-1, 1}
    assert pattern.states.shape == (16,)
    assert heard.latency_us[0] > 0


def test_status_says_what_was_taken(controller: Controller) -> None:
    """Counts, mode, latest pattern and journal, as plain values."""
    with running(controller) as this:
        before = controller.ask("status")
        for burst in bursts(3):
            controller.step(burst)
        after = controller.ask("status")
        assert after.values["journal"] == str(this.journal.path)
    assert (before.ok, before.values["mode"], before.values["bursts"]) == (True, "acquiring", 0)
    assert before.values["latency_us"] == {}
    assert (after.values["bursts"], after.values["frames"], after.values["refused"]) == (3, 24, {})
    assert after.values["pattern"] == controller.heard.pattern[-1].id
    assert 0 < after.values["latency_us"]["median"] <= after.values["latency_us"]["largest"]
    assert after.values["journal_works"] is True


def test_settings_gives_back_the_file(controller: Controller) -> None:
    """The text in force, to the letter."""
    with running(controller):
        assert controller.ask("settings").values["settings"] == controller.path.read_text()


def test_no_pattern_goes_out_while_held(controller: Controller) -> None:
    """Held, the service goes on estimating but leaves the pattern alone; resumed, it publishes again."""
    played = bursts(40)
    with running(controller):
        for burst in played[:10]:
            controller.step(burst)
        assert controller.ask("hold").values["mode"] == "held"
        held_from = len(controller.heard.pattern)
        assert held_from > 1, "patterns come all the time, so that their absence shows"
        for burst in played[10:25]:
            assert controller.step(burst).mode is Mode.HELD
        assert len(controller.heard.pattern) == held_from
        assert controller.ask("resume").ok
        for burst in played[25:]:
            controller.step(burst)
    assert len(controller.heard.pattern) > held_from
    assert [state.bursts for state in controller.heard.state] == list(range(1, 41))


def test_refresh_publishes_whatever_it_gains(make_controller: Callable[..., Controller]) -> None:
    """With a gain that nothing reaches, only the operator's word makes a new pattern."""
    controller = make_controller(refresh="least_gain = 100.0")
    with running(controller):
        for burst in bursts(5):
            controller.step(burst)
        assert [pattern.cause for pattern in controller.heard.pattern] == [Cause.FIRST]
        assert controller.ask("refresh").ok
        controller.step(bursts(6)[5])
    assert [pattern.cause for pattern in controller.heard.pattern] == [Cause.FIRST, Cause.OPERATOR]


def test_relearn_throws_the_estimate_away(controller: Controller) -> None:
    """The tracker is acquiring again, and as sure of nothing as it was at the start."""
    played = bursts(30)
    with running(controller):
        for burst in played[:20]:
            controller.step(burst)
        assert controller.heard.state[-1].mode is Mode.TRACKING
        assert controller.ask("relearn").values["mode"] == "acquiring"
        assert controller.step(played[20]).mode is Mode.ACQUIRING


def test_adopt_publishes_this_pattern(controller: Controller) -> None:
    """The operator's bits come out as they went in, under the next id, with the operator as cause."""
    played = bursts(4)
    states = np.random.default_rng(5).choice(np.array([-1, 1], dtype=np.int8), 16)
    with running(controller):
        for burst in played[:3]:
            controller.step(burst)
        latest = controller.heard.pattern[-1].id
        assert controller.ask("adopt", bits=panel.pack(states).tobytes()).ok
        controller.step(played[3])
    pattern = controller.heard.pattern[-1]
    assert (pattern.id, pattern.cause) == (latest + 1, Cause.OPERATOR)
    assert np.array_equal(pattern.states, states)


@pytest.mark.parametrize(
    ("parts", "wanted"),
    [
        ([b""], "incomplete"),
        ([b"\xc1"], "MessagePack"),
        ([msgpack.packb([1, 2])], "map"),
        ([msgpack.packb({"do": "status"})], "`v`"),
        ([msgpack.packb({"v": 2, "do": "status"})], "version 2"),
        ([msgpack.packb({"v": 1, "do": "dance"})], "'dance'"),
        ([msgpack.packb({"v": 1, "do": 3})], "`do`"),
        ([msgpack.packb({"v": 1, "do": "adopt"})], "`bits`"),
        ([msgpack.packb({"v": 1, "do": "adopt", "bits": b"\x01"})], "2 bytes"),
        ([msgpack.packb({"v": 1, "do": "adopt", "bits": "ab"})], "2 bytes"),
        ([msgpack.packb({"v": 1, "do": "status"})] * 3, "3 parts"),
    ],
)
def test_a_bad_request_is_answered(controller: Controller, parts: list[bytes], wanted: str) -> None:
    """The answer says what is wrong; nothing is changed, and the next request is served."""
    with running(controller) as this:
        reply = controller.ask_body(*parts)
        assert not reply.ok
        assert reply.error is not None
        assert wanted in reply.error
        assert controller.ask("status").ok
    assert this.fault is None


def test_no_request_is_fatal(controller: Controller) -> None:
    """A thousand requests of random bytes, alone and inside of a sound request: each answered."""
    rng = random.Random(3)
    sound = msgpack.packb({"v": 1, "do": "adopt", "bits": b"\x00\x00", "more": [1, {"a": None}]})
    with running(controller) as this:
        for turn in range(1000):
            body = bytearray(sound if turn % 2 else rng.randbytes(rng.randrange(40)))
            for _ in range(rng.randrange(4)):
                if body:
                    body[rng.randrange(len(body))] = rng.randrange(256)
            controller.ask_body(bytes(body))
        assert controller.ask("status").ok
    assert this.fault is None
