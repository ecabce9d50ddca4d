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
    TYPES = {"text": QVariant.String, "real": QVariant.Double, "whole": QVariant.Int}

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
        "remarks",
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
}  # fmt: skip
"""Names of the fields of each output, in order."""

GEOMETRY = {
    "TRANSECTS": QgsWkbTypes.Type.LineString,
    "PROFILES": QgsWkbTypes.Type.LineStringZM,
    "STATIONS": QgsWkbTypes.Type.PointZ,
    "MARKERS": QgsWkbTypes.Type.PointZ,
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
    """A value as QGIS stores it: NULL for None and for numbers that are not finite, no numpy types."""
    if value is None:
        return NULL
    if hasattr(value, "item"):
        value = value.item()
    if isinstance(value, bool):
        return int(value)
    if isinstance(value, float) and not math.isfinite(value):
        return NULL
    return value
