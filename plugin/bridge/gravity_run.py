"""Gravity along transects: what is read from keys, layers and points, and what is written."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from qgis.core import QgsFeatureSource, QgsGeometry

from ..core.constants import MILLIGAL
from ..core.crust import Crust
from ..core.errors import DownwarpError
from ..core.gravity_check import GravityCheck, GravityOptions, check_gravity
from ..core.joint import JointOptions, Readings
from ..core.stated import PlateStations
from ..core.transect import Transect
from ..core.wording import say
from ..translation import joined
from .frames import Frame, transformed, transformer
from .keys import Values
from .options import KM, elastic
from .outputs import Outputs, Track, place
from .picks import number_of
from .rasters import RasterReader
from .rows import Row
from .runs import Progress

SINKS = ("ANOMALIES", "EVIDENCE", "PARAMETERS")


def gravity_options(values: Values) -> GravityOptions:
    """What the keys ask for; raises DownwarpError where they contradict each other."""
    if values.given("ANOMALY") and values.given("ANOMALY_POINTS"):
        raise DownwarpError("ANOMALY and ANOMALY_POINTS are both given; it takes one of them.")
    if values.given("ANOMALY_POINTS") and not values.given("ANOMALY_FIELD"):
        raise DownwarpError("ANOMALY_FIELD is blank; it takes the field with the anomaly of ANOMALY_POINTS.")
    if values.required_number("ANOMALY_REACH") <= 0:
        raise DownwarpError(
            "ANOMALY_REACH is {reach:g}; it takes a number above 0.", reach=values.number("ANOMALY_REACH")
        )
    fit_from, fit_to = values.scaled("FIT_FROM", KM), values.scaled("FIT_TO", KM)
    if fit_from is not None and fit_to is not None and fit_from >= fit_to:
        raise DownwarpError(
            "FIT_FROM ({fit_from:g} km) must be below FIT_TO ({fit_to:g} km).",
            fit_from=fit_from / KM,
            fit_to=fit_to / KM,
        )
    crust = Crust(
        load=values.required_number("RHO_LOAD"),
        mantle=values.required_number("RHO_MANTLE"),
        crust=values.required_number("RHO_CRUST"),
        water=values.required_number("RHO_WATER"),
        thickness=values.required_number("CRUST_KM") * KM,
        bouguer=values.required_number("RHO_BOUGUER"),
    )
    if crust.load <= crust.water:
        raise DownwarpError(
            "RHO_LOAD ({load:g} kg/m3) must exceed RHO_WATER ({water:g} kg/m3), which it displaces.",
            load=crust.load,
            water=crust.water,
        )
    before = values.enum("BEFORE")
    return GravityOptions(
        crust=crust,
        elastic=elastic(values),
        level=values.number("REFERENCE_LEVEL"),
        shape=values.enum("SHAPE"),
        before=before - 1 if before else None,
        kind=values.enum("ANOMALY_KIND"),
        regional=values.enum("ANOMALY_REGIONAL"),
        fit_from=fit_from,
        fit_to=fit_to,
        joint=values.flag("JOINT"),
        search=JointOptions(
            te_from=values.required_number("TE_FROM") * KM,
            te_to=values.required_number("TE_TO") * KM,
            rho_from=values.required_number("RHO_LOAD_FROM"),
            rho_to=values.required_number("RHO_LOAD_TO"),
            confidence=values.required_number("CONFIDENCE") / 100.0,
        ),
    )


class RasterReadings:
    """Gravity from a raster, read at the stations."""

    def __init__(self, reader: RasterReader, frame: Frame) -> None:
        self._reader, self._frame = reader, frame

    def along(self, plate: PlateStations, track: Track, progress: Progress) -> Readings:
        """Anomaly, m/s2, at the stations."""
        longitude, latitude = self._frame.to_degrees(track.x, track.y)
        value = self._reader.sample(longitude, latitude, progress)
        if not np.isfinite(value).any():
            raise DownwarpError("{transect}: ANOMALY has no data anywhere along the line.", transect=plate.name)
        cell = self._reader.cell_size_m(longitude, latitude)
        return Readings(track.distance, value * MILLIGAL.value, None, float(np.nanmedian(cell)))


class PointReadings:
    """Gravity from points within reach of the line."""

    def __init__(self, source: QgsFeatureSource, frame: Frame, field: str, sigma: str | None, reach: float) -> None:
        """``field``, ``sigma``: names of fields, mGal; ``reach``: m."""
        rows = []
        for feature in source.getFeatures():
            point = next(feature.geometry().vertices(), None) if feature.hasGeometry() else None
            if point is None:
                continue
            spread = (
                number_of(feature[sigma], say("{key} field {field}", key="ANOMALY_SIGMA", field=sigma))
                if sigma
                else float("nan")
            )
            rows.append(
                (
                    point.x(),
                    point.y(),
                    number_of(feature[field], say("{key} field {field}", key="ANOMALY_FIELD", field=field)),
                    spread,
                )
            )
        if not rows:
            raise DownwarpError("ANOMALY_POINTS holds no point.")
        x, y, value, spread = np.array(rows).T
        own = Frame.of(source.sourceCrs(), "ANOMALY_POINTS")
        self._longitude, self._latitude = transformed(transformer(own.crs, frame.geographic, "ANOMALY_POINTS"), x, y)
        self._value, self._sigma = value * MILLIGAL.value, spread * MILLIGAL.value
        self._frame, self._reach = frame, reach

    def along(self, plate: PlateStations, track: Track, progress: Progress) -> Readings:
        """Anomaly, m/s2, at the points' feet on the line; points at one place are averaged."""
        line = np.column_stack(self._frame.to_degrees(track.x, track.y))
        transect = Transect(plate.name, line, self._frame.ellipsoid)
        along, across = transect.project(self._longitude, self._latitude)
        near = (np.abs(across) <= self._reach) & (along >= 0) & (along <= transect.length) & np.isfinite(self._value)
        if not near.any():
            raise DownwarpError(
                "{transect}: no point of ANOMALY_POINTS lies within ANOMALY_REACH of the line.", transect=plate.name
            )
        # Whole metres: points closer than that have one foot.
        place, index = np.unique(np.round(along[near] + track.distance[0]), return_inverse=True)
        count = np.bincount(index)
        value = np.bincount(index, self._value[near]) / count
        sigma = np.bincount(index, self._sigma[near]) / count
        return Readings(place, value, sigma if (sigma > 0).all() else None)


@dataclass(frozen=True)
class PlateWithGravity:
    """What one transect brings."""

    plate: PlateStations
    readings: Readings | None

    def check(self, options: GravityOptions, progress: Progress) -> GravityCheck:
        """The answer."""
        return check_gravity(self.plate, self.readings, options, progress)


def _in_mgal(value: float | None) -> float | None:
    return None if value is None else value / MILLIGAL.value


def station_rows(check: GravityCheck) -> list[Row]:
    """ANOMALIES values, a row per station or reading."""
    model = check.model
    columns = {
        "distance_km": check.distance / KM,
        "free_air_mgal": _in_mgal(model.free_air),
        "bouguer_mgal": _in_mgal(model.bouguer),
        "load_mgal": _in_mgal(model.load),
        "surface_mgal": _in_mgal(model.surface),
        "moho_mgal": _in_mgal(model.moho),
        "observed_mgal": _in_mgal(check.observed),
        "sigma_mgal": _in_mgal(check.sigma),
        "in_fit": check.used.astype(int),
        "predicted_mgal": _in_mgal(check.predicted),
        "residual_mgal": _in_mgal(check.observed - check.predicted),
    }
    lists = {key: np.asarray(values).tolist() for key, values in columns.items()}
    return [{"transect": check.name, **dict(zip(lists, values))} for values in zip(*lists.values())]


def evidence_rows(check: GravityCheck) -> list[Row]:
    """EVIDENCE values: the plate as given, then what surface, gravity and both say."""
    remarks = joined(check.remarks)
    thickness = check.plate.thickness[check.plate.on_plate]
    known = thickness[np.isfinite(thickness)]
    rows: list[Row] = [{
        "transect": check.name,
        "source": say("plate as given"),
        "te_km": float(np.median(known)) / KM if known.size else None,
        "rho_load": check.crust.load if check.section.under_load.any() else None,
        "rms_mgal": _in_mgal(check.rms),
        "remarks": remarks,
    }]  # fmt: skip
    if check.joint is None:
        return rows
    for answer in (check.joint.surface, check.joint.gravity, check.joint.joint):
        te, rho = answer.thickness, answer.density
        rows.append({
            "transect": check.name,
            "source": answer.source,
            "te_km": None if te.value is None else te.value / KM,
            "te_low_km": None if te.low is None else te.low / KM,
            "te_high_km": None if te.high is None else te.high / KM,
            "rho_load": rho.value, "rho_load_low": rho.low, "rho_load_high": rho.high,
            "rms_m": answer.surface_rms,
            "rms_mgal": _in_mgal(answer.gravity_rms),
            "remarks": remarks,
        })  # fmt: skip
    return rows


def point_at(track: Track | None, distance: float) -> QgsGeometry | None:
    """The place at a distance, m, along the line, at sea level; None without places."""
    if track is None:
        return None
    x, y = track.at(distance)
    return place(float(x), float(y), 0.0)


def write_check(outputs: Outputs, check: GravityCheck, track: Track | None) -> None:
    """Write ANOMALIES, EVIDENCE and PARAMETERS of one transect."""
    for row in station_rows(check):
        outputs.add("ANOMALIES", row, point_at(track, row["distance_km"] * KM))
    for row in evidence_rows(check):
        outputs.add("EVIDENCE", row)
    for row in crust_rows(check):
        outputs.add("PARAMETERS", row)


def crust_rows(check: GravityCheck) -> list[Row]:
    """PARAMETERS values: the crustal model in use."""
    crust = check.crust
    values = (
        ("RHO_LOAD", crust.load, "kg/m3"), ("RHO_WATER", crust.water, "kg/m3"), ("RHO_CRUST", crust.crust, "kg/m3"),
        ("RHO_MANTLE", crust.mantle, "kg/m3"), ("CRUST_KM", crust.thickness / KM, "km"),
        ("RHO_BOUGUER", crust.bouguer, "kg/m3"),
    )  # fmt: skip
    rows: list[Row] = [
        {"transect": check.name, "parameter": name, "value": value, "unit": unit, "origin": "given"}
        for name, value, unit in values
    ]
    if check.section.under_load.any():
        level = {"parameter": "REFERENCE_LEVEL", "value": check.section.level, "unit": "m", "origin": "measured"}
        rows.append({"transect": check.name, **level})
    return rows


def gravity_numbers(checks) -> dict[str, float | None]:
    """The single transect's joint answer, or the median over several; None where there is none."""
    found: dict[str, list[float]] = {name: [] for name in NUMBERS}
    count = 0
    for check in checks:
        count += 1
        if check.rms is not None:
            found["RMS_MGAL"].append(check.rms / MILLIGAL.value)
        if check.joint is None:
            continue
        te, rho = check.joint.joint.thickness, check.joint.joint.density
        for name, value in (
            ("TE_KM", te.value), ("TE_LOW_KM", te.low), ("TE_HIGH_KM", te.high), ("LOAD_DENSITY", rho.value),
        ):  # fmt: skip
            if value is not None:
                found[name].append(value / KM if name != "LOAD_DENSITY" else value)
    results = {name: float(np.median(values)) if values else None for name, values in found.items()}
    return {**results, "TRANSECTS_DONE": count}


NUMBERS = {
    "RMS_MGAL": say("Root mean square residual of gravity, mGal"),
    "TE_KM": say("Elastic thickness from surface and gravity, km"),
    "TE_LOW_KM": say("Its lower bound, km"),
    "TE_HIGH_KM": say("Its upper bound, km"),
    "LOAD_DENSITY": say("Density of the load from surface and gravity, kg/m3"),
}
"""Numbers that a run returns, beside TRANSECTS_DONE."""
