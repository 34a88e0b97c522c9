"""`pattern` and `plan`, tracker → controller: what to show now, and what to sound next."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tracker.engine import events
from tracker.engine.panel import pack
from tracker.messages.fields import MOST_ELEMENTS, UINT64, Body, encode, read_flat

MOST_PLANNED = 65536

_HEAD = ("v", "link", "run", "seq", "t_ns", "elements")
_RATES = ("rate", "rate_low", "rate_before", "rate_bound")
_PATTERN_KEYS = frozenset((*_HEAD, *_RATES, "id", "bits", "cause", "steps", "latency_us"))
_PLAN_KEYS = frozenset((*_HEAD, "frames", "patterns", "reference"))


@dataclass(frozen=True, slots=True)
class PatternMessage:
    """A refreshed pattern, its link, and the time from the burst's arrival to the message, µs."""

    link: str
    event: events.Pattern
    latency_us: int


@dataclass(frozen=True, slots=True, eq=False)
class Plan:
    """Patterns to sound next, in order.

    Parameters
    ----------
    run, seq, t_ns : int
        The last burst that the plan rests on, and the time of its last frame.
    elements : int
        N.
    patterns : ndarray of uint8, shape (P, ceil(N/8))
        Packed as in a burst.
    reference : int
        Which of them is the reference, the one repeated within every burst.
    """

    run: int
    seq: int
    t_ns: int
    elements: int
    patterns: NDArray[np.uint8]
    reference: int


@dataclass(frozen=True, slots=True)
class PlanMessage:
    """A sounding plan and its link."""

    link: str
    event: Plan


def encode_pattern(link: str, event: events.Pattern, latency_us: int) -> bytes:
    """Encode a refreshed pattern."""
    return encode(
        link,
        event,
        id=event.id,
        elements=len(event.states),
        bits=pack(event.states).tobytes(),
        rate=float(event.rate),
        rate_low=float(event.rate_low),
        rate_before=float(event.rate_before),
        rate_bound=float(event.rate_bound),
        cause=str(event.cause),
        steps=int(event.steps),
        latency_us=int(latency_us),
    )


def decode_pattern(body: Body) -> PatternMessage:
    """Decode a refreshed pattern; padding bits are ignored.

    Raises
    ------
    Refused
    """
    fields = read_flat("pattern", body, _PATTERN_KEYS)
    head = fields.head()
    elements = fields.integer("elements", 1, MOST_ELEMENTS)
    bits = fields.packed("bits", 1, elements)[0]
    ones = np.unpackbits(bits, count=elements, bitorder="little").view(np.int8)
    event = events.Pattern(
        **head,
        id=fields.integer("id", 1, UINT64),
        states=ones * np.int8(2) - np.int8(1),
        rate=fields.number("rate"),
        rate_low=fields.number("rate_low"),
        rate_before=fields.number("rate_before"),
        rate_bound=fields.number("rate_bound"),
        cause=fields.member("cause", events.Cause),
        steps=fields.integer("steps", 0, UINT64),
    )
    return PatternMessage(fields.check_link(), event, fields.integer("latency_us", 0, UINT64))


def encode_plan(link: str, plan: Plan) -> bytes:
    """Encode a sounding plan."""
    return encode(
        link,
        plan,
        frames=len(plan.patterns),
        elements=plan.elements,
        patterns=plan.patterns.tobytes(),
        reference=int(plan.reference),
    )


def decode_plan(body: Body) -> PlanMessage:
    """Decode a sounding plan.

    Raises
    ------
    Refused
    """
    fields = read_flat("plan", body, _PLAN_KEYS)
    head = fields.head()
    frames = fields.integer("frames", 1, MOST_PLANNED)
    elements = fields.integer("elements", 1, MOST_ELEMENTS)
    reference = fields.integer("reference", 0, frames - 1)
    patterns = fields.packed("patterns", frames, elements)
    plan = Plan(**head, elements=elements, patterns=patterns, reference=reference)
    return PlanMessage(fields.check_link(), plan)
