"""Shared checks at the gate of public core functions: each names the argument, what it got and what it takes."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from .errors import DownwarpError
from .wording import Said, say

_WANTED = {
    (None, None): say("a number"),
    ("above", None): say("a number above {above:g}"),
    ("at_least", None): say("a number from {least:g}"),
    (None, "below"): say("a number below {below:g}"),
    (None, "at_most"): say("a number up to {most:g}"),
    ("above", "below"): say("a number above {above:g} below {below:g}"),
    ("above", "at_most"): say("a number above {above:g} up to {most:g}"),
    ("at_least", "below"): say("a number from {least:g} below {below:g}"),
    ("at_least", "at_most"): say("a number from {least:g} up to {most:g}"),
}
"""What a number with a lower and an upper bound is called."""


def number(
    name: str,
    value: Any,
    *,
    above: float | None = None,
    at_least: float | None = None,
    below: float | None = None,
    at_most: float | None = None,
) -> float:
    """Return ``value`` as a finite float within the bounds, or raise DownwarpError."""
    is_number = not isinstance(value, (bool, np.bool_))
    try:
        result = float(value) if is_number else math.nan
    except (TypeError, ValueError):
        result, is_number = math.nan, False
    inside = (
        math.isfinite(result)
        and (above is None or result > above)
        and (at_least is None or result >= at_least)
        and (below is None or result < below)
        and (at_most is None or result <= at_most)
    )
    if not inside:
        shown = f"{result:g}" if is_number else repr(value)
        raise DownwarpError(
            "{name} is {shown}; it takes {wanted}.",
            name=name,
            shown=shown,
            wanted=_bounds(above, at_least, below, at_most),
        )
    return result


def _bounds(above: float | None, at_least: float | None, below: float | None, at_most: float | None) -> Said:
    lower = "above" if above is not None else "at_least" if at_least is not None else None
    upper = "below" if below is not None else "at_most" if at_most is not None else None
    bounds = {"above": above, "least": at_least, "below": below, "most": at_most}
    return say(_WANTED[lower, upper], **{name: bound for name, bound in bounds.items() if bound is not None})


def finite_array(name: str, values: Any, ndim: int | None = None) -> np.ndarray:
    """Return ``values`` as a float array without NaN or infinity, or raise DownwarpError."""
    try:
        array = np.asarray(values, dtype=float)
    except (TypeError, ValueError):
        raise DownwarpError("{name} must hold numbers only.", name=name) from None
    if ndim is not None and array.ndim != ndim:
        raise DownwarpError(
            "{name} has {dimensions} dimensions; it takes {wanted}.", name=name, dimensions=array.ndim, wanted=ndim
        )
    if not np.isfinite(array).all():
        raise DownwarpError("{name} holds a value that is not a finite number.", name=name)
    return array


def increasing(name: str, values: Any, least: int = 2) -> np.ndarray:
    """Return ``values`` as a strictly increasing finite 1-D array of at least ``least`` numbers."""
    array = finite_array(name, values, ndim=1)
    if array.size < least:
        raise DownwarpError(
            "{name} holds {count} values; it takes at least {least}.", name=name, count=array.size, least=least
        )
    if not (array[1:] > array[:-1]).all():
        raise DownwarpError("{name} must increase from each value to the next.", name=name)
    return array
