"""What keeps the service from starting or going on through no fault of its own."""


class ServiceError(Exception):
    """The message is one line for the user: what, where, what to do."""
