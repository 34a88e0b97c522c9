"""Bursts that are not as they should be: refused with the right reason, counted, told, and never fatal."""

import io
import json
import logging
import time
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import msgpack
import numpy as np
import structlog

from tests.service.station import PATIENCE_S, Controller, bursts, running, without
from tracker.engine.burst import Burst
from tracker.messages import Reason, encode_pilots


def changed(burst: Burst, **keys: Any) -> bytes:
    """The body of a burst with keys replaced; None takes a key out."""
    values = {**msgpack.unpackb(encode_pilots("yard", burst)), **keys}
    body: bytes = msgpack.packb({key: value for key, value in values.items() if value is not None})
    return body


def one_for_each_reason(taken: Burst, fresh: Burst) -> dict[Reason, bytes]:
    """A body for every reason, given a burst that was taken as seq 1 and a fresh one."""
    far_ns = 10**12
    return {
        Reason.NOT_MSGPACK: encode_pilots("yard", fresh)[:-1],
        Reason.NOT_A_MAP: msgpack.packb([1, 2, 3]),
        Reason.TOO_LARGE: msgpack.packb({str(number): 0 for number in range(300)}),
        Reason.VERSION: changed(fresh, v=2),
        Reason.LINK: changed(fresh, link="field"),
        Reason.MISSING_KEY: changed(fresh, seq=None),
        Reason.WRONG_TYPE: changed(fresh, seq="two"),
        Reason.OUT_OF_RANGE: changed(fresh, frames=0),
        Reason.SIZES: changed(fresh, frames=7),
        Reason.SETTINGS: changed(fresh, tones=8, receivers=2),
        Reason.NOT_FINITE: encode_pilots("yard", without(fresh, list(range(fresh.frames)))),
        Reason.OUT_OF_ORDER: encode_pilots("yard", replace(fresh, seq=0)),
        Reason.DUPLICATE: encode_pilots("yard", taken),
        Reason.FAR_FUTURE: changed(fresh, t_ns=fresh.t_ns + far_ns),
        Reason.FAR_PAST: changed(fresh, t_ns=fresh.t_ns - far_ns),
    }


def test_every_reason_is_counted_under_its_name(controller: Controller) -> None:
    """One message for each reason of the format: one refusal each in the status, all in the state, the rest goes on."""
    _, taken, fresh = bursts(3)
    with running(controller) as this:
        controller.step(replace(taken, seq=1))
        bodies = one_for_each_reason(replace(taken, seq=1), replace(fresh, seq=2))
        assert set(bodies) == set(Reason)
        for body in bodies.values():
            controller.send_body(body)
        state = controller.step(replace(fresh, seq=2))
        refused = controller.ask("status").values["refused"]
    assert refused == {str(reason): 1 for reason in Reason}
    assert (state.refused, state.duplicate, state.bursts) == (len(Reason) - 1, 1, 2)
    assert this.fault is None


def test_a_wrong_clock_is_told_though_no_burst_is_taken(controller: Controller) -> None:
    """When the controller's clock is wrong every burst is refused: the alarm goes out all the same, once."""
    (burst,) = bursts(1)
    with running(controller):
        for _ in range(5):
            controller.send_body(changed(burst, t_ns=burst.t_ns + 10**12))
        controller.listen(lambda heard: bool(heard.alarm))
        # The alarm comes with the first of them; the others may still be on their way.
        until = time.monotonic() + PATIENCE_S
        while (refused := controller.ask("status").values["refused"]) != {"far-future": 5}:
            assert time.monotonic() < until, refused
        heard = controller.listen_up()
    (alarm,) = heard.alarm
    assert (alarm.kind, alarm.action) == ("clock", "burst refused")
    assert abs(alarm.t_ns - time.time_ns()) < 60e9


def test_refusals_are_told_once_a_second_at_most(controller: Controller) -> None:
    """Hundreds of refusals leave few lines in the log, which account for all of them."""
    lines = io.StringIO()
    log = structlog.wrap_logger(
        structlog.PrintLogger(lines),
        wrapper_class=structlog.make_filtering_bound_logger(logging.INFO),
        processors=[structlog.processors.TimeStamper(fmt="iso", utc=True), structlog.processors.JSONRenderer()],
    )
    began = time.monotonic()
    with running(controller, log=log):
        for turn in range(6):
            for _ in range(100):
                controller.send_body(b"junk")
            until, refused = time.monotonic() + 0.25, dict[str, int]()
            while time.monotonic() < until or refused != {"not-a-map": 100 * (turn + 1)}:
                refused = controller.ask("status").values["refused"]
                assert time.monotonic() < until + PATIENCE_S, refused
    took_s = time.monotonic() - began
    told = [line for line in map(json.loads, lines.getvalue().splitlines()) if line["event"] == "refused"]
    assert sum(line["by_reason"]["not-a-map"] for line in told) == 600
    assert len(told) >= 2
    # One at the beginning, one in each second that has passed since, and one when the service ends.
    assert len(told) <= int(took_s) + 2


def test_lost_bursts_raise_a_gap_alarm(controller: Controller) -> None:
    """Five missing numbers: one alarm that says five, and five in the state's count."""
    played = bursts(9)
    with running(controller):
        for burst in played[:2]:
            controller.step(burst)
        state = controller.step(played[7])
        controller.step(played[8])
    (alarm,) = controller.heard.alarm
    assert (alarm.kind, alarm.statistic, alarm.seq) == ("gap", 5.0, 7)
    assert alarm.since_ns == played[7].t_ns
    assert state.lost == 5


def test_frames_that_are_not_finite_are_left_out(controller: Controller) -> None:
    """NaN in three frames of eight: the other five are used, three are counted."""
    first, second = bursts(2)
    with running(controller):
        controller.step(first)
        state = controller.step(without(second, [0, 3, 7]))
        status = controller.ask("status").values
    assert (state.frames, state.dropped_frames) == (8 + 5, 3)
    assert (status["frames"], status["dropped_frames"]) == (8 + 5, 3)
    assert np.isfinite(state.noise).all()


def test_another_link_is_none_of_ours(controller: Controller) -> None:
    """Bursts of a link whose name begins like this one's reach the socket, and are neither used nor counted."""
    first, second = bursts(2)
    with running(controller):
        controller.send_body(encode_pilots("yard-2", first), topic="pilots/yard-2")
        state = controller.step(second)
        status = controller.ask("status").values
    assert (state.seq, state.bursts, state.refused) == (second.seq, 1, 0)
    assert (status["bursts"], status["refused"]) == (1, {})


def test_the_settings_say_how_far_clocks_may_differ(make_controller: Callable[..., Controller]) -> None:
    """A burst two seconds old is refused where one second is allowed."""
    controller = make_controller(link="clock_skew_s = 1.0")
    first, second = bursts(2)
    with running(controller):
        controller.send_body(changed(first, t_ns=first.t_ns - 2 * 10**9))
        controller.step(second)
        assert controller.ask("status").values["refused"] == {"far-past": 1}
