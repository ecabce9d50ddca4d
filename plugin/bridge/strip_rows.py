"""A strip beside the load as mapped as rows of the output layers, in the units that their fields' names state."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from ..core.markers import Markers
from ..core.strip_check import StripCheck
from ..translation import joined, translated
from .rows import Row, as_rows, bent_row

_FROM_BENT = (
    "transect", "setting", "te_km", "rigidity_nm", "flexural_parameter_km", "young_gpa", "poisson", "gravity_m_s2",
    "rho_mantle", "rho_infill", "rho_load",
)  # fmt: skip


def check_row(check: StripCheck) -> Row:
    """CHECKS values."""
    bent = bent_row(check.strip)
    return {
        **{name: bent[name] for name in _FROM_BENT},
        **_places("strip", check.strip.markers),
        **_places("mapped", check.markers),
        "deepest_error_percent": _times(check.deepest_error, 100.0),
        "bulge_error_percent": _times(check.bulge_error, 100.0),
        "node_shift_km": _times(check.node_shift, 1e-3),
        "bulge_shift_km": _times(check.bulge_shift, 1e-3),
        "strip_te_km": _times(check.strip_thickness, 1e-3),
        "te_error_percent": _times(check.thickness_error, 100.0),
        "verdict": translated(check.verdict),
        "distortion_percent": 100.0 * check.distortion,
        "remarks": joined(dict.fromkeys(check.remarks)),
    }


def station_rows(check: StripCheck) -> Iterator[Row]:
    """CHECK_STATIONS values, a row per station."""
    bent = check.strip
    profile, strip = bent.problem.profile, bent.stations
    columns = {
        "distance_km": profile.distance / 1e3,
        "dem_m": profile.relief,
        "strip_load_mpa": strip.load / 1e6,
        "mapped_load_mpa": check.load / 1e6,
        "strip_deflection_m": strip.deflection,
        "mapped_deflection_m": check.deflection,
        "difference_m": strip.deflection - check.deflection,
        "te_km": np.full(profile.distance.shape, bent.thickness / 1e3),
    }
    return as_rows(profile.name, columns)


def _places(of: str, markers: Markers) -> Row:
    deepest, node, bulge = markers.deepest, markers.node, markers.bulge
    return {
        f"{of}_deepest_m": None if deepest is None else abs(deepest.deflection),
        f"{of}_deepest_km": None if deepest is None else deepest.distance / 1e3,
        f"{of}_node_km": None if node is None else node.distance / 1e3,
        f"{of}_bulge_m": None if bulge is None else abs(bulge.deflection),
        f"{of}_bulge_km": None if bulge is None else bulge.distance / 1e3,
    }


def _times(value: float | None, factor: float) -> float | None:
    return None if value is None else value * factor
