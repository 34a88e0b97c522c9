"""What keeps an offline command from doing its work through no fault of its own."""


class OfflineError(Exception):
    """The message is one line for the user: what, where, what to do."""
