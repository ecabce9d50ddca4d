"""Results in SI units to rows of the output layers, in the units that their fields' names state."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np

from ..core.elastic import flexural_parameter
from ..core.profile import Profile
from ..core.result import Bent, Estimate, Fit, FitResult
from ..core.settings import PLATE_NAMES, SETTINGS
from ..translation import joined
from .fields import FIELDS

Row = dict[str, Any]


def _km(value: float | None) -> float | None:
    return None if value is None else value / 1e3


def bent_row(bent: Bent) -> Row:
    """PROFILES values that every bent plate has."""
    options, rho = bent.problem.options, bent.problem.densities
    elastic = options.elastic
    rigidity = float(elastic.rigidity(bent.thickness))
    marks = bent.markers
    level, tilt, _ = bent.regional
    return {
        "transect": bent.problem.profile.name,
        "setting": SETTINGS[options.setting].name,
        "plate": PLATE_NAMES[bent.kind],
        "te_km": bent.thickness / 1e3,
        "rigidity_nm": rigidity,
        "flexural_parameter_km": float(flexural_parameter(rigidity, (rho.mantle - rho.infill) * elastic.gravity)) / 1e3,
        "break_km": _km(bent.break_position),
        "end_shear_n_per_m": bent.end_shear,
        "end_moment_n": bent.end_moment,
        "regional_level_m": level,
        "regional_tilt_m_per_km": tilt * 1e3,
        "deepest_m": None if marks.deepest is None else abs(marks.deepest.deflection),
        "deepest_km": None if marks.deepest is None else marks.deepest.distance / 1e3,
        "node_km": None if marks.node is None else marks.node.distance / 1e3,
        "bulge_m": None if marks.bulge is None else abs(marks.bulge.deflection),
        "bulge_km": None if marks.bulge is None else marks.bulge.distance / 1e3,
        "young_gpa": elastic.young / 1e9,
        "poisson": elastic.poisson,
        "gravity_m_s2": elastic.gravity,
        "rho_mantle": rho.mantle,
        "rho_infill": rho.infill,
        "rho_load": rho.load,
        "remarks": joined(bent.problem.remarks + bent.remarks),
    }


def profile_row(result: FitResult) -> Row:
    """PROFILES values of a fitted transect."""
    best = result.best
    row = bent_row(best.bent)
    row.update(
        te_km=_km(best.thickness.value),
        te_low_km=_km(best.thickness.low),
        te_high_km=_km(best.thickness.high),
        break_low_km=_km(best.break_position.low),
        break_high_km=_km(best.break_position.high),
        rms_m=best.rms,
        stations_fit=best.count,
        stations_effective=best.effective,
        remarks=joined(result.remarks),
    )
    near, change = (Estimate(None),) * 2 if best.zones is None else (best.zones.near, best.zones.change)
    for name, estimate in (("te_near", near), ("zone_change", change)):
        row[f"{name}_km"] = _km(estimate.value)
        row[f"{name}_low_km"] = _km(estimate.low)
        row[f"{name}_high_km"] = _km(estimate.high)
    if best.thickness.value is None:
        row.update(rigidity_nm=None, flexural_parameter_km=None)
    return row


def strike_row(result: FitResult) -> Row:
    """ALONG_STRIKE values of a fitted transect, but for its place."""
    row = profile_row(result)
    for name, unit in (("end_shear", "n_per_m"), ("end_moment", "n")):
        force = result.best.coefficients.get(name, Estimate(None))
        row[f"{name}_low_{unit}"], row[f"{name}_high_{unit}"] = force.low, force.high
    return {name: row[name] for name in FIELDS["ALONG_STRIKE"] if name in row}


def station_rows(bent: Bent, thickness_known: bool = True) -> Iterator[Row]:
    """STATIONS values, a row per station."""
    profile, values = bent.problem.profile, bent.stations
    thickness = values.thickness / 1e3 if thickness_known else np.full(values.thickness.shape, np.nan)
    columns = {
        **sampled_columns(profile),
        "load_mpa": values.load / 1e6,
        "observed_m": values.observed,
        "sigma_m": values.sigma,
        "in_fit": values.in_fit,
        "deflection_m": values.deflection,
        "predicted_m": values.predicted,
        "predicted_low_m": values.predicted_low,
        "predicted_high_m": values.predicted_high,
        "residual_m": values.observed - values.predicted,
        "slope": values.slope,
        "moment_n": values.moment,
        "shear_n_per_m": values.shear,
        "curvature_per_m": values.curvature,
        "fibre_stress_mpa": values.fibre_stress / 1e6,
        "te_km": thickness,
        "infill_kg_m3": values.infill,
    }
    yield from as_rows(profile.name, columns)


def sampled_columns(profile: Profile) -> dict[str, np.ndarray]:
    """STATIONS values that are there without a plate."""
    columns = {"distance_km": profile.distance / 1e3, "dem_m": profile.relief}
    if profile.observed is not None:
        columns["observed_m"] = profile.observed
    if profile.sigma is not None:
        columns["sigma_m"] = profile.sigma
    return columns


def as_rows(name: str, columns: dict[str, np.ndarray]) -> Iterator[Row]:
    """Columns turned into one row per station."""
    lists = {key: values.tolist() for key, values in columns.items()}
    for values in zip(*lists.values()):
        yield {"transect": name, **dict(zip(lists, values))}


def marker_rows(bent: Bent) -> Iterator[Row]:
    """MARKERS values: the elevation is that of the predicted surface."""
    name = bent.problem.profile.name
    level, tilt, bow = bent.regional
    places = [
        (kind, place.distance, place.deflection)
        for kind, place in (
            ("deepest", bent.markers.deepest),
            ("node", bent.markers.node),
            ("bulge", bent.markers.bulge),
        )
        if place is not None
    ]
    if bent.break_position is not None:
        distance = bent.problem.profile.distance
        on_plate = np.isfinite(bent.stations.deflection)
        at_break = np.interp(bent.break_position, distance[on_plate], bent.stations.deflection[on_plate])
        places.insert(0, ("break", bent.break_position, float(at_break)))
    for kind, distance, deflection in places:
        yield {
            "transect": name,
            "kind": kind,
            "distance_km": distance / 1e3,
            "deflection_m": deflection,
            "elevation_m": level + tilt * distance + bow * distance**2 - deflection,
        }


def parameter_rows(result: FitResult) -> Iterator[Row]:
    """PARAMETERS values."""
    name, plate = result.best.bent.problem.profile.name, PLATE_NAMES[result.best.kind]
    for each in result.parameters:
        yield {
            "transect": name,
            "plate": plate,
            "parameter": each.name,
            "value": each.value,
            "low": each.low,
            "high": each.high,
            "unit": each.unit,
            "origin": each.origin,
        }


def misfit_rows(name: str, fits: tuple[Fit, ...]) -> Iterator[Row]:
    """MISFIT values of all kinds of plate tried."""
    for fit in fits:
        for each in fit.misfit:
            yield {
                "transect": name,
                "plate": PLATE_NAMES[each.kind],
                "te_km": each.thickness / 1e3,
                "break_km": _km(each.break_position),
                "rms_m": each.rms,
                "relative_likelihood": each.relative_likelihood,
            }


def choice_rows(result: FitResult) -> Iterator[Row]:
    """CHOICES values."""
    name = result.best.bent.problem.profile.name
    for each in result.choices:
        yield {
            "transect": name,
            "choice": each.choice,
            "option": each.option,
            "te_km": _km(each.thickness.value),
            "te_low_km": _km(each.thickness.low),
            "te_high_km": _km(each.thickness.high),
            "rms_m": each.rms,
        }
