"""Events of the engine as messages: topic, body and time, the same for the live service and for a replay."""

from collections.abc import Mapping

from tracker.engine.events import Alarm, Event, Pattern, Plan
from tracker.messages import encode_alarm, encode_pattern, encode_plan, encode_state


def encode(link: str, event: Event, latency_us: int, stages_us: Mapping[str, int]) -> tuple[str, bytes, int]:
    """Encode an event.

    Parameters
    ----------
    link : str
    event : Event
    latency_us : int
        From the burst's arrival to now, µs; 0 in a replay.
    stages_us : mapping
        Latency by stage, µs, for a state.

    Returns
    -------
    kind : str
        ``pattern``, ``alarm``, ``plan`` or ``state``; the topic is kind/link.
    body : bytes
    t_ns : int
    """
    if isinstance(event, Pattern):
        return "pattern", encode_pattern(link, event, latency_us), event.t_ns
    if isinstance(event, Alarm):
        return "alarm", encode_alarm(link, event), event.t_ns
    if isinstance(event, Plan):
        return "plan", encode_plan(link, event), event.t_ns
    return "state", encode_state(link, event, stages_us), event.t_ns
