"""`pattern` and `plan`, tracker → controller: what to show now, and what to sound next."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tracker.engine import events
from tracker.engine.events import Plan
from tracker.engine.panel import pack
from tracker.messages.fields import MOST_ELEMENTS, UINT64, Body, Fields, encode, read_flat

MOST_PLANNED = 65536

_HEAD = ("v", "link", "run", "seq", "t_ns", "elements")
_RATES = ("rate", "rate_low", "rate_before", "rate_bound")
_PATTERN_KEYS = frozenset((*_HEAD, *_RATES, "id", "bits", "cause", "steps", "latency_us"))
_PLAN_KEYS = frozenset((*_HEAD, "frames", "patterns", "reference", "every", "in_service", "net_rate"))


@dataclass(frozen=True, slots=True)
class PatternMessage:
    """A refreshed pattern, its link, and the time from the burst's arrival to the message, µs."""

    link: str
    event: events.Pattern
    latency_us: int


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
        every=int(plan.every),
        in_service=np.packbits(plan.in_service, bitorder="little").tobytes(),
        net_rate=None if plan.net_rate is None else float(plan.net_rate),
    )


def decode_plan(body: Body) -> PlanMessage:
    """Decode a sounding plan; keys that say how often and with what service may be missing.

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
    plan = Plan(
        **head,
        elements=elements,
        patterns=patterns,
        reference=reference,
        every=1 if fields.values.get("every") is None else fields.integer("every", 1, UINT64),
        in_service=_flags(fields, frames),
        net_rate=fields.optional_number("net_rate"),
    )
    return PlanMessage(fields.check_link(), plan)


def _flags(fields: Fields, frames: int) -> NDArray[np.bool_]:
    """Which frames are in service, shape (frames,); empty when the sender says nothing of it."""
    if not fields.values.get("in_service"):
        return np.zeros(0, dtype=np.bool_)
    packed = fields.packed("in_service", 1, frames)[0]
    return np.unpackbits(packed, count=frames, bitorder="little").view(np.bool_)
