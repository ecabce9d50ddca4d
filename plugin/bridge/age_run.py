"""Thickness expected from age: what is read from keys, profiles and rasters, and what is written."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import partial

import numpy as np
from qgis.core import QgsFeature, QgsFeatureSource, QgsGeometry, QgsLineString, QgsPoint

from ..core.age_check import AgeCheck, check_age, isotherm_curves
from ..core.constants import MYR
from ..core.cooling import Geotherm
from ..core.errors import DownwarpError
from ..core.result import Estimate
from ..core.wording import say
from ..translation import joined
from . import referee_keys
from .keys import Values
from .options import KM
from .outputs import Outputs
from .picks import number_of
from .rows import Row
from .runs import Item, Progress
from .strength_run import AgeReader

SINKS = ("AGES", "ISOTHERM_DEPTHS")
FIELDS_OF_PROFILES = ("te_km", "te_low_km", "te_high_km")
YOUNGEST_SHOWN = 200.0
"""Age, Myr, up to which isotherms are given at least."""


@dataclass(frozen=True)
class FittedLine:
    """What one row of PROFILES brings."""

    name: str
    thickness: Estimate
    """m."""
    age: float
    """s."""
    load_age: float
    """s."""
    vertices: tuple[tuple[float, float, float, float], ...]
    """x, y, z, m of the line; empty where there is none."""


@dataclass(frozen=True)
class AgedLine:
    """A result with its line."""

    check: AgeCheck
    line: FittedLine


def check_keys(values: Values) -> tuple[Geotherm, tuple[float, ...]]:
    """The geotherm (at 1 Myr) and the isotherms that the keys ask for; raises DownwarpError."""
    names = ("AGE_MYR", "AGE", "AGE_FIELD")
    given = [name for name in names if values.given(name)]
    if len(given) != 1:
        referee_keys.refuse_number_of_ages(given, names)
    for name in ("AGE_MYR", "AGE_UNIT_MYR"):
        value = values.number(name)
        if value is not None and value <= 0:
            raise DownwarpError("{name} is {value:g}; it takes a number above 0.", name=name, value=value)
    if values.required_number("LOAD_AGE_MYR") < 0:
        raise DownwarpError("LOAD_AGE_MYR is {age:g}; it takes a number from 0.", age=values.number("LOAD_AGE_MYR"))
    return referee_keys.geotherm(values, MYR), referee_keys.isotherms(values)


def line_items(source: QgsFeatureSource, values: Values, reader: AgeReader | None) -> Iterator[Item]:
    """The rows of INPUT, to be read one after another."""
    fields = {key: values.raw(key) for key in ("NAME_FIELD", "AGE_FIELD", "LOAD_AGE_FIELD")}
    if fields["NAME_FIELD"] is None and source.fields().lookupField("transect") >= 0:
        fields["NAME_FIELD"] = "transect"
    for key, field in fields.items():
        if field is not None and source.fields().lookupField(field) < 0:
            raise DownwarpError("{key}: INPUT has no field {field!r}.", key=key, field=field)
    if source.fields().lookupField("te_km") < 0:
        raise DownwarpError("INPUT has no field 'te_km'; it takes the PROFILES of fittransects or fitstations.")
    for feature in source.getFeatures():
        name = str(feature.id() if fields["NAME_FIELD"] is None else feature[fields["NAME_FIELD"]])
        yield Item(name, partial(_read, source, feature, name, fields, values, reader))


def _read(source, feature: QgsFeature, name: str, fields, values: Values, reader, progress: Progress):
    progress(0.0)

    def number(field: str | None, key: str) -> float | None:
        if field is None or source.fields().lookupField(field) < 0:
            return None
        value = number_of(feature[field], say("{name}: {key} field {field}", name=name, key=key, field=field))
        return value if np.isfinite(value) else None

    sides = (number(field, "INPUT") for field in FIELDS_OF_PROFILES)
    thickness = Estimate(*(None if side is None else side * KM for side in sides))
    vertices: tuple[tuple[float, float, float, float], ...] = ()
    if feature.hasGeometry():
        vertices = tuple((v.x(), v.y(), v.z(), v.m()) for v in feature.geometry().vertices())
    if reader is not None:
        if not vertices:
            raise DownwarpError(
                "{name}: the line has no places, which AGE needs; give AGE_MYR or AGE_FIELD.", name=name
            )
        x, y = np.array(vertices)[:, :2].T
        age = float(np.nanmedian(reader.at(name, x, y)))
    else:
        stated = number(fields["AGE_FIELD"], "AGE_FIELD") if fields["AGE_FIELD"] else values.number("AGE_MYR")
        if stated is None or stated <= 0:
            words = say("empty") if stated is None else f"{stated:g}"
            raise DownwarpError("{name}: the plate's age is {words}; it takes Myr above 0.", name=name, words=words)
        age = stated * MYR
    load_age = number(fields["LOAD_AGE_FIELD"], "LOAD_AGE_FIELD")
    if load_age is None:
        load_age = values.required_number("LOAD_AGE_MYR")
    return None, FittedLine(name, thickness, age, load_age * MYR, vertices)


def work(geotherm: Geotherm, isotherms: tuple[float, ...], line: FittedLine, progress: Progress) -> AgedLine:
    """The answer for one line."""
    return AgedLine(check_age(line.name, line.thickness, line.age, line.load_age, geotherm, isotherms), line)


def age_row(check: AgeCheck) -> Row:
    """AGES values."""
    te, temperature = check.thickness, check.temperature
    return {
        "transect": check.name,
        "te_km": None if te.value is None else te.value / KM,
        "te_low_km": None if te.low is None else te.low / KM,
        "te_high_km": None if te.high is None else te.high / KM,
        "age_myr": check.age / MYR,
        "load_age_myr": check.load_age / MYR,
        "age_at_loading_myr": check.age_at_loading / MYR,
        "temperature_c": temperature.value,
        "temperature_low_c": temperature.low,
        "temperature_high_c": temperature.high,
        "remarks": joined(check.remarks),
    }


def write_check(outputs: Outputs, aged: AgedLine, track) -> None:
    """Write AGES and the isotherms' depths at the age at loading."""
    outputs.add("AGES", age_row(aged.check), _line(aged.line.vertices))
    for temperature, depth in aged.check.expected:
        outputs.add("ISOTHERM_DEPTHS", {
            "transect": aged.check.name,
            "age_at_loading_myr": aged.check.age_at_loading / MYR,
            "temperature_c": temperature,
            "depth_km": None if depth is None else depth / KM,
        })  # fmt: skip


def curves(geotherm: Geotherm, isotherms: tuple[float, ...], checks: list[AgeCheck]):
    """Isotherm curves that reach beyond the oldest plate."""
    oldest = max([YOUNGEST_SHOWN * MYR] + [1.1 * check.age_at_loading for check in checks])
    return isotherm_curves(geotherm, isotherms, oldest)


def _line(vertices) -> QgsGeometry | None:
    if len(vertices) < 2:
        return None
    return QgsGeometry(QgsLineString([QgsPoint(*vertex) for vertex in vertices]))
