"""What comes out of bending or fitting one transect, in SI units; None or NaN where there is no answer."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from .markers import Markers
from .problem import Problem


@dataclass(frozen=True)
class Estimate:
    """A value with its interval; a side that the data leave open is None."""

    value: float | None
    low: float | None = None
    high: float | None = None


@dataclass(frozen=True)
class Parameter:
    """One value in use, in the unit stated."""

    name: str
    value: float | None
    unit: str
    origin: str
    """given, setting, measured or fitted."""
    low: float | None = None
    high: float | None = None


@dataclass(frozen=True)
class StationValues:
    """Values at every station, each of shape (n,); NaN where the station carries no plate."""

    load: np.ndarray
    """Pa, positive down."""
    deflection: np.ndarray
    """m, positive down."""
    predicted: np.ndarray
    """Predicted surface, m up."""
    predicted_low: np.ndarray
    """Lower side of its pointwise band, m up."""
    predicted_high: np.ndarray
    """Upper side of its pointwise band, m up."""
    slope: np.ndarray
    """dw/dx, 1."""
    moment: np.ndarray
    """M = -D w'', N, positive where the plate sags."""
    shear: np.ndarray
    """V = dM/dx - P dw/dx, N/m."""
    curvature: np.ndarray
    """w'', 1/m."""
    fibre_stress: np.ndarray
    """Bending stress of the plate's top, Pa, positive in tension: E Te w'' / (2 (1 - nu^2))."""
    thickness: np.ndarray
    """Elastic thickness, m."""
    infill: np.ndarray
    """Density of what lies on the plate, kg/m3."""
    observed: np.ndarray
    """Observed surface, m up."""
    sigma: np.ndarray
    """Standard deviation of what was observed, m."""
    in_fit: np.ndarray
    """Whether the station was fitted, bool."""


@dataclass(frozen=True)
class Bent:
    """A bent plate on a transect."""

    problem: Problem
    kind: int
    """CONTINUOUS or BROKEN."""
    thickness: float
    """Elastic thickness, m."""
    break_position: float | None
    """m from the line's start; None on a continuous plate without a line load."""
    end_shear: float
    """V0, N/m, positive down."""
    end_moment: float
    """M0, N, positive where it turns the broken end down."""
    regional: tuple[float, float, float]
    """Level (m), tilt (m/m) and bow (m/m2) at the line's start."""
    stations: StationValues
    markers: Markers
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True)
class MisfitRow:
    """How well one trial fits."""

    kind: int
    thickness: float
    """m."""
    break_position: float | None
    """m."""
    rms: float
    """m."""
    relative_likelihood: float
    """Posterior density over its largest value, 0 to 1."""


@dataclass(frozen=True)
class ChoiceRow:
    """The answer under one reasonable alternative."""

    choice: str
    option: str
    thickness: Estimate
    """m."""
    rms: float | None
    """m."""


@dataclass(frozen=True)
class ZonesFit:
    """A plate that weakens towards its break."""

    near: Estimate
    """Elastic thickness nearer to the break than the change, m; its value is None where the data resolve no plate."""
    change: Estimate
    """Distance of the change from the break, m."""
    log_odds: float
    """ln odds of two zones against one, 1."""


@dataclass(frozen=True)
class Fit:
    """A fitted plate of one kind."""

    kind: int
    thickness: Estimate
    """Elastic thickness, m (of two zones, that beyond the change); its value is None where the data do not resolve a
    plate."""
    break_position: Estimate
    """m from the line's start."""
    coefficients: dict[str, Estimate]
    """end_shear (N/m), end_moment (N), level (m), tilt (m/m), bow (m/m2), as far as fitted."""
    rms: float
    """Root mean square residual of what was fitted, m."""
    count: int
    """Number of observations fitted."""
    effective: float
    """Number of independent observations that they are worth."""
    noise: tuple[Parameter, ...]
    """What the residuals are like."""
    misfit: tuple[MisfitRow, ...]
    bent: Bent
    """The best-fitting plate."""
    remarks: tuple[str, ...] = ()
    zones: ZonesFit | None = None
    """None where the plate has one thickness."""


@dataclass(frozen=True)
class FitResult:
    """Everything about one fitted transect."""

    best: Fit
    parameters: tuple[Parameter, ...]
    fits: tuple[Fit, ...]
    """One per kind of plate tried, the best first."""
    choices: tuple[ChoiceRow, ...] = ()
    remarks: tuple[str, ...] = field(default=())
