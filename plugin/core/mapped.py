"""The forward model of a transect whose load is bent in plan view, as mapped: `forward.TransectModel`'s interface.

    predicted surface (m up) = level + tilt s + bow s^2 - w(s),     D del^4 w + k w = q(u, v)

on a uniform continuous plate without in-plane force and end forces; s runs along the transect. The load's spectrum is
made once, a trial thickness costs one product with it and the rows about the line. Moment, shear and stress are those
that act across the transect's normal:

    M = -D (w_ss + nu w_tt) = -D ((1 - nu) w_ss + nu del^2 w),     V = -D d(del^2 w)/ds
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from functools import cached_property

import numpy as np
from scipy.interpolate import CubicSpline

from .errors import DownwarpError
from .forward import TransectModel
from .plan import PlanRelief, mapped_load
from .problem import Problem
from .settings import CONTINUOUS
from .sheet import SheetLine


@dataclass(frozen=True)
class LineNodes:
    """The stations as the nodes of what is known between them by splines."""

    nodes: np.ndarray
    """m, shape (n,)."""

    @cached_property
    def lengths(self) -> np.ndarray:
        """Distances between them, m."""
        return np.diff(self.nodes)


@dataclass(frozen=True)
class MappedBending:
    """A sheet's deflection on the line, with the interface of `plate.Bending` as far as a transect needs it."""

    plate: LineNodes
    deflection: np.ndarray
    """w at the nodes, m, positive down, shape (n,)."""
    laplacian: np.ndarray
    """del^2 w at the nodes, 1/m, shape (n,)."""
    rigidity: float
    """D, N m."""
    poisson: float
    """nu, 1."""

    @cached_property
    def _spline(self) -> CubicSpline:
        return CubicSpline(self.plate.nodes, self.deflection)

    @cached_property
    def _curved(self) -> CubicSpline:
        return CubicSpline(self.plate.nodes, self.laplacian)

    def at(self, positions, derivative: int = 0) -> np.ndarray:
        """w or a derivative of it along the line at positions, m, shape (positions, 1)."""
        return self._spline(np.asarray(positions, dtype=float), derivative)[:, None]

    def moment_and_shear_at(self, positions) -> tuple[np.ndarray, np.ndarray]:
        """M, N, and V, N/m, at positions, m, each (positions, 1)."""
        positions = np.asarray(positions, dtype=float)
        curvature = (1.0 - self.poisson) * self._spline(positions, 2) + self.poisson * self._curved(positions)
        return -self.rigidity * curvature[:, None], -self.rigidity * self._curved(positions, 1)[:, None]


@dataclass(frozen=True)
class MappedModel(TransectModel):
    """The load as mapped on a uniform continuous plate; it stands wherever a `TransectModel` of that kind does."""

    line: SheetLine | None = None
    """The load, in plan view, with the places of the stations."""

    def __post_init__(self) -> None:
        if self.line is None or self.line.row.size != self.distance.size:
            raise DownwarpError("The load as mapped must have a place for each station.")
        if self.kind != CONTINUOUS or self.end_forces or self.in_plane or self.fill is not None:
            raise DownwarpError(
                "LOAD_SHAPE is 1 (as mapped), which takes a continuous plate (PLATE 0) without end forces, IN_PLANE "
                "and FILL_SINKING_ONLY."
            )
        if np.ptp(self.stiffness) != 0:
            raise DownwarpError(
                "LOAD_SHAPE is 1 (as mapped), which takes one infill density: leave RHO_UNDER_LOAD out."
            )

    @property
    def _sheet(self) -> SheetLine:
        if self.line is None:
            raise DownwarpError("The load as mapped must have a place for each station.")
        return self.line

    def columns(
        self, thicknesses: np.ndarray, break_position: float, positions: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray]:
        """Offsets (T, positions) and the regional's columns (T, positions, p), as `TransectModel.columns`."""
        offsets, columns = self._blank(len(thicknesses), positions)
        for trial, thickness in enumerate(thicknesses):
            deflection = self._sheet.deflection(float(self.elastic.rigidity(thickness)), float(self.stiffness[0]))
            offsets[trial] = -CubicSpline(self.distance, deflection)(np.asarray(positions, dtype=float))
        return offsets, columns

    def bend(self, thickness: float, break_position: float, forces: np.ndarray) -> MappedBending:  # type: ignore[override]
        """The deflection on the line of a plate of one thickness, m."""
        rigidity, stiffness = float(self.elastic.rigidity(thickness)), float(self.stiffness[0])
        sheet = self._sheet
        return MappedBending(
            LineNodes(self.distance),
            sheet.deflection(rigidity, stiffness),
            sheet.laplacian(rigidity, stiffness),
            rigidity,
            self.elastic.poisson,
        )


def mapped_model(problem: Problem, plan: PlanRelief) -> tuple[MappedModel, tuple[str, ...]]:
    """The forward model of a prepared problem with its load as mapped, and remarks.

    Raises DownwarpError where no load lies on the line, or the problem asks for what a plan view does not have.
    """
    line, remarks = mapped_load(problem, plan)
    model = problem.model(CONTINUOUS)
    return MappedModel(**{each.name: getattr(model, each.name) for each in fields(TransectModel)}, line=line), remarks
