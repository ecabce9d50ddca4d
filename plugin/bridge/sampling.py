"""From a transect to a sampled profile: rasters, swath, areas and picks brought together."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from ..core import swath
from ..core.choices import DENSITY_CHANGE
from ..core.errors import DownwarpError
from ..core.plan import (
    CHECK_CELLS,
    CHECK_REFINEMENT,
    MOST_REFINEMENT,
    SEARCH_CELLS,
    PlanRelief,
    Window,
    lay_search_window,
    refinement,
)
from ..core.profile import Picks, Profile
from ..core.settings import BROKEN, MAPPED, FitOptions
from ..core.strip_check import flexural_reach
from ..core.transect import Stations, Transect
from ..core.wording import say
from .areas import Areas
from .picks import PickReader
from .rasters import RasterReader

LEAST_THICKNESS, MOST_THICKNESS = 0.1e3, 1000e3
"""Elastic thickness, m, that a plate may have."""
TURN_TOLD = 15.0
"""Turn of a line, degrees, above which it is told what that does to the strip."""


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
    thickness: RasterReader | None = None
    """Elastic thickness, m, that the plate is to have along the line."""

    def sample(
        self,
        transect: Transect,
        progress: Callable[[float], None] | None = None,
        options: FitOptions | None = None,
    ) -> tuple[Stations, Profile]:
        """Stations and values along one transect; raises DownwarpError where it lies outside the DEM.

        ``options``: what the profile is for, where that may take the relief about the line.
        """
        coarse = transect.stations(max(transect.length / 50, 1.0))
        cell = self.dem.cell_size_m(coarse.longitude, coarse.latitude)
        if not np.isfinite(cell).any():
            raise DownwarpError("Transect {transect} lies outside the DEM.", transect=transect.name)
        cell_size = float(np.nanmedian(cell))
        stations = transect.stations(self.step or min(cell_size, transect.length))
        longitude, latitude = transect.offset(stations, swath.offsets(self.width, self.strips))
        strips = self.dem.sample(longitude, latitude, progress)
        if not np.isfinite(strips).any():
            raise DownwarpError(
                "Transect {transect}: the DEM has no data anywhere along the line.", transect=transect.name
            )
        below = None if self.observed is None else self.observed.sample(longitude, latitude, progress)
        mapped = options is not None and options.load_shape == MAPPED
        remarks = () if mapped else turn_remarks(transect)
        if self.align and self.strips > 1:
            alignment = swath.align(strips, stations.distance)
            strips = swath.shifted(strips, alignment)
            below = None if below is None else swath.shifted(below, alignment)
            left_out = int((~alignment.used).sum())
            if left_out:
                remarks += (
                    say(
                        "{left_out} of {strips} swath lines have no lowest point of their own and are left out",
                        left_out=left_out,
                        strips=self.strips,
                    ),
                )
        relief = swath.combine(strips)
        surface = relief if below is None else swath.combine(below)
        if below is not None and not np.isfinite(below).any():
            raise DownwarpError(
                "Transect {transect}: OBSERVED has no data anywhere along the line.", transect=transect.name
            )
        picks = Picks() if self.picks is None else self.picks.on(transect)
        plan = None
        if options is not None and (mapped or (options.check_strip and options.chosen("plate")[0] != BROKEN)):
            bare = below is None and picks.distance.size == 0
            plan, told = self._plan(transect, stations, cell_size, options, bare, progress)
            remarks += told
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
            picks,
            cell_size,
            remarks,
            plan,
            None if self.thickness is None else self._thickness(transect, stations),
            None if self.load_area is None else self.load_area.share(stations.longitude, stations.latitude),
        )

    def relief_in(
        self,
        window: Window,
        cell_size: float,
        progress: Callable[[float], None] | None = None,
        most: int = MOST_REFINEMENT,
    ) -> PlanRelief:
        """Relief in a window; ``cell_size``: that of the DEM, m; ``most``: places along each side of its cells."""
        parts = refinement(window, cell_size, most)
        longitude, latitude = window.places(parts)
        relief = self.dem.sample(longitude, latitude, progress)
        inside = None if self.load_area is None else self.load_area.contain(longitude, latitude)
        return PlanRelief(window, parts, relief, inside)

    def _plan(
        self,
        transect: Transect,
        stations: Stations,
        cell_size: float,
        options: FitOptions,
        bare: bool,
        progress: Callable[[float], None] | None,
    ) -> tuple[PlanRelief | None, tuple[str, ...]]:
        """Relief about the line for all plates that the options may try, and remarks; without it only where it is to
        check the strip alone."""
        rho, _ = options.densities(bare)
        widest = options
        if not bare and rho.infill + DENSITY_CHANGE < rho.mantle:
            # Denser infill, which is among the choices that a fit tries, makes plates bend more widely.
            widest = replace(options, rho_infill=rho.infill + DENSITY_CHANGE)
        mapped = options.load_shape == MAPPED
        cells, places = (SEARCH_CELLS, MOST_REFINEMENT) if mapped else (CHECK_CELLS, CHECK_REFINEMENT)
        alpha_from = flexural_reach(options, options.te_from, bare)
        alpha_to = flexural_reach(widest, options.te_to, bare)
        try:
            window, remarks = lay_search_window(
                stations.distance,
                stations.longitude,
                stations.latitude,
                transect.ellipsoid,
                alpha_from,
                alpha_to,
                cells,
            )
        except DownwarpError as error:
            if mapped:
                raise DownwarpError("Transect {transect}: {why}", transect=transect.name, why=error.message) from None
            return None, (say("the strip was not checked: {why}", why=error.message),)
        plan = self.relief_in(window, cell_size, progress, places)
        return plan, remarks if mapped else ()

    def _thickness(self, transect: Transect, stations: Stations) -> np.ndarray:
        """Elastic thickness at the stations, m; NaN where the raster has none."""
        if self.thickness is None:
            return np.full(stations.distance.shape, np.nan)
        values = self.thickness.sample(stations.longitude, stations.latitude)
        wrong = values[(values < LEAST_THICKNESS) | (values > MOST_THICKNESS)]
        if wrong.size:
            raise DownwarpError(
                "Transect {transect}: TE_RASTER holds {thickness:g} km; it takes numbers from {least:g} to {most:g}.",
                transect=transect.name,
                thickness=wrong[0] / 1e3,
                least=LEAST_THICKNESS / 1e3,
                most=MOST_THICKNESS / 1e3,
            )
        return values


def turn_remarks(transect: Transect) -> tuple[str, ...]:
    """What a bent line does to a strip; nothing where the line is straight enough."""
    if transect.greatest_turn <= TURN_TOLD:
        return ()
    return (
        say(
            "the line turns by {turn:.0f} degrees: a strip takes the load to run on at right angles to each part of the "
            "line, so that it is counted twice inside the bend and missing outside it; draw the line straight, or check "
            "the strip",
            turn=transect.greatest_turn,
        ),
    )
