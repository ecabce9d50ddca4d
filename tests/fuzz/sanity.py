"""What must hold of any result, whatever went in; each check returns words on what does not."""

from __future__ import annotations

import math
import re
from collections.abc import Iterator
from typing import Any

from qgis.core import NULL, QgsVectorLayer

NOT_SENTENCES = re.compile(
    r"Traceback|object at 0x|<qgis\.|NoneType|has no attribute|not subscriptable|unsupported operand|could not convert|"
    r"index \d+ is out|broadcast|argument \d|KeyError|IndexError|TypeError|ValueError|ZeroDivision|\bnp\.|numpy|"
    r"division by zero|invalid literal|list index|unexpected keyword|LinAlgError|array"
)
"""Words that a program says to its maker rather than to its user."""
LONGEST = 900
"""Letters in a refusal beyond which nobody reads it."""
EXACT = 1e-9


def refusal_faults(text: str) -> Iterator[str]:
    """What is wrong with a refusal."""
    if not text.strip():
        yield "refused without a word"
    found = NOT_SENTENCES.search(text)
    if found:
        yield f"not a sentence for users ({found[0]!r}): {text[:400]}"
    if len(text) > LONGEST:
        yield f"a refusal of {len(text)} letters: {text[:200]} ..."


def result_faults(results: dict[str, Any], context, parameters: dict[str, Any]) -> Iterator[str]:
    """What is wrong with the results of a run."""
    for name, value in results.items():
        if isinstance(value, float) and not math.isfinite(value):
            yield f"{name} is {value}"
    tables = {}
    for name, value in results.items():
        layer = value if isinstance(value, QgsVectorLayer) else None
        if layer is None and isinstance(value, str) and value:
            layer = context.getMapLayer(value)
            if layer is None and value.partition("|")[0].endswith((".gpkg", ".fgb", ".csv", ".xlsx")):
                layer = QgsVectorLayer(value, name, "ogr")
        if isinstance(layer, QgsVectorLayer):
            if not layer.isValid():
                yield f"{name} is no valid layer: {value}"
                continue
            tables[name] = _rows(layer)
    for name, rows in tables.items():
        yield from _finite(name, rows)
        check = CHECKS.get(name)
        if check is not None:
            yield from (f"{name}: {fault}" for fault in check(rows, parameters))
    low, te, high = (results.get(name) for name in ("TE_LOW_KM", "TE_KM", "TE_HIGH_KM"))
    # Over several transects these are medians of those that have a value each.
    if results.get("TRANSECTS_FITTED") == 1:
        yield from _ordered("TE_LOW_KM <= TE_KM <= TE_HIGH_KM", low, te, high)


def _rows(layer: QgsVectorLayer) -> list[dict[str, Any]]:
    names = [field.name() for field in layer.fields()]
    rows = []
    for feature in layer.getFeatures():
        row = {name: None if feature[name] in (None, NULL) else feature[name] for name in names}
        row["geometry"] = feature.geometry() if feature.hasGeometry() else None
        rows.append(row)
    if layer.dataProvider().storageType() == "CSV":
        # A CSV has words only.
        rows = [{name: _read(name, value) for name, value in row.items()} for row in rows]
    return rows


TEXTS = {"transect", "name", "guide", "remarks"}


def _read(name: str, value: Any) -> Any:
    if not isinstance(value, str) or name in TEXTS:
        return value
    if value == "":
        return None
    try:
        return float(value)
    except ValueError:
        return value


def _finite(name: str, rows: list[dict]) -> Iterator[str]:
    """Numbers are finite or NULL, and places finite."""
    for row in rows:
        for field, value in row.items():
            if isinstance(value, float) and not math.isfinite(value):
                yield f"{name}.{field} is {value}"
                return
        geometry = row["geometry"]
        if geometry is not None and not geometry.isEmpty():
            for vertex in geometry.vertices():
                if not (math.isfinite(vertex.x()) and math.isfinite(vertex.y())):
                    yield f"{name} has a place that is not finite"
                    return


def _ordered(what: str, *values: float | None) -> Iterator[str]:
    known = [value for value in values if value is not None]
    for one, other in zip(known, known[1:]):
        if one > other + EXACT * max(abs(one), abs(other), 1e-12):
            yield f"{what} does not hold: {values}"


def _number(parameters: dict[str, Any], name: str, default: float) -> float:
    try:
        return float(parameters.get(name, default))
    except (TypeError, ValueError):
        return default


def _stations(rows: list[dict], parameters: dict) -> Iterator[str]:
    last: dict[Any, float] = {}
    for row in rows:
        distance = row["distance_km"]
        if distance is None:
            yield "a station without distance"
            return
        if row["transect"] in last and distance <= last[row["transect"]]:
            if any(row["transect"] in (None, "") for row in rows) or _names_repeat(rows):
                return
            yield f"distance does not grow: {last[row['transect']]} to {distance}"
            return
        last[row["transect"]] = distance
        if row.get("in_fit") not in (None, 0, 1):
            yield f"in_fit is {row['in_fit']}"
        for name in ("te_km", "sigma_m"):
            if row.get(name) is not None and row[name] < 0:
                yield f"{name} is {row[name]}"
        low, high = row.get("predicted_low_m"), row.get("predicted_high_m")
        yield from _ordered("predicted_low_m <= predicted_high_m", low, high)
        observed, predicted, residual = (row.get(name) for name in ("observed_m", "predicted_m", "residual_m"))
        if None not in (observed, predicted, residual):
            size = max(abs(observed), abs(predicted), 1.0)
            if abs(observed - predicted - residual) > 1e-6 * size:
                yield f"residual_m is {residual}, not {observed} - {predicted}"
        carried = [row.get(name) is None for name in ("deflection_m", "slope", "moment_n")]
        if "deflection_m" in row and any(carried) and not all(carried):
            yield f"deflection, slope and moment are not all known or all unknown at {distance} km"


def _names_repeat(rows: list[dict]) -> bool:
    """Whether a transect's name comes back after another's: two of the same name."""
    order = [row["transect"] for row in rows]
    runs = [name for number, name in enumerate(order) if number == 0 or order[number - 1] != name]
    return len(runs) != len(set(runs)) or True in (row.get("distance_km") == 0 for row in rows[1:])


def _profiles(rows: list[dict], parameters: dict) -> Iterator[str]:
    te_from, te_to = _number(parameters, "TE_FROM", 1.0), _number(parameters, "TE_TO", 100.0)
    for row in rows:
        te, low, high = row["te_km"], row["te_low_km"], row["te_high_km"]
        yield from _ordered("te_low_km <= te_km <= te_high_km", low, te, high)
        for name, value in (("te_km", te), ("te_low_km", low), ("te_high_km", high)):
            searched = "TE_KM" not in parameters or row["rms_m"] is not None
            inside = te_from * (1 - EXACT) <= value <= te_to * (1 + EXACT) if value is not None else True
            if searched and row["rms_m"] is not None and not inside:
                yield f"{name} is {value}, searched from {te_from} to {te_to}"
        low, place, high = (row[name] for name in ("break_low_km", "break_km", "break_high_km"))
        yield from _ordered("break_low_km <= break_km <= break_high_km", low, place, high)
        if te is not None and row["rigidity_nm"] is not None:
            expected = row["young_gpa"] * 1e9 * (te * 1e3) ** 3 / (12 * (1 - row["poisson"] ** 2))
            if abs(row["rigidity_nm"] - expected) > 1e-6 * expected:
                yield f"rigidity_nm is {row['rigidity_nm']}, E Te^3 / 12 (1 - nu^2) is {expected}"
        for name in ("deepest_m", "bulge_m", "rms_m", "stations_fit", "stations_effective", "flexural_parameter_km"):
            if row[name] is not None and row[name] < 0:
                yield f"{name} is {row[name]}"
        if row["te_km"] is None and row["setting"] is None and not row["remarks"]:
            yield "a transect failed without a word"
        geometry = row["geometry"]
        if geometry is not None and not geometry.isEmpty():
            along = [vertex.m() for vertex in geometry.vertices()]
            if any(second <= first for first, second in zip(along, along[1:])):
                yield "M does not grow along the line"


def _markers(rows: list[dict], parameters: dict) -> Iterator[str]:
    for row in rows:
        if row["kind"] not in ("break", "deepest", "node", "bulge"):
            yield f"kind is {row['kind']}"
        if row["distance_km"] is None or row["deflection_m"] is None:
            yield f"a {row['kind']} without distance or deflection"


def _parameters(rows: list[dict], parameters: dict) -> Iterator[str]:
    # An interval of little confidence need not hold the best value, which belongs to the best thickness.
    holds = _number(parameters, "CONFIDENCE", 90.0) >= 90
    for row in rows:
        values = (row["low"], row["value"], row["high"]) if holds else (row["low"], row["high"])
        yield from _ordered(f"low <= value <= high of {row['parameter']}", *values)
        if not row["origin"]:
            yield f"{row['parameter']} has no origin"


def _misfit(rows: list[dict], parameters: dict) -> Iterator[str]:
    for row in rows:
        likelihood = row["relative_likelihood"]
        if likelihood is not None and not -EXACT <= likelihood <= 1 + EXACT:
            yield f"relative_likelihood is {likelihood}"
        if row["rms_m"] is not None and row["rms_m"] < 0:
            yield f"rms_m is {row['rms_m']}"


def _choices(rows: list[dict], parameters: dict) -> Iterator[str]:
    for row in rows:
        yield from _ordered("te_low_km <= te_km <= te_high_km", row["te_low_km"], row["te_km"], row["te_high_km"])


def _along_strike(rows: list[dict], parameters: dict) -> Iterator[str]:
    last = 0.0
    known = {row["along_strike_km"] is not None for row in rows}
    if len(known) > 1:
        yield "along_strike_km is known for some transects only"
    for number, row in enumerate(rows):
        for name in ("te_{}km", "break_{}km", "end_shear_{}n_per_m", "end_moment_{}n"):
            low, value, high = (row[name.format(part)] for part in ("low_", "", "high_"))
            # An interval of little confidence need not hold the best value, which belongs to the best thickness.
            held = (low, value, high) if name == "te_{}km" else (low, high)
            yield from _ordered(f"low <= value <= high of {name.format('')}", *held)
        along = row["along_strike_km"]
        if along is None:
            continue
        if along < last or (number == 0 and along != 0):
            yield f"along_strike_km begins with or falls to {along} after {last}"
        last = along


def _transects(rows: list[dict], parameters: dict) -> Iterator[str]:
    for row in rows:
        if row["geometry"] is None or row["geometry"].isEmpty():
            yield f"transect {row['name']} has no line"


CHECKS = {
    "STATIONS": _stations,
    "PROFILES": _profiles,
    "MARKERS": _markers,
    "PARAMETERS": _parameters,
    "MISFIT": _misfit,
    "CHOICES": _choices,
    "ALONG_STRIKE": _along_strike,
    "TRANSECTS": _transects,
}
