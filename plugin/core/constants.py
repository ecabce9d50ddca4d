"""Published constants of gravity, heat and rock strength: each with symbol, unit and source, in one place.

All but the exact ones are quoted from memory, which `Constant.source` says; the tests recompute what their sources
print.
"""

from __future__ import annotations

from dataclasses import dataclass

from .wording import Said, say


@dataclass(frozen=True)
class Constant:
    """A published number."""

    name: str
    """What it is."""
    symbol: str
    value: float
    """In `unit`."""
    unit: str
    source: str
    """Where it is printed, and whether it is quoted from memory."""


_COMMON = say("common practice")


def _remembered(source: str) -> Said:
    return say("{source} (from memory)", source=source)


GRAVITATIONAL = Constant(say("gravitational constant"), "G", 6.67430e-11, "m3/(kg s2)", _remembered("CODATA 2018"))
GAS = Constant(say("molar gas constant"), "R", 8.314462618, "J/(mol K)", _remembered("SI 2019, exact to its digits"))
YEAR = Constant(say("Julian year"), "a", 365.25 * 86400.0, "s", say("IAU, exact"))
ZERO_CELSIUS = Constant(say("0 degrees Celsius"), "T0", 273.15, "K", say("SI, exact"))
MILLIGAL = Constant(say("milligal"), "mGal", 1e-5, "m/s2", say("CGS, exact"))

MYR = 1e6 * YEAR.value
"""A million years, s."""

_BYERLEE = _remembered("Byerlee 1978, Pure and Applied Geophysics 116")
FRICTION_LOW = Constant(say("friction of rock, low pressure"), "mu_1", 0.85, "1", _BYERLEE)
FRICTION_HIGH = Constant(say("friction of rock, high pressure"), "mu_2", 0.6, "1", _BYERLEE)
COHESION_HIGH = Constant(say("cohesion of rock, high pressure"), "C_2", 50e6, "Pa", _BYERLEE)

_GOETZE = _remembered("Goetze 1978, Phil. Trans. R. Soc. A 288; Goetze & Evans 1979, Geophys. J. 59")
OLIVINE_FACTOR = Constant(say("dry olivine, dislocation creep"), "A", 7.0e-14, "Pa^-n/s", _GOETZE)
OLIVINE_POWER = Constant(say("dry olivine, dislocation creep"), "n", 3.0, "1", _GOETZE)
OLIVINE_ENERGY = Constant(say("dry olivine, dislocation creep"), "Q", 520e3, "J/mol", _GOETZE)
PEIERLS_RATE = Constant(say("dry olivine, glide"), "rate_0", 5.7e11, "1/s", _GOETZE)
PEIERLS_ENERGY = Constant(say("dry olivine, glide"), "Q_p", 535e3, "J/mol", _GOETZE)
PEIERLS_STRESS = Constant(say("dry olivine, glide"), "sigma_p", 8.5e9, "Pa", _GOETZE)
PEIERLS_FROM = Constant(say("dry olivine, stress from which it glides"), "sigma_g", 200e6, "Pa", _GOETZE)

_QUARTZITE = _remembered("Ranalli 1995, Rheology of the Earth, 2nd edition, table 10.3 (dry quartzite)")
# Printed as 6.7e-6 MPa^-2.4/s.
QUARTZ_FACTOR = Constant(say("dry quartzite, dislocation creep"), "A", 6.7e-6 * 1e6**-2.4, "Pa^-n/s", _QUARTZITE)
QUARTZ_POWER = Constant(say("dry quartzite, dislocation creep"), "n", 2.4, "1", _QUARTZITE)
QUARTZ_ENERGY = Constant(say("dry quartzite, dislocation creep"), "Q", 156e3, "J/mol", _QUARTZITE)

_TURCOTTE = _remembered("Turcotte & Schubert, Geodynamics, chapter 4")
DIFFUSIVITY = Constant(say("thermal diffusivity"), "kappa", 1e-6, "m2/s", _TURCOTTE)
CONDUCTIVITY = Constant(say("thermal conductivity"), "k", 3.3, "W/(m K)", _TURCOTTE)
MANTLE_TEMPERATURE = Constant(say("temperature of the mantle"), "T_m", 1300.0, "degrees C", _TURCOTTE)

_STEIN = _remembered("Stein & Stein 1992, Nature 359")
PLATE_THICKNESS = Constant(say("thermal thickness of the plate"), "a", 95e3, "m", _STEIN)
PLATE_TEMPERATURE = Constant(say("temperature at the base of the plate"), "T_m", 1450.0, "degrees C", _STEIN)
PLATE_CONDUCTIVITY = Constant(say("thermal conductivity of the plate"), "k", 3.138, "W/(m K)", _STEIN)
# k / (rho c) with their rho 3330 kg/m3 and c 1171 J/(kg K).
PLATE_DIFFUSIVITY = Constant(
    say("thermal diffusivity of the plate"), "kappa", 3.138 / (3330.0 * 1171.0), "m2/s", _STEIN
)

CRUST_DENSITY = Constant(say("density of oceanic crust"), "rho_crust", 2800.0, "kg/m3", _COMMON)
CRUST_THICKNESS = Constant(say("thickness of oceanic crust"), "t_crust", 6.5e3, "m", _COMMON)
BOUGUER_DENSITY = Constant(say("density of the Bouguer correction"), "rho_B", 2670.0, "kg/m3", _COMMON)
SEA_WATER = Constant(say("density of sea water"), "rho_water", 1030.0, "kg/m3", _COMMON)

STRAIN_RATE = Constant(say("strain rate of bending"), "rate", 1e-15, "1/s", _COMMON)
MECHANICAL_STRESS = Constant(
    say("strength that ends the mechanical thickness"), "sigma_c", 50e6, "Pa",
    _remembered("McNutt 1984, J. Geophys. Res. 89"),
)  # fmt: skip

GRAVITY_CONSTANTS = (GRAVITATIONAL, MILLIGAL)
HEAT_CONSTANTS = (
    YEAR, ZERO_CELSIUS, DIFFUSIVITY, CONDUCTIVITY, MANTLE_TEMPERATURE, PLATE_THICKNESS, PLATE_TEMPERATURE,
    PLATE_CONDUCTIVITY, PLATE_DIFFUSIVITY,
)  # fmt: skip
STRENGTH_CONSTANTS = (
    GAS, FRICTION_LOW, FRICTION_HIGH, COHESION_HIGH, OLIVINE_FACTOR, OLIVINE_POWER, OLIVINE_ENERGY, PEIERLS_RATE,
    PEIERLS_ENERGY, PEIERLS_STRESS, PEIERLS_FROM, QUARTZ_FACTOR, QUARTZ_POWER, QUARTZ_ENERGY, MECHANICAL_STRESS,
)  # fmt: skip
