"""The elastic thickness of one transect beside the isotherms of the age at which its plate was loaded."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from . import check
from .constants import MYR
from .cooling import Geotherm
from .errors import DownwarpError
from .result import Estimate
from .wording import say


@dataclass(frozen=True)
class AgeCheck:
    """The answer for one transect."""

    name: str
    thickness: Estimate
    """Fitted elastic thickness, m."""
    age: float
    """Age of the plate, s."""
    load_age: float
    """Age of the load, s."""
    geotherm: Geotherm
    """At the age at loading."""
    temperature: Estimate
    """Temperature at a depth of the elastic thickness, degrees C, at the age at loading."""
    expected: tuple[tuple[float, float | None], ...]
    """Isotherm, degrees C, and its depth, m, at the age at loading."""
    remarks: tuple[str, ...] = ()

    @property
    def age_at_loading(self) -> float:
        """s."""
        return self.age - self.load_age


def check_age(
    name: str, thickness: Estimate, age: float, load_age: float, geotherm: Geotherm, isotherms: tuple[float, ...]
) -> AgeCheck:
    """Compare an elastic thickness, m, with the isotherms (degrees C) of ``geotherm`` at the age at loading.

    ``age``, ``load_age``: s; ``geotherm`` is taken at that age. Raises DownwarpError where the load is older than the
    plate, or there is no thickness.
    """
    if thickness.value is None:
        raise DownwarpError("{name}: te_km is empty; the plate's thickness was not resolved.", name=name)
    check.number("LOAD_AGE_MYR", load_age / MYR, at_least=0)
    if not age > load_age:
        raise DownwarpError(
            "{name}: the load is {load_age:g} Myr old and the plate {age:.4g} Myr; a load comes later than its plate.",
            name=name,
            load_age=load_age / MYR,
            age=age / MYR,
        )
    cooled = replace(geotherm, age=age - load_age)

    def at(depth: float | None) -> float | None:
        return None if depth is None else float(cooled.temperature(depth))

    temperature = Estimate(at(thickness.value), at(thickness.low), at(thickness.high))
    expected = tuple((each, cooled.isotherm(each)) for each in isotherms)
    remarks: list[str] = []
    depths = [depth for _, depth in expected if depth is not None]
    if depths:
        low, high = min(depths), max(depths)
        if thickness.low is not None and thickness.low > high:
            remarks.append(
                say("thicker than the hottest isotherm of that age is deep: older at loading, or fitted too thick")
            )
        if thickness.high is not None and thickness.high < low:
            remarks.append(
                say("thinner than the coolest isotherm of that age is deep: reheated, weakened, or fitted too thin")
            )
    return AgeCheck(name, thickness, age, load_age, cooled, temperature, expected, tuple(remarks))


def isotherm_curves(
    geotherm: Geotherm, isotherms: tuple[float, ...], oldest: float, count: int = 121
) -> tuple[np.ndarray, dict[float, np.ndarray]]:
    """Ages, s, even in their root up to ``oldest``, (n,), and depth of each isotherm there, m, (n,); NaN where deeper
    than is looked for."""
    ages = np.linspace(np.sqrt(0.01 * MYR), np.sqrt(oldest), count) ** 2
    curves = {}
    for temperature in isotherms:
        depths = [replace(geotherm, age=float(age)).isotherm(temperature) for age in ages]
        curves[temperature] = np.array([np.nan if depth is None else depth for depth in depths])
    return ages, curves
