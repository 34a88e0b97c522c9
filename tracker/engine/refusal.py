"""Why a burst or message of the other side is not taken: one documented error with a reason code."""

from enum import StrEnum


class Reason(StrEnum):
    """Reason codes, counted and shown to the user under these names."""

    NOT_MSGPACK = "not-msgpack"  # not one whole MessagePack value
    NOT_A_MAP = "not-a-map"  # a value, but not a map with string keys
    TOO_LARGE = "too-large"  # beyond the limit on a whole body
    VERSION = "version"  # a version of the format that is not spoken here
    LINK = "link"  # the body names another link than the topic
    MISSING_KEY = "missing-key"
    WRONG_TYPE = "wrong-type"
    OUT_OF_RANGE = "out-of-range"
    SIZES = "sizes"  # the sizes do not multiply out to the bytes sent
    SETTINGS = "settings"  # the sizes differ from the settings
    NOT_FINITE = "not-finite"  # no frame is free of NaN, infinity and absurd magnitudes
    OUT_OF_ORDER = "out-of-order"
    DUPLICATE = "duplicate"
    FAR_FUTURE = "far-future"
    FAR_PAST = "far-past"


class Refused(Exception):
    """The other side sent something that is not taken; nothing of it was used.

    Parameters
    ----------
    reason : Reason
    detail : str
        One line for a person: what, where, what to do.
    """

    def __init__(self, reason: Reason, detail: str) -> None:
        super().__init__(reason, detail)
        self.reason = reason
        self.detail = detail

    def __str__(self) -> str:
        return f"{self.reason}: {self.detail}"
