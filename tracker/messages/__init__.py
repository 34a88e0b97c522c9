"""The wire format, version 1: every body is one MessagePack map, decoded and validated once, here.

Decoders take bytes from strangers: they raise `Refused` with a reason code or return a checked value, whatever
the bytes are, and allocate no more than a small multiple of the body. Encoders are their exact inverse.
"""

from tracker.engine.events import Plan
from tracker.engine.refusal import Reason, Refused
from tracker.messages.control import Reply, Request, Verb, decode_reply, decode_request, encode_reply, encode_request
from tracker.messages.fields import MOST_BODY, VERSION
from tracker.messages.patterns import (
    PatternMessage,
    PlanMessage,
    decode_pattern,
    decode_plan,
    encode_pattern,
    encode_plan,
)
from tracker.messages.pilots import Shape, decode_pilots, encode_pilots
from tracker.messages.reports import (
    AlarmMessage,
    StateMessage,
    decode_alarm,
    decode_rates,
    decode_state,
    encode_alarm,
    encode_state,
)
from tracker.messages.topics import parse_topic, topic

__all__ = [
    "MOST_BODY",
    "VERSION",
    "AlarmMessage",
    "PatternMessage",
    "Plan",
    "PlanMessage",
    "Reason",
    "Refused",
    "Reply",
    "Request",
    "Shape",
    "StateMessage",
    "Verb",
    "decode_alarm",
    "decode_pattern",
    "decode_pilots",
    "decode_plan",
    "decode_rates",
    "decode_reply",
    "decode_request",
    "decode_state",
    "encode_alarm",
    "encode_pattern",
    "encode_pilots",
    "encode_plan",
    "encode_reply",
    "encode_request",
    "encode_state",
    "parse_topic",
    "topic",
]
