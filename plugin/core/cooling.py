"""Temperature in the lithosphere from its age or its surface heat flow, and the depth of isotherms.

Depth z is in m, positive down, temperature in degrees C, age in s, heat flow in W/m2. Half-space and plate:

    T = T0 + (Tm - T0) erf(z / (2 sqrt(kappa t)))
    T = T0 + (Tm - T0) [z / a + sum_n 2 / (n pi) exp(-n^2 pi^2 kappa t / a^2) sin(n pi z / a)]

and steady heat flow q through rock whose heat production A falls with depth by the scale h:

    T = T0 + (q - A h) z / k + A h^2 / k (1 - e^(-z / h)), no hotter than Tm

Source: Turcotte & Schubert, Geodynamics, chapter 4 (from memory). Constants: `constants`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import brentq
from scipy.special import erf, erfinv

from . import check
from .constants import (
    CONDUCTIVITY,
    DIFFUSIVITY,
    MANTLE_TEMPERATURE,
    MYR,
    PLATE_CONDUCTIVITY,
    PLATE_DIFFUSIVITY,
    PLATE_TEMPERATURE,
    PLATE_THICKNESS,
)
from .errors import DownwarpError
from .wording import say

HALF_SPACE, PLATE, STEADY = range(3)
"""Kinds of geotherm, in the order of the key THERMAL."""
KIND_NAMES = (say("cooling half-space"), say("cooling plate"), say("steady heat flow"))
TERMS = 40
"""Terms of the plate's series: the next one is below e^-150 from `YOUNG_PLATE` on."""
YOUNG_PLATE = 1e-2
"""kappa t / a^2 below which a cooling plate is a half-space: its base is felt by e^-100 of the temperature at most."""
OLDEST = 5000.0
"""Age, Myr, up to which one is looked for that explains a heat flow."""
DEEPEST = 1000e3
"""Depth, m, beyond which no isotherm is looked for."""


@dataclass(frozen=True)
class Geotherm:
    """Temperature against depth."""

    kind: int = HALF_SPACE
    age: float = math.nan
    """t, s; of cooling kinds."""
    heat_flow: float = math.nan
    """q, W/m2; of the steady kind."""
    surface: float = 0.0
    """T0, degrees C."""
    mantle: float = MANTLE_TEMPERATURE.value
    """Tm, degrees C."""
    diffusivity: float = DIFFUSIVITY.value
    """kappa, m2/s."""
    conductivity: float = CONDUCTIVITY.value
    """k, W/(m K)."""
    thickness: float = PLATE_THICKNESS.value
    """a, m; of the cooling plate."""
    production: float = 0.0
    """A, W/m3; of the steady kind."""
    production_depth: float = 10e3
    """h, m."""

    def __post_init__(self) -> None:
        if self.kind not in (HALF_SPACE, PLATE, STEADY):
            raise DownwarpError("THERMAL is {kind!r}; it takes 0 to 2.", kind=self.kind)
        check.number("SURFACE_C", self.surface, at_least=-100, at_most=500)
        check.number("MANTLE_C", self.mantle, above=self.surface, at_most=3000)
        check.number("DIFFUSIVITY", self.diffusivity, above=0, at_most=1e-3)
        check.number("CONDUCTIVITY", self.conductivity, above=0, at_most=100)
        check.number("THERMAL_PLATE_KM", self.thickness / 1e3, above=0, at_most=1000)
        check.number("HEAT_PRODUCTION", self.production * 1e6, at_least=0, at_most=100)
        check.number("PRODUCTION_KM", self.production_depth / 1e3, above=0, at_most=200)
        if self.kind == STEADY:
            check.number("HEAT_FLOW", self.heat_flow * 1e3, above=0, at_most=1e4)
            if self.heat_flow <= self.production * self.production_depth:
                raise DownwarpError(
                    "HEAT_FLOW is {heat_flow:g} mW/m2, but HEAT_PRODUCTION and PRODUCTION_KM alone make {made:g}: "
                    "nothing is left from the mantle.",
                    heat_flow=self.heat_flow * 1e3,
                    made=self.production * self.production_depth * 1e3,
                )
        else:
            check.number("AGE_MYR", self.age / MYR, above=0, at_most=1e4)

    @property
    def name(self) -> str:
        """Its kind in words."""
        return KIND_NAMES[self.kind]

    def temperature(self, depth):
        """T, degrees C, at depth, m (any shape)."""
        depth = np.asarray(depth, dtype=float)
        span = self.mantle - self.surface
        if self.kind == STEADY:
            h, k = self.production_depth, self.conductivity
            rise = (self.heat_flow - self.production * h) * depth / k
            rise = rise + self.production * h * h / k * -np.expm1(-depth / h)
            return self.surface + np.minimum(rise, span)
        cooled = self.diffusivity * self.age
        if self.kind == HALF_SPACE or cooled < YOUNG_PLATE * self.thickness**2:
            return self.surface + span * erf(depth / (2.0 * math.sqrt(cooled)))
        n = np.arange(1, TERMS + 1)
        share = np.minimum(depth / self.thickness, 1.0)
        decay = np.exp(-((n * math.pi) ** 2) * cooled / self.thickness**2) * 2.0 / (n * math.pi)
        return self.surface + span * (share + np.sin(math.pi * share[..., None] * n) @ decay)

    def surface_heat_flow(self) -> float:
        """Conductive heat flow at the surface, W/m2."""
        if self.kind == STEADY:
            return self.heat_flow
        gradient = (self.mantle - self.surface) * self.conductivity
        cooled = self.diffusivity * self.age
        if self.kind == HALF_SPACE or cooled < YOUNG_PLATE * self.thickness**2:
            return gradient / math.sqrt(math.pi * cooled)
        n = np.arange(1, TERMS + 1)
        decay = np.exp(-((n * math.pi) ** 2) * cooled / self.thickness**2)
        return gradient / self.thickness * (1.0 + 2.0 * float(decay.sum()))

    def isotherm(self, temperature: float) -> float | None:
        """Depth, m, of a temperature, degrees C; None where it is not reached above `DEEPEST`."""
        temperature = check.number("ISOTHERMS", temperature)
        if temperature <= self.surface:
            return 0.0
        if temperature >= self.mantle:
            return None
        if self.kind == HALF_SPACE:
            share = (temperature - self.surface) / (self.mantle - self.surface)
            return 2.0 * math.sqrt(self.diffusivity * self.age) * float(erfinv(share))
        deepest = self.thickness if self.kind == PLATE else DEEPEST
        if float(self.temperature(deepest)) < temperature:
            return None
        return float(brentq(lambda z: float(self.temperature(z)) - temperature, 0.0, deepest, xtol=1e-3))

    def scaled(self, factor: float) -> Geotherm:
        """A colder geotherm of its kind for ``factor`` above 1: older by it, or with the heat flow divided by it."""
        if self.kind == STEADY:
            return replace(self, heat_flow=self.heat_flow / factor, production=self.production / factor)
        return replace(self, age=self.age * factor)


def usual(kind: int, **values) -> Geotherm:
    """A geotherm with the published constants of its kind; ``values`` that are not None replace them."""
    given = {key: value for key, value in values.items() if value is not None}
    if kind == PLATE:
        given = {
            "mantle": PLATE_TEMPERATURE.value, "diffusivity": PLATE_DIFFUSIVITY.value,
            "conductivity": PLATE_CONDUCTIVITY.value, "thickness": PLATE_THICKNESS.value, **given,
        }  # fmt: skip
    return Geotherm(kind, **given)


def age_of_heat_flow(geotherm: Geotherm, heat_flow: float) -> float:
    """Age, s, at which a cooling geotherm has a surface heat flow, W/m2.

    Raises DownwarpError where it never falls that low, as that of a plate does not.
    """
    heat_flow = check.number("HEAT_FLOW", heat_flow * 1e3, above=0, at_most=1e4) / 1e3

    def excess(log_age: float) -> float:
        return math.log(replace(geotherm, age=math.exp(log_age)).surface_heat_flow() / heat_flow)

    low, high = math.log(1e-3 * MYR), math.log(OLDEST * MYR)
    if excess(low) < 0 or excess(high) > 0:
        raise DownwarpError(
            "HEAT_FLOW is {heat_flow:g} mW/m2, which the {geotherm} has at no age up to {oldest:g} Myr; its lowest is "
            "{lowest:.4g} mW/m2.",
            heat_flow=heat_flow * 1e3,
            geotherm=geotherm.name,
            oldest=OLDEST,
            lowest=replace(geotherm, age=OLDEST * MYR).surface_heat_flow() * 1e3,
        )
    return math.exp(brentq(excess, low, high, xtol=1e-12))
