"""From a transect to a sampled profile: rasters, swath, areas and picks brought together."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ..core import swath
from ..core.errors import DownwarpError
from ..core.profile import Picks, Profile
from ..core.transect import Stations, Transect
from .areas import Areas
from .picks import PickReader
from .rasters import RasterReader


@dataclass(frozen=True)
class Sampler:
    """Samples transects; made on the main thread, used off it."""

    dem: RasterReader
    observed: RasterReader | None = None
    picks: PickReader | None = None
    load_area: Areas | None = None
    excluded: Areas | None = None
    step: float | None = None
    """Distance between stations, m; None for the DEM's cell size."""
    width: float = 0.0
    """Full width of the swath, m."""
    strips: int = 1
    """Number of lines in the swath."""
    align: bool = False
    """Whether the strips are shifted so that their lowest points coincide."""

    def sample(self, transect: Transect, progress: Callable[[float], None] | None = None) -> tuple[Stations, Profile]:
        """Stations and values along one transect; raises DownwarpError where it lies outside the DEM."""
        coarse = transect.stations(max(transect.length / 50, 1.0))
        cell = self.dem.cell_size_m(coarse.longitude, coarse.latitude)
        if not np.isfinite(cell).any():
            raise DownwarpError(f"Transect {transect.name} lies outside the DEM.")
        cell_size = float(np.nanmedian(cell))
        stations = transect.stations(self.step or min(cell_size, transect.length))
        longitude, latitude = transect.offset(stations, swath.offsets(self.width, self.strips))
        strips = self.dem.sample(longitude, latitude, progress)
        if not np.isfinite(strips).any():
            raise DownwarpError(f"Transect {transect.name}: the DEM has no data anywhere along the line.")
        below = None if self.observed is None else self.observed.sample(longitude, latitude, progress)
        remarks: tuple[str, ...] = ()
        if self.align and self.strips > 1:
            alignment = swath.align(strips, stations.distance)
            strips = swath.shifted(strips, alignment)
            below = None if below is None else swath.shifted(below, alignment)
            left_out = int((~alignment.used).sum())
            if left_out:
                remarks += (
                    f"{left_out} of {self.strips} swath lines have no lowest point of their own and are left out",
                )
        relief = swath.combine(strips)
        surface = relief if below is None else swath.combine(below)
        if below is not None and not np.isfinite(below).any():
            raise DownwarpError(f"Transect {transect.name}: OBSERVED has no data anywhere along the line.")
        if self.observed is not None:
            cell = self.observed.cell_size_m(coarse.longitude, coarse.latitude)
            cell_size = float(np.nanmedian(cell)) if np.isfinite(cell).any() else cell_size
        return stations, Profile(
            transect.name,
            stations.distance,
            relief.mean,
            None if below is None else surface.mean,
            surface.sigma if self.strips > 1 else None,
            None if self.load_area is None else self.load_area.contain(stations.longitude, stations.latitude),
            None if self.excluded is None else self.excluded.contain(stations.longitude, stations.latitude),
            Picks() if self.picks is None else self.picks.on(transect),
            cell_size,
            remarks,
        )
