"""`pilots`: a burst of pilot frames, controller → tracker."""

from dataclasses import dataclass

import msgpack
import numpy as np
from numpy.typing import NDArray

from tracker.engine.burst import Burst
from tracker.engine.refusal import Reason
from tracker.messages.fields import INT64, MOST_ELEMENTS, MOST_RECEIVERS, UINT64, VERSION, Body, read_flat

MOST_FRAMES = 65536
MOST_TONES = 8192
MOST_MAGNITUDE = 1e15  # its square, summed over any burst, is still finite in single precision

_HEAD = ("v", "link", "run", "seq", "t_ns", "dt_ns")
_KEYS = frozenset((*_HEAD, "frames", "elements", "receivers", "tones", "patterns", "response", "pattern_id"))
_MOST_BITS = int(np.float32(MOST_MAGNITUDE).view(np.uint32)) << 1


@dataclass(frozen=True, slots=True)
class Shape:
    """Sizes that every burst of a link must have, from its settings: N, R and K."""

    elements: int
    receivers: int
    tones: int


def encode_pilots(link: str, burst: Burst) -> bytes:
    """Encode a burst; `keep` does not travel, the decoder works it out again."""
    frames, receivers, tones = burst.response.shape
    values = {
        "v": VERSION,
        "link": link,
        "run": burst.run,
        "seq": burst.seq,
        "t_ns": burst.t_ns,
        "dt_ns": burst.dt_ns,
        "frames": frames,
        "elements": burst.elements,
        "receivers": receivers,
        "tones": tones,
        "patterns": burst.patterns.tobytes(),
        "response": burst.response.astype("<c8", copy=False).tobytes(),
    }
    if burst.pattern_id is not None:
        values["pattern_id"] = burst.pattern_id
    encoded: bytes = msgpack.packb(values)
    return encoded


def decode_pilots(body: Body, link: str, shape: Shape | None) -> Burst:
    """Decode and check a burst.

    Parameters
    ----------
    body : bytes-like
        As received; it is copied, so its buffer may be used again.
    link : str
        The link that the topic names.
    shape : Shape or None
        What the settings say; None to take any sizes within the limits of the format.

    Returns
    -------
    Burst
        Frames that hold NaN, infinity or magnitudes above 1e15 have `keep` False.

    Raises
    ------
    Refused
        With the reason; nothing else, whatever the body is.
    """
    fields = read_flat("pilots", body, _KEYS)
    head = fields.head()
    fields.check_link(link)
    frames = fields.integer("frames", 1, MOST_FRAMES)
    dt_ns = fields.integer("dt_ns", 1 if frames > 1 else 0, UINT64)
    elements = fields.integer("elements", 1, MOST_ELEMENTS)
    receivers = fields.integer("receivers", 1, MOST_RECEIVERS)
    tones = fields.integer("tones", 1, MOST_TONES)
    pattern_id = fields.optional_integer("pattern_id", 0, UINT64)
    if head["t_ns"] + (frames - 1) * dt_ns > INT64:
        raise fields.refuse(Reason.OUT_OF_RANGE, f"`dt_ns` = {dt_ns} puts the last frame beyond the year 2262")
    patterns = fields.packed("patterns", frames, elements)
    response = fields.binary("response")
    wanted = f"frames = {frames}, receivers = {receivers} and tones = {tones}"
    fields.check_size("response", response, frames * receivers * tones * 8, wanted)
    if shape is not None and (elements, receivers, tones) != (shape.elements, shape.receivers, shape.tones):
        raise fields.refuse(
            Reason.SETTINGS,
            f"elements = {elements}, receivers = {receivers}, tones = {tones}, but the settings say {shape.elements}, "
            f"{shape.receivers}, {shape.tones}; correct the controller or the settings",
        )
    floats = np.frombuffer(response, "<f4").reshape(frames, receivers * tones * 2)
    keep = _finite(floats)
    if not keep.any():
        raise fields.refuse(Reason.NOT_FINITE, "every frame holds NaN, infinity or magnitudes above 1e15")
    return Burst(
        **head,
        dt_ns=dt_ns,
        elements=elements,
        patterns=patterns,
        response=floats.view("<c8").reshape(frames, receivers, tones),
        keep=keep,
        pattern_id=pattern_id,
    )


def _finite(floats: NDArray[np.float32]) -> NDArray[np.bool_]:
    """Tell the frames in which every float is finite and not absurd.

    Bits of floats of one sign sort as the floats do, infinity and NaN last: comparing them as integers needs one
    pass and raises no floating-point flag.
    """
    bits = floats.view(np.uint32) << np.uint32(1)
    if bits.max() <= _MOST_BITS:
        return np.ones(len(floats), np.bool_)
    keep: NDArray[np.bool_] = bits.max(axis=1) <= _MOST_BITS
    return keep
