"""The two ways in which core stops early."""

from __future__ import annotations

from typing import Any

from .wording import say


class DownwarpError(ValueError):
    """An input that cannot be used, or a problem that has no answer; the message is one sentence for the user."""

    def __init__(self, template: str, /, **values: Any) -> None:
        """The sentence as `say` takes it."""
        self.message = say(template, **values)
        """The sentence, which can still be translated; ``str`` of the error is its English."""
        super().__init__(self.message)


class Cancelled(Exception):
    """Raised by a progress callable to stop a run."""
