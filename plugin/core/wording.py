"""Sentences for users that keep what they are made of, so that they can be put into another language later.

Core knows no translator and runs in processes that have none: it speaks English, and whoever shows a text translates
the template and fills the values in again.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any


class Said(str):
    """A text made by `say`: plain English, with its template and the values in it."""

    template: str
    values: dict[str, Any]

    def __reduce__(self) -> tuple[Any, ...]:
        return _made, (self.template, self.values)


def say(template: str, /, **values: Any) -> Said:
    """The text of ``template`` with ``values`` in the places named there; without values it stands as it is.

    A value that was said itself is translated with the rest; any other, such as a name or a number, is kept. What was
    said without values may be filled later: ``say(say("{count} stations"), count=3)``.

    >>> say("{name} is {size:.1f} km long.", name="Line 3", size=2)
    'Line 3 is 2.0 km long.'
    """
    if isinstance(template, Said) and not values:
        return template
    return _made(str(template), values)


def _made(template: str, values: dict[str, Any]) -> Said:
    text = Said(template.format(**values) if values else template)
    text.template, text.values = template, values
    return text


def listed(texts: Sequence[str], between: str = ", ") -> Said:
    """Texts one after another, each of which is translated by itself.

    >>> listed(["1 km", "3 km"])
    '1 km, 3 km'
    """
    values = {f"text_{place}": text for place, text in enumerate(texts)}
    return _made("{between}".join(f"{{{name}}}" for name in values), {**values, "between": between})
