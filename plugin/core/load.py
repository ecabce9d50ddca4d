"""The load that relief lays on the plate: what it displaces, where it lies, and what fills the plate beneath it."""

from __future__ import annotations

import numpy as np

from . import check
from .errors import DownwarpError
from .settings import RHO_AIR, Densities

CREST_SHARE = 0.25
"""A rise counts as load of its own where its crest reaches this share of the highest one's (see `load_mask`)."""
FOOT_SHARE = 0.02
"""A rise ends where its height falls to this share of the highest crest's: plains are never quite level."""


def relief_load(relief, reference_level: float, densities: Densities, gravity: float) -> np.ndarray:
    """Pressure, Pa, of relief (m up, any shape) above the reference level; 0 where it does not rise above it.

    Between the reference level z0 and sea level rock displaces water, above sea level air:

        q = g [rho_load (z - z0) - rho_water (min(z, 0) - min(z0, 0)) - rho_air (max(z, 0) - max(z0, 0))],  z > z0
    """
    level = check.number("REFERENCE_LEVEL", reference_level)
    top = np.maximum(np.asarray(relief, dtype=float), level)
    in_water = np.minimum(top, 0.0) - min(level, 0.0)
    in_air = np.maximum(top, 0.0) - max(level, 0.0)
    return gravity * (densities.load * (top - level) - densities.water * in_water - RHO_AIR * in_air)


def load_mask(relief, reference_level: float, crest_share: float = CREST_SHARE) -> np.ndarray:
    """Stations that belong to a load where the same DEM also shows the bent surface, shape (n,), bool.

    A bulge rises above the level too, but is no load. Hence: every run of stations that stand above the level by
    `FOOT_SHARE` of the highest crest, and whose own crest reaches ``crest_share`` of that. NaN is no load.
    """
    height = np.nan_to_num(np.asarray(relief, dtype=float) - reference_level, nan=-1.0)
    above = height > FOOT_SHARE * max(height.max(), 0.0)
    if not above.any():
        return above
    run = np.cumsum(np.diff(above.astype(int), prepend=0) == 1) * above  # 0 outside, 1, 2, ... inside the runs
    crests = np.zeros(run.max() + 1)
    np.maximum.at(crests, run, height)
    crests[0] = 0.0
    return above & (crests[run] >= crest_share * crests.max())


def level_outside_load(relief, inside: np.ndarray | None = None) -> float:
    """Median relief outside the load, m up.

    ``inside`` marks the load (n,); where it is None the load is found with `load_mask`, in turns with the level,
    starting from the lower quartile of the relief.
    """
    relief = np.asarray(relief, dtype=float)
    known = np.isfinite(relief)
    if not known.any():
        raise DownwarpError("The DEM has no value along the line.")
    if inside is not None:
        outside = known & ~inside
        if not outside.any():
            raise DownwarpError("No station lies outside the load: give REFERENCE_LEVEL or a longer line.")
        return float(np.median(relief[outside]))
    level = float(np.quantile(relief[known], 0.25))
    seen = set()
    while level not in seen:
        seen.add(level)
        outside = known & ~load_mask(relief, level)
        level = float(np.median(relief[outside])) if outside.any() else level
    return level


def fill_gaps(distance: np.ndarray, values: np.ndarray, beyond: float) -> np.ndarray:
    """Values with inner gaps (NaN) bridged linearly and ``beyond`` before the first and after the last known one."""
    known = np.isfinite(values)
    return np.interp(distance, distance[known], values[known], left=beyond, right=beyond)
