"""What a user can do wrong with a log."""


class LogError(Exception):
    """The log cannot be used at all; the message is one line for the user."""
