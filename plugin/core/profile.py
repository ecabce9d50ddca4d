"""What was sampled along one transect."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from . import check
from .errors import DownwarpError
from .wording import say

if TYPE_CHECKING:
    from .plan import PlanRelief  # it needs profiles itself


def _none() -> np.ndarray:
    return np.zeros(0)


@dataclass(frozen=True)
class Picks:
    """Observations of the bent surface beside the stations."""

    distance: np.ndarray = field(default_factory=_none)
    """Distance along the transect, m, shape (p,)."""
    elevation: np.ndarray = field(default_factory=_none)
    """Elevation of the bent surface, m up, shape (p,)."""
    sigma: np.ndarray = field(default_factory=_none)
    """Standard deviation, m, shape (p,); NaN where unknown."""


@dataclass(frozen=True)
class Profile:
    """Values at the stations of one transect; NaN where there is none."""

    name: str
    distance: np.ndarray
    """Distance from the line's start, m, increasing, shape (n,)."""
    relief: np.ndarray
    """The DEM, m up, or a thickness of load in m, shape (n,)."""
    observed: np.ndarray | None = None
    """The bent surface, m up, shape (n,); None where the DEM outside the load shows it."""
    sigma: np.ndarray | None = None
    """Standard deviation of what was observed, m, shape (n,)."""
    in_load_area: np.ndarray | None = None
    """Stations inside the given load area, shape (n,) bool; None where no area was given."""
    excluded: np.ndarray | None = None
    """Stations left out of the fit by the user, shape (n,) bool."""
    picks: Picks = field(default_factory=Picks)
    resolution: float = 0.0
    """Distance, m, over which neighbouring values are not independent readings: the raster's cell size."""
    remarks: tuple[str, ...] = ()
    """What befell the sampling, in words."""
    plan: PlanRelief | None = None
    """The relief about the line; None where the load is a strip."""
    thickness: np.ndarray | None = None
    """Elastic thickness stated along the line, m, shape (n,), NaN where there is none; None where none is stated."""
    load_area_share: np.ndarray | None = None
    """Share of each interval between stations inside the given load area, shape (n - 1,); None where it is unknown."""

    def __post_init__(self) -> None:
        object.__setattr__(
            self,
            "distance",
            check.increasing(say("the distance of the stations of {transect}", transect=self.name), self.distance),
        )
        for name in ("relief", "observed", "sigma", "in_load_area", "excluded", "thickness"):
            values = getattr(self, name)
            if values is not None and np.shape(values) != self.distance.shape:
                raise DownwarpError(
                    "{name} has shape {shape}; it takes {wanted}.",
                    name=name,
                    shape=np.shape(values),
                    wanted=self.distance.shape,
                )
