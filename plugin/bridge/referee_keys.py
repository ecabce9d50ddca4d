"""Keys of the algorithms that weigh a fitted plate against gravity, strength and age."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NoReturn

from ..core.constants import (
    BOUGUER_DENSITY,
    CRUST_DENSITY,
    CRUST_THICKNESS,
    MYR,
    SEA_WATER,
    STRAIN_RATE,
)
from ..core.cooling import PLATE, STEADY, Geotherm, age_of_heat_flow, usual
from ..core.errors import DownwarpError
from ..core.wording import listed, say
from .keys import CONSTANTS, STATION_FIELDS, Key, Values

INPUT = tuple(key for key in STATION_FIELDS if key.name in ("INPUT", "DISTANCE", "TRANSECT_FIELD"))
"""Stations of an earlier run."""
ELASTIC = tuple(key for key in CONSTANTS if key.name != "IN_PLANE")
IN_PLANE = tuple(key for key in CONSTANTS if key.name == "IN_PLANE")
CRUST = (
    Key("CRUST_KM", "number", "Thickness of the crust, km", CRUST_THICKNESS.value / 1e3),
    Key("RHO_CRUST", "number", "Density of the crust, kg/m3", CRUST_DENSITY.value),
    Key("RHO_MANTLE", "number", "Density of the mantle, kg/m3", 3300.0),
)
GRAVITY_DENSITIES = (
    Key("RHO_LOAD", "number", "Density of the load, kg/m3", 2800.0),
    *CRUST,
    Key("RHO_WATER", "number", "Density of the water, kg/m3", SEA_WATER.value, advanced=True),
    Key("RHO_BOUGUER", "number", "Density of the Bouguer correction, kg/m3", BOUGUER_DENSITY.value, advanced=True),
    Key("REFERENCE_LEVEL", "number", "Level on which the load stands, m up (blank: as load_mpa tells)", advanced=True),
)
MODEL_SHAPE = (
    Key(
        "SHAPE", "enum", "Shape of the load", 0,
        ("Runs on along strike (polygons)", "Round about the line's start (spectral series)"),
    ),
    Key(
        "BEFORE", "enum", "Before the plate's first station", 0,
        ("As the plate begins", "Mirror image", "First values held", "Neither bent nor loaded"), advanced=True,
    ),
)  # fmt: skip
ANOMALY = (
    Key("ANOMALY", "raster", "Observed gravity anomaly, mGal"),
    Key("ANOMALY_BAND", "band", "Band of the anomaly", 1, parent="ANOMALY", advanced=True),
    Key("ANOMALY_POINTS", "points", "Observed gravity anomaly as points"),
    Key("ANOMALY_FIELD", "field", "Field of the points with the anomaly, mGal", parent="ANOMALY_POINTS"),
    Key("ANOMALY_SIGMA", "field", "Field with its standard deviation, mGal", parent="ANOMALY_POINTS", advanced=True),
    Key("ANOMALY_REACH", "number", "Points count up to this far from the line, km", 10.0, advanced=True),
    Key("ANOMALY_KIND", "enum", "Kind of the observed anomaly", 0, ("Free-air", "Bouguer")),
    Key("ANOMALY_REGIONAL", "enum", "Regional of gravity that is fitted", 1, ("None", "Level", "Level and tilt")),
    Key("FIT_FROM", "number", "Compare from, km"),
    Key("FIT_TO", "number", "Compare to, km"),
)
JOINT = (
    Key("JOINT", "flag", "Fit thickness and load density to surface and gravity", True),
    Key("TE_FROM", "number", "Elastic thickness searched from, km", 1.0, advanced=True),
    Key("TE_TO", "number", "Elastic thickness searched to, km", 100.0, advanced=True),
    Key("RHO_LOAD_FROM", "number", "Density of the load searched from, kg/m3", 2200.0, advanced=True),
    Key("RHO_LOAD_TO", "number", "Density of the load searched to, kg/m3", 3200.0, advanced=True),
    Key("CONFIDENCE", "number", "Confidence of the intervals, %", 90.0),
)
AGE = (
    Key("AGE_MYR", "number", "Age of the plate, Myr"),
    Key("AGE", "raster", "Age of the plate as a raster"),
    Key("AGE_BAND", "band", "Band of the age", 1, parent="AGE", advanced=True),
    Key("AGE_UNIT_MYR", "number", "Unit of the age raster, Myr", 1.0, advanced=True),
)
LOAD_AGE = (Key("LOAD_AGE_MYR", "number", "Age of the load, Myr", 0.0),)
HEAT_FLOW = (Key("HEAT_FLOW", "number", "Surface heat flow, mW/m2 (in place of an age)"),)
_THERMAL = (say("Cooling half-space"), say("Cooling plate"))
COOLING = (Key("THERMAL", "enum", "Temperature", PLATE, _THERMAL),)
THERMAL = (Key("THERMAL", "enum", "Temperature", PLATE, (*_THERMAL, "Steady heat flow")),)
HEAT = (
    Key("SURFACE_C", "number", "Temperature at the plate's top, degrees C", 0.0, advanced=True),
    Key("MANTLE_C", "number", "Temperature of the mantle, degrees C (blank: as published)", advanced=True),
    Key("DIFFUSIVITY", "number", "Thermal diffusivity, m2/s (blank: as published)", advanced=True),
    Key("CONDUCTIVITY", "number", "Thermal conductivity, W/(m K) (blank: as published)", advanced=True),
    Key("THERMAL_PLATE_KM", "number", "Thermal thickness of a cooling plate, km (blank: as published)", advanced=True),
)
PRODUCTION = (
    Key("HEAT_PRODUCTION", "number", "Heat production at the surface, microwatt/m3", 0.0, advanced=True),
    Key("PRODUCTION_KM", "number", "Depth over which it falls to 1/e, km", 10.0, advanced=True),
)
ROCK = (
    Key("ROCK", "enum", "Rock", 0, ("Oceanic: dry olivine", "Continental: dry quartzite over dry olivine")),
    *CRUST,
    Key("PORE_PRESSURE", "number", "Pore pressure over the weight of rock", 0.37, advanced=True),
    Key("STRAIN_RATE", "number", "Strain rate, 1/s", STRAIN_RATE.value, advanced=True),
)
ISOTHERMS = (Key("ISOTHERMS", "text", "Isotherms, degrees C", "300, 450, 600"),)


def isotherms(values: Values) -> tuple[float, ...]:
    """The temperatures of ISOTHERMS, degrees C, increasing; raises DownwarpError where it holds anything else."""
    text = str(values.raw("ISOTHERMS") or values.keys["ISOTHERMS"].default)
    found = []
    for part in text.replace(";", ",").split(","):
        try:
            found.append(float(part))
        except ValueError:
            raise DownwarpError(
                "ISOTHERMS is {text!r}; it takes temperatures in degrees C with commas between, such as 300, 450, 600.",
                text=text,
            ) from None
    if not all(0 < each < 2000 for each in found):
        raise DownwarpError(
            "ISOTHERMS is {text!r}; each temperature must be above 0 and below 2000 degrees C.", text=text
        )
    return tuple(sorted(set(found)))


def refuse_number_of_ages(given: Sequence[str], names: Sequence[str]) -> NoReturn:
    """Raise DownwarpError where not one of the keys ``names`` is given but those ``given``."""
    if given:
        raise DownwarpError("{given} are given; it takes one of them.", given=listed(given, say(" and ")))
    raise DownwarpError("None of {names} is given; it takes one of them.", names=listed(names))


def check_age(values: Values, optional: bool = False) -> None:
    """Refuse ages and heat flows that contradict each other; ``optional``: none is needed."""
    given = [name for name in ("AGE_MYR", "AGE", "HEAT_FLOW") if name in values.keys and values.given(name)]
    names = [name for name in ("AGE_MYR", "AGE", "HEAT_FLOW") if name in values.keys]
    if len(given) > 1 or not (given or optional):
        refuse_number_of_ages(given, names)
    for name in ("AGE_MYR", "HEAT_FLOW", "AGE_UNIT_MYR", "RHO_MANTLE"):
        if name in values.keys:
            value = values.number(name)
            if value is not None and value <= 0:
                raise DownwarpError("{name} is {value:g}; it takes a number above 0.", name=name, value=value)
    if "HEAT_FLOW" in values.keys and values.enum("THERMAL") == STEADY and given != ["HEAT_FLOW"]:
        raise DownwarpError("THERMAL is 2 (steady heat flow), which takes HEAT_FLOW rather than an age.")


def geotherm(values: Values, age: float | None) -> Geotherm:
    """The geotherm that the keys describe, at an age in s where one is known; from HEAT_FLOW otherwise."""
    kind = values.enum("THERMAL")
    given = {
        "surface": values.required_number("SURFACE_C"),
        "mantle": values.number("MANTLE_C"),
        "diffusivity": values.number("DIFFUSIVITY"),
        "conductivity": values.number("CONDUCTIVITY"),
        "thickness": values.scaled("THERMAL_PLATE_KM", 1e3),
    }
    heat_flow = values.scaled("HEAT_FLOW", 1e-3) if "HEAT_FLOW" in values.keys else None
    if kind == STEADY:
        return usual(
            kind, **given, heat_flow=heat_flow,
            production=values.required_number("HEAT_PRODUCTION") * 1e-6,
            production_depth=values.required_number("PRODUCTION_KM") * 1e3,
        )  # fmt: skip
    if age is None and heat_flow is not None:
        age = age_of_heat_flow(usual(kind, **given, age=MYR), heat_flow)
    return usual(kind, **given, age=age)
