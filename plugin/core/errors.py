"""The two ways in which core stops early."""


class DownwarpError(ValueError):
    """An input that cannot be used, or a problem that has no answer; the message is one sentence for the user."""


class Cancelled(Exception):
    """Raised by a progress callable to stop a run."""
