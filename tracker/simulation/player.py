"""Plays a testbed in real time: bursts out, patterns and plans in, like the controller of a real one."""

import time
from collections.abc import Callable
from dataclasses import dataclass
from types import TracebackType
from typing import Any

import msgpack
import zmq

from tracker.messages import Refused, decode_pattern, decode_plan, encode_pilots, topic
from tracker.simulation.searcher import Known, Searcher
from tracker.simulation.testbed import Testbed

MOST_BURST = 512 * 1024
"""Bytes of a burst; larger messages cost several times more a byte."""
QUEUED = 2000
"""Bursts that may wait for a slow listener."""
LINGER_MS = 500
LOOK_EVERY_S = 5.0
"""Time over which the pace is looked at."""
LATE_SHARE = 0.1
"""Share of bursts begun late above which the user is told."""
LONGEST_POLL_S = 0.1
"""So long a stop may go unnoticed."""


class PlayerError(Exception):
    """Cannot play; the message is one line for the user."""


class Endpoints:
    """The controller's two sockets; use as a context manager.

    Parameters
    ----------
    pilots : str
        Where to bind for bursts and truth.
    publish : str
        The tracker's endpoint, to connect to for patterns and plans; it need not be there yet.
    link : str

    Raises
    ------
    PlayerError
        When an endpoint cannot be used.
    """

    def __init__(self, pilots: str, publish: str, link: str) -> None:
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self.out = self._context.socket(zmq.PUB)
        self.out.setsockopt(zmq.SNDHWM, QUEUED)
        self.patterns = self._context.socket(zmq.SUB)
        self.pattern_topic = topic("pattern", link)
        self.plan_topic = topic("plan", link)
        for name in (self.pattern_topic, self.plan_topic):
            self.patterns.setsockopt(zmq.SUBSCRIBE, name)
        for action, option, endpoint in (
            (self.out.bind, "--pilots", pilots),
            (self.patterns.connect, "--publish", publish),
        ):
            try:
                action(endpoint)
            except zmq.ZMQError as error:
                self.close()
                hint = "is another testbed playing there?" if error.errno == zmq.EADDRINUSE else "check the endpoint"
                raise PlayerError(f"{option}: {endpoint} cannot be used: {error.strerror}; {hint}") from None

    def close(self) -> None:
        """Close both, giving what was sent a moment to leave."""
        self._context.destroy(linger=LINGER_MS)

    def __enter__(self) -> "Endpoints":
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


@dataclass(slots=True)
class Played:
    """What was played so far.

    Parameters
    ----------
    bursts, patterns, plans, truths : int
        Sent, applied, obeyed, sent.
    refused : int
        Patterns and plans that could not be used.
    late : int
        Bursts that began later than the pace asked for.
    """

    bursts: int = 0
    patterns: int = 0
    plans: int = 0
    truths: int = 0
    refused: int = 0
    late: int = 0


class Player:
    """Sends bursts at a pace, or as plans ask for them, and applies the patterns that come back.

    Frames carry the times at which they would have been on the air. When the machine is too slow for the pace, bursts
    begin later and say so in their times; it never sends old times.

    Parameters
    ----------
    testbed : Testbed
    endpoints : Endpoints
    link : str
    bursts_per_s : float
    now_ns : callable
        Returns the time, ns since the Unix epoch; steady.
    say : callable
        Takes a line for the user.
    searcher : Searcher or None
        Works out what is true; without it no `truth` is sent.
    truth_every_s : float
    """

    def __init__(
        self,
        testbed: Testbed,
        endpoints: Endpoints,
        link: str,
        bursts_per_s: float,
        now_ns: Callable[[], int],
        say: Callable[[str], None],
        searcher: Searcher | None = None,
        truth_every_s: float = 0.25,
    ) -> None:
        self._testbed, self._endpoints, self._link = testbed, endpoints, link
        self._now_ns, self._say = now_ns, say
        self._searcher, self._truth_every_ns = searcher, round(truth_every_s * 1e9)
        self._period_ns = 0 if testbed.config.obeys else round(1e9 / bursts_per_s)
        self._pilots_topic, self._truth_topic = topic("pilots", link), topic("truth", link)
        self._stopping = False
        self._truth_due_ns = 0
        self._last: tuple[int, int] | None = None
        self._looked: tuple[int, int, int] | None = None  # time, bursts and late ones at the last look at the pace
        self.played = Played()

    def stop(self) -> None:
        """End after the burst under way; may be called from a signal handler."""
        self._stopping = True

    def run(self, most_bursts: int | None = None, until_ns: int | None = None) -> None:
        """Play until stopped, or so many bursts, or until a time.

        Raises
        ------
        PlayerError
            When bursts are too large to send.
        """
        due_ns = self._now_ns()
        while not self._stopping:
            if most_bursts is not None and self.played.bursts >= most_bursts:
                return
            if until_ns is not None and due_ns >= until_ns:
                return
            self._wait(due_ns)
            if self._stopping:
                return
            took_ns = self._burst(due_ns)
            self._truth()
            due_ns += max(self._period_ns, took_ns)
            now_ns = self._now_ns()
            if now_ns > due_ns:
                self.played.late += 1
                due_ns = now_ns
            self._look_at_pace(now_ns)

    def _burst(self, t_ns: int) -> int:
        """Sound a burst and send it; return how long it took on the air, ns."""
        took_ns = self._testbed.burst_ns
        burst = self._testbed.next_burst(t_ns)
        body = encode_pilots(self._link, burst)
        if len(body) > MOST_BURST:
            raise PlayerError(f"a burst has {len(body)} bytes, at most {MOST_BURST} travel well; use fewer --frames")
        # The last frame has to be on the air before the burst can be complete.
        self._wait(t_ns + took_ns)
        self._endpoints.out.send_multipart([self._pilots_topic, body])
        self.played.bursts += 1
        self._last = (burst.run, burst.seq)
        return took_ns

    def _wait(self, until_ns: int) -> None:
        """Take in patterns and plans until a time; at least those that are there already."""
        while True:
            left_s = (until_ns - self._now_ns()) / 1e9
            # Poll waits whole milliseconds; the last one is slept away.
            wait_ms = int(min(max(left_s, 0.0), LONGEST_POLL_S) * 1e3)
            while self._endpoints.patterns.poll(wait_ms):
                self._take(self._endpoints.patterns.recv_multipart())
                wait_ms = 0
            if self._stopping or left_s <= 0:
                return
            if left_s < 1e-3:
                time.sleep(max((until_ns - self._now_ns()) / 1e9, 0.0))
                return

    def _take(self, parts: list[bytes]) -> None:
        """Apply a pattern, obey a plan; pass by what is neither."""
        if len(parts) != 2:
            return
        try:
            if parts[0] == self._endpoints.pattern_topic:
                event = decode_pattern(parts[1]).event
                self._testbed.apply(event.id, event.states)
                self.played.patterns += 1
            elif parts[0] == self._endpoints.plan_topic:
                self._testbed.obey(decode_plan(parts[1]).event)
                self.played.plans += 1
        except (Refused, ValueError) as error:
            if not self.played.refused:
                self._say(f"a pattern or plan cannot be used and the one in force stays: {error}")
            self.played.refused += 1

    def _truth(self) -> None:
        searcher = self._searcher
        if searcher is None:
            return
        try:
            answer = searcher.answer()
            if answer is not None:
                self._send_truth(answer)
            now_ns = self._now_ns()
            if now_ns >= self._truth_due_ns and not searcher.busy:
                self._truth_due_ns = now_ns + self._truth_every_ns
                searcher.ask(now_ns, self._testbed.pattern_id, self._testbed.states, self._testbed.plan)
        except (EOFError, OSError):
            self._searcher = None
            self._say("the search for the best rate ended by itself; bursts go on, what is true is no longer sent")

    def _send_truth(self, known: Known) -> None:
        run, seq = self._last or (0, 0)
        values: dict[str, Any] = {
            "v": 1,
            "link": self._link,
            "run": run,
            "seq": seq,
            "t_ns": known.t_ns,
            "pattern": known.pattern_id,
            "rate": known.rate,
            "best": known.best,
            "event": known.happening,
        }
        if known.net is not None:
            values["net"] = known.net
        self._endpoints.out.send_multipart([self._truth_topic, msgpack.packb(values)])
        self.played.truths += 1

    def _look_at_pace(self, now_ns: int) -> None:
        """Tell the user when the machine is too slow; times are true all the same."""
        now = (now_ns, self.played.bursts, self.played.late)
        if self._looked is None:
            self._looked = now
        took_s = (now_ns - self._looked[0]) / 1e9
        if took_s < LOOK_EVERY_S:
            return
        bursts, late = now[1] - self._looked[1], now[2] - self._looked[2]
        self._looked = now
        asked = 1e9 / max(self._period_ns, self._testbed.burst_ns)
        # A stream has no pause to catch up in: there bursts may be late by a little without falling behind.
        if late > LATE_SHARE * bursts and bursts / took_s < (1.0 - LATE_SHARE) * asked:
            self._say(
                f"this machine gives {bursts / took_s:.0f} bursts/s where {asked:.0f} were asked for; times stay true"
            )


def steady_clock() -> Callable[[], int]:
    """Make a clock that starts at the time of day and then never jumps."""
    offset_ns = time.time_ns() - time.monotonic_ns()
    return lambda: time.monotonic_ns() + offset_ns
