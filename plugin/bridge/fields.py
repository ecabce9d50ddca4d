"""The fields of every output layer, once for all: sinks, help and tests take them from here."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from typing import Any

from qgis.core import NULL, QgsField, QgsFields, QgsWkbTypes
from qgis.PyQt.QtCore import QVariant

try:  # QGIS built on Qt 6 has no QVariant type names, older ones do not take QMetaType
    from qgis.PyQt.QtCore import QMetaType

    TYPES = {
        "text": QMetaType.Type.QString,
        "real": QMetaType.Type.Double,
        "whole": QMetaType.Type.Int,
    }
    QgsField("probe", TYPES["real"])
except (ImportError, AttributeError, TypeError):
    TYPES = {"text": QVariant.Type.String, "real": QVariant.Type.Double, "whole": QVariant.Type.Int}

_TEXT = {
    "transect",
    "setting",
    "plate",
    "kind",
    "parameter",
    "unit",
    "origin",
    "choice",
    "option",
    "remarks",
    "verdict",
    "source",
    "name",
    "guide",
}
_WHOLE = {"in_fit", "stations_fit"}

FIELDS: dict[str, tuple[str, ...]] = {
    "PROFILES": (
        "transect", "setting", "plate", "te_km", "te_low_km", "te_high_km", "rigidity_nm", "flexural_parameter_km",
        "break_km", "break_low_km", "break_high_km", "end_shear_n_per_m", "end_moment_n", "regional_level_m",
        "regional_tilt_m_per_km", "rms_m", "stations_fit", "stations_effective", "deepest_m", "deepest_km", "node_km",
        "bulge_m", "bulge_km", "young_gpa", "poisson", "gravity_m_s2", "rho_mantle", "rho_infill", "rho_load",
        "remarks", "te_near_km", "te_near_low_km", "te_near_high_km", "zone_change_km", "zone_change_low_km",
        "zone_change_high_km",
    ),
    "STATIONS": (
        "transect", "distance_km", "dem_m", "load_mpa", "observed_m", "sigma_m", "in_fit", "deflection_m",
        "predicted_m", "predicted_low_m", "predicted_high_m", "residual_m", "slope", "moment_n", "shear_n_per_m",
        "curvature_per_m", "fibre_stress_mpa", "te_km", "infill_kg_m3",
    ),
    "MARKERS": ("transect", "kind", "distance_km", "deflection_m", "elevation_m"),
    "PARAMETERS": ("transect", "plate", "parameter", "value", "low", "high", "unit", "origin"),
    "MISFIT": ("transect", "plate", "te_km", "break_km", "rms_m", "relative_likelihood"),
    "TRANSECTS": ("name", "guide", "along_km", "azimuth_deg", "remarks"),
    "CHOICES": ("transect", "choice", "option", "te_km", "te_low_km", "te_high_km", "rms_m"),
    "ALONG_STRIKE": (
        "transect", "along_strike_km", "place_km", "setting", "plate", "te_km", "te_low_km", "te_high_km", "break_km",
        "break_low_km", "break_high_km", "deepest_m", "deepest_km", "node_km", "bulge_m", "bulge_km",
        "end_shear_n_per_m", "end_shear_low_n_per_m", "end_shear_high_n_per_m", "end_moment_n", "end_moment_low_n",
        "end_moment_high_n", "rms_m", "young_gpa", "poisson", "gravity_m_s2", "rho_mantle", "rho_infill", "rho_load",
    ),
    "CHECKS": (
        "transect", "setting", "te_km", "rigidity_nm", "flexural_parameter_km", "strip_deepest_m", "strip_deepest_km",
        "strip_node_km", "strip_bulge_m", "strip_bulge_km", "mapped_deepest_m", "mapped_deepest_km", "mapped_node_km",
        "mapped_bulge_m", "mapped_bulge_km", "deepest_error_percent", "bulge_error_percent", "node_shift_km",
        "bulge_shift_km", "strip_te_km", "te_error_percent", "verdict", "distortion_percent", "young_gpa", "poisson",
        "gravity_m_s2", "rho_mantle", "rho_infill", "rho_load", "remarks",
    ),
    "CHECK_STATIONS": (
        "transect", "distance_km", "dem_m", "strip_load_mpa", "mapped_load_mpa", "strip_deflection_m",
        "mapped_deflection_m", "difference_m", "te_km",
    ),
    "ANOMALIES": (
        "transect", "distance_km", "free_air_mgal", "bouguer_mgal", "load_mgal", "surface_mgal", "moho_mgal",
        "observed_mgal", "sigma_mgal", "in_fit", "predicted_mgal", "residual_mgal",
    ),
    "EVIDENCE": (
        "transect", "source", "te_km", "te_low_km", "te_high_km", "rho_load", "rho_load_low", "rho_load_high", "rms_m",
        "rms_mgal", "remarks",
    ),
    "VERDICTS": (
        "transect", "distance_km", "te_km", "curvature_per_m", "fibre_stress_mpa", "moment_n", "moment_limit_n",
        "moment_share", "expected_te_km", "mechanical_km", "mechanical_fit_km", "age_myr", "heat_flow_mw_m2",
        "age_fit_myr", "heat_flow_fit_mw_m2", "overstressed_share", "verdict", "young_gpa", "poisson", "remarks",
    ),
    "ENVELOPES": (
        "transect", "depth_km", "temperature_c", "tension_mpa", "compression_mpa", "stress_mpa", "elastic_stress_mpa",
    ),
    "MOMENTS": ("transect", "curvature_per_m", "moment_n", "effective_te_km"),
    "AGES": (
        "transect", "te_km", "te_low_km", "te_high_km", "age_myr", "load_age_myr", "age_at_loading_myr",
        "temperature_c", "temperature_low_c", "temperature_high_c", "remarks",
    ),
    "ISOTHERM_DEPTHS": ("transect", "age_at_loading_myr", "temperature_c", "depth_km"),
}  # fmt: skip
"""Names of the fields of each output, in order."""

GEOMETRY = {
    "TRANSECTS": QgsWkbTypes.Type.LineString,
    "PROFILES": QgsWkbTypes.Type.LineStringZM,
    "STATIONS": QgsWkbTypes.Type.PointZ,
    "MARKERS": QgsWkbTypes.Type.PointZ,
    "ALONG_STRIKE": QgsWkbTypes.Type.Point,
    "CHECKS": QgsWkbTypes.Type.LineStringZM,
    "CHECK_STATIONS": QgsWkbTypes.Type.PointZ,
    "ANOMALIES": QgsWkbTypes.Type.PointZ,
    "VERDICTS": QgsWkbTypes.Type.PointZ,
    "AGES": QgsWkbTypes.Type.LineStringZM,
}
"""Geometry of each output that has one."""


def layer_fields(output: str, left_out: Iterable[str] = ()) -> QgsFields:
    """The fields of an output as QGIS takes them."""
    fields = QgsFields()
    for name in FIELDS[output]:
        if name not in left_out:
            kind = "text" if name in _TEXT else "whole" if name in _WHOLE else "real"
            fields.append(QgsField(name, TYPES[kind]))
    return fields


def attributes(row: Mapping[str, Any], fields: QgsFields) -> list:
    """A row's values in the order of ``fields``; what is missing, None or not finite becomes NULL."""
    return [plain(row.get(field.name())) for field in fields]


def plain(value: Any) -> Any:
    """A value as QGIS stores it: NULL for None and for numbers that are not finite, no numpy types, text as it is."""
    if value is None:
        return NULL
    if isinstance(value, str):
        return str(value)  # QGIS would not take what `say` returns
    if hasattr(value, "item"):
        value = value.item()
    if isinstance(value, bool):
        return int(value)
    if isinstance(value, float) and not math.isfinite(value):
        return NULL
    return value
