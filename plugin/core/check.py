"""Shared checks at the gate of public core functions: each names the argument, what it got and what it takes."""

from __future__ import annotations

from typing import Any

import numpy as np

from .errors import DownwarpError


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
    wanted = _bounds(above, at_least, below, at_most)
    if isinstance(value, (bool, np.bool_)):
        raise DownwarpError(f"{name} is {value!r}; it takes {wanted}.")
    try:
        result = float(value)
    except (TypeError, ValueError):
        raise DownwarpError(f"{name} is {value!r}; it takes {wanted}.") from None
    inside = (
        np.isfinite(result)
        and (above is None or result > above)
        and (at_least is None or result >= at_least)
        and (below is None or result < below)
        and (at_most is None or result <= at_most)
    )
    if not inside:
        raise DownwarpError(f"{name} is {result:g}; it takes {wanted}.")
    return result


def _bounds(above: float | None, at_least: float | None, below: float | None, at_most: float | None) -> str:
    parts = [
        f"{word} {bound:g}"
        for word, bound in (("above", above), ("from", at_least), ("below", below), ("up to", at_most))
        if bound is not None
    ]
    return " ".join(["a number", *parts])


def finite_array(name: str, values: Any, ndim: int | None = None) -> np.ndarray:
    """Return ``values`` as a float array without NaN or infinity, or raise DownwarpError."""
    try:
        array = np.asarray(values, dtype=float)
    except (TypeError, ValueError):
        raise DownwarpError(f"{name} must hold numbers only.") from None
    if ndim is not None and array.ndim != ndim:
        raise DownwarpError(f"{name} has {array.ndim} dimensions; it takes {ndim}.")
    if not np.isfinite(array).all():
        raise DownwarpError(f"{name} holds a value that is not a finite number.")
    return array


def increasing(name: str, values: Any, least: int = 2) -> np.ndarray:
    """Return ``values`` as a strictly increasing finite 1-D array of at least ``least`` numbers."""
    array = finite_array(name, values, ndim=1)
    if array.size < least:
        raise DownwarpError(f"{name} holds {array.size} values; it takes at least {least}.")
    if not (np.diff(array) > 0).all():
        raise DownwarpError(f"{name} must increase from each value to the next.")
    return array
