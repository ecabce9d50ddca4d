"""Lines, relief and plates of a strip check: what is read from keys, features and rasters before core takes over."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from ..core.plan import PlanRelief, lay_window
from ..core.profile import Profile
from ..core.settings import CONTINUOUS, FORCES_NONE, FitOptions
from ..core.strip_check import StripCheck, check_strip, flexural_reach
from ..core.transect import Stations, Transect
from .keys import Values
from .options import KM, elastic
from .sampling import Sampler


@dataclass(frozen=True)
class StatedPlate:
    """A profile with the plate stated for it and the relief about it."""

    profile: Profile
    thickness: float
    """Elastic thickness, m."""
    plan: PlanRelief

    def check(self, options: FitOptions) -> StripCheck:
        """The strip beside the load as mapped."""
        return check_strip(self.profile, self.plan, options, self.thickness)


def strip_check_options(values: Values) -> FitOptions:
    """What a strip check was asked for."""
    return FitOptions(
        setting=values.enum("SETTING"),
        plate=CONTINUOUS,
        load=values.enum("LOAD"),
        reference_level=values.number("REFERENCE_LEVEL"),
        load_from=values.scaled("LOAD_FROM", KM),
        load_to=values.scaled("LOAD_TO", KM),
        end_forces=FORCES_NONE,
        rho_load=values.number("RHO_LOAD"),
        rho_infill=values.number("RHO_INFILL"),
        rho_mantle=values.number("RHO_MANTLE"),
        rho_water=values.number("RHO_WATER"),
        elastic=elastic(values),
    )


def plan_relief(
    sampler: Sampler,
    transect: Transect,
    stations: Stations,
    cell_size: float,
    alpha: float,
    progress: Callable[[float], None] | None = None,
) -> PlanRelief:
    """Relief about a transect for plates of flexural parameter ``alpha``, m; ``cell_size``: that of the DEM, m."""
    window = lay_window(stations.distance, stations.longitude, stations.latitude, transect.ellipsoid, alpha)
    return sampler.relief_in(window, cell_size, progress)


def stated_plate(
    sampler: Sampler, transect: Transect, thickness: float, options: FitOptions, progress: Callable[[float], None]
) -> tuple[Stations, StatedPlate]:
    """Sample a transect and the relief about it."""
    stations, profile = sampler.sample(transect, lambda fraction: progress(0.5 * fraction))
    plan = plan_relief(
        sampler,
        transect,
        stations,
        profile.resolution,
        flexural_reach(options, thickness),
        lambda fraction: progress(0.5 + 0.5 * fraction),
    )
    return stations, StatedPlate(profile, thickness, plan)
