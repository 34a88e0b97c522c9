"""Topics: `KIND/LINK` in ASCII, one channel of messages each."""

import re

from tracker.engine.refusal import Reason, Refused

_LINK = re.compile(r"[a-z0-9-]{1,32}")
_KIND = re.compile(r"[a-z]{1,32}")


def is_link(name: str) -> bool:
    """Tell whether a string can name a link: 1 to 32 of a-z, 0-9 and -."""
    return _LINK.fullmatch(name) is not None


def topic(kind: str, link: str) -> bytes:
    """Build the topic of a message, `KIND/LINK`.

    Raises
    ------
    ValueError
        When the kind or the link is none: that would be a fault of the caller.
    """
    if not _KIND.fullmatch(kind) or not _LINK.fullmatch(link):
        raise ValueError(f"no topic can be made of kind {kind!r} and link {link!r}")
    return f"{kind}/{link}".encode("ascii")


def parse_topic(name: bytes | str) -> tuple[str, str]:
    """Split a topic into kind and link.

    Raises
    ------
    Refused
        `LINK`, when it is not of the form `KIND/LINK`.
    """
    text = name if isinstance(name, str) else name.decode("ascii", "replace")
    kind, _, link = text.partition("/")
    if not _KIND.fullmatch(kind) or not _LINK.fullmatch(link):
        raise Refused(
            Reason.LINK, f"topic {short(text)} is not KIND/LINK with a link of 1 to 32 characters from a-z, 0-9 and -"
        )
    return kind, link


def short(value: object) -> str:
    """Show a value in at most 40 characters, on one line."""
    if isinstance(value, str | bytes):
        value = value[:40]
    text = repr(value)
    return text if len(text) <= 40 else text[:39] + "…"
