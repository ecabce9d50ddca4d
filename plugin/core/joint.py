"""Elastic thickness and load density from the bent surface and gravity together.

A trial fixes the elastic thickness Te and the density of the load rho. Surface y (m up) and gravity anomaly g (m/s2)
are

    y = -w(Te, rho) + B b + X a + noise,        g = A(Te, rho, b) + Z c + noise

with b what both share, X a and Z c the regionals (level, tilt, bow), and A the anomaly of the bent bodies, linear in b
about the surface's own b. Shared are end forces (none on many plates) and, where the load stands on the undeflected
surface, that surface's level z0: raised by b the load is thinner by b, so that its column is 1 + (rho - rho_fluid) g W
with W the deflection by 1 Pa on the load's ground. The noise of each is N(0, s^2 R), R of
the families in `noise`; levels and size s are integrated out as in `posterior` (restricted likelihood), families
averaged:

    p(y | Te, rho)        from the surface alone, b under a normal prior as large as the relief,
    p(g | Te, rho)        from gravity alone, likewise,
    p(y, g | Te, rho) = p(y | Te, rho) p(g | y, Te, rho),

where in the last factor b has the mean and the covariance that the surface leaves it, averaged over the noise. Noise of
surface and gravity is taken as independent: rough relief that is neither load nor bending shows in both, and then the
joint interval is too narrow. Priors are flat in ln Te and in rho over their search ranges.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
from scipy.special import gammaln, logsumexp

from . import check
from .crust import HELD, LOAD, Crust, Section, attraction, bodies
from .elastic import Elastic, restoring_stiffness
from .errors import DownwarpError
from .forward import TransectModel
from .gravity import sheet_matrix
from .load import relief_load
from .noise import NoiseFamily, Setting, merge_matrix
from .result import Estimate
from .settings import CONTINUOUS, RHO_AIR, Densities
from .wording import say

THICKNESSES, DENSITIES = 41, 41
"""Trials of each grid."""
SURFACE: str = say("surface")
GRAVITY: str = say("gravity")
JOINT: str = say("surface and gravity")
"""Sources of evidence."""
MOST_READINGS = 100
"""Readings beyond this number are averaged for inference, always as many into one as into the next. Finer ones show how
smooth the noise is at scales that no plate bends over, and the likelihood would turn on that: noise smoother than the
families of `noise` then leaves a wider scatter than the interval says (DEVELOPERS.md, inference)."""
MOST_NODES = 400
"""Corners beyond this number are left out of the bodies while trials are made."""
FAINT = 10.0
"""ln of the density below its largest value at which a grid ends."""
FINER = 0.6
"""Share of a grid below which a density's support is tried again on a finer one."""
ROUNDS = 6
"""Grids after the first at most."""
ONE_LEVEL = 0.1
"""Share of the load's height up to which its reference level and the undeflected surface may differ and still be
one."""
OPEN = 0.1
"""Density at an end of the search range, over the largest, above which that side counts as open."""


@dataclass(frozen=True)
class Readings:
    """Observations along the line."""

    distance: np.ndarray
    """m, shape (n,)."""
    value: np.ndarray
    """m up, or m/s2, shape (n,)."""
    sigma: np.ndarray | None = None
    """Standard deviations in the same unit, shape (n,); only their ratios count."""
    resolution: float = 0.0
    """Distance, m, within which readings repeat each other."""


@dataclass(frozen=True)
class JointOptions:
    """What the joint fit searches and holds fast; SI units."""

    kind: int = CONTINUOUS
    shear: bool = False
    """Whether an end shear acts where the plate begins."""
    moment: bool = False
    """Whether an end moment acts there."""
    regional: int = 1
    """Coefficients of the surface's regional: 0 to 3."""
    gravity_regional: int = 1
    """Coefficients of gravity's regional: 0 none, 1 level, 2 and tilt."""
    te_from: float = 1e3
    te_to: float = 100e3
    rho_from: float = 2200.0
    rho_to: float = 3200.0
    level_free: bool = True
    """Whether the load's reference level goes with the surface's own level, where the load stands on that surface."""
    elastic: Elastic = field(default_factory=Elastic)
    in_plane: float = 0.0
    before: int = HELD
    confidence: float = 0.9

    def __post_init__(self) -> None:
        check.number("TE_FROM", self.te_from / 1e3, at_least=0.1, at_most=1000)
        check.number("TE_TO", self.te_to / 1e3, above=self.te_from / 1e3, at_most=1000)
        check.number("RHO_LOAD_FROM", self.rho_from, above=0, at_most=20000)
        check.number("RHO_LOAD_TO", self.rho_to, above=self.rho_from, at_most=20000)
        check.number("CONFIDENCE", self.confidence * 100, above=0, below=100)


@dataclass(frozen=True)
class Answer:
    """What one source of evidence says."""

    source: str
    """surface, gravity, or both."""
    thickness: Estimate
    """m."""
    density: Estimate
    """Density of the load, kg/m3; its value is None where there is no load to weigh."""
    te_grid: np.ndarray
    """m, (T,)."""
    rho_grid: np.ndarray
    """kg/m3, (K,)."""
    log_density: np.ndarray
    """ln posterior density in (ln Te, rho) less its largest value, (T, K)."""
    surface_rms: float | None
    """Root mean square residual of the surface at the mode, m; None where it took no part."""
    gravity_rms: float | None
    """Of gravity, m/s2."""

    @property
    def te_density(self) -> np.ndarray:
        """Density in ln Te over its largest value, (T,)."""
        return _over_peak(np.exp(self.log_density).sum(axis=1))

    @property
    def rho_density(self) -> np.ndarray:
        """Density in rho over its largest value, (K,)."""
        return _over_peak(np.exp(self.log_density).sum(axis=0))


@dataclass(frozen=True)
class JointFit:
    """Answers of the surface alone, of gravity alone and of both."""

    surface: Answer
    gravity: Answer
    joint: Answer
    stations: np.ndarray
    """Where gravity was read, m, after averaging (m,)."""
    observed: np.ndarray
    """Gravity there, m/s2, (m,)."""
    predicted: np.ndarray
    """Gravity at the joint mode with its regional, m/s2, (m,)."""


def _over_peak(values: np.ndarray) -> np.ndarray:
    return values / values.max()


@dataclass(frozen=True)
class _Data:
    """Readings as inference sees them."""

    at: np.ndarray
    """Mean distance of the readings in each cell that inference sees, m, (n,)."""
    pairs: np.ndarray
    """Two places for each cell, with the mean and the spread of its readings, m: first all of the one, then all of the
    other, (2 n,). A model's mean over them is its mean over the readings but for third derivatives."""
    value: np.ndarray
    """Mean reading of each cell, (n,)."""
    noise: NoiseFamily
    regional: np.ndarray
    variance: float
    """Of the values about their regional."""

    def average(self, model: np.ndarray) -> np.ndarray:
        """Values of a model at `pairs` (2 n, ...) as the cells see them, (n, ...)."""
        return 0.5 * (model[: self.at.size] + model[self.at.size :])


def _data(readings: Readings, regional: int, what: str) -> _Data:
    distance = check.finite_array(say("the distance of the {what}", what=what), readings.distance, ndim=1)
    value = check.finite_array(what, readings.value, ndim=1)
    if distance.size < regional + 5:
        raise DownwarpError(
            "There are {count} values of the {what} to fit; it takes at least {least}.",
            count=distance.size,
            what=what,
            least=regional + 5,
        )
    order = np.argsort(distance, kind="stable")
    distance, value = distance[order], value[order]
    sigma = None if readings.sigma is None else np.asarray(readings.sigma, dtype=float)[order]
    step = max(float(np.median(np.diff(distance))), 1.0)
    width = step * np.ceil(max(readings.resolution, float(np.ptp(distance)) / MOST_READINGS) / step - 1e-6)
    merge = merge_matrix(distance, width, sigma)
    at = merge @ distance
    own = None if sigma is None else 1.0 / np.sqrt((merge > 0) @ sigma**-2.0 / (merge > 0).sum(axis=1))
    if at.size < regional + 5:
        raise DownwarpError(
            "The {what} has {count} independent values; a fit takes at least {least}.",
            what=what,
            count=at.size,
            least=regional + 5,
        )
    scaled = (at - at.mean()) / max(float(np.ptp(at)), 1.0)
    value, columns = merge @ value, scaled[:, None] ** np.arange(regional)
    about = scaled[:, None] ** np.arange(max(regional, 1))
    left = value - about @ np.linalg.lstsq(about, value, rcond=None)[0]
    noise = NoiseFamily(at, own)
    spread = np.sqrt(np.maximum(merge @ (distance - distance[0]) ** 2 - (at - distance[0]) ** 2, 0.0))
    pairs = np.concatenate([at - spread, at + spread])
    return _Data(at, pairs, value, noise, columns, max(float(left @ left) / at.size, 1e-300))


class _Problem:
    """Forward model of both kinds of readings."""

    def __init__(self, section: Section, crust: Crust, options: JointOptions, surface: _Data, gravity: _Data) -> None:
        self.options, self.crust, self.surface, self.gravity = options, crust, surface, gravity
        self.section = section
        constants = options.elastic.gravity
        stiffness = restoring_stiffness(crust.mantle, section.infill[:-1], constants)
        self.model = TransectModel(
            section.distance, np.zeros(section.distance.shape), stiffness, options.elastic, options.in_plane,
            options.kind, options.shear, options.moment, regional=0,
        )  # fmt: skip
        on_load = section.undeflected[section.under_load]
        self.level_free = bool(
            options.level_free and options.regional and on_load.size
            and np.abs(on_load - section.level).max() <= ONE_LEVEL * np.ptp(section.load_top)
        )  # fmt: skip
        if self.level_free:
            self.surface = replace(surface, regional=surface.regional[:, 1:])
        self.fluid = crust.water if section.level < 0 else RHO_AIR
        self.shared = len(self.model.end_forces) + self.level_free

        def load(rho: float, water: float) -> np.ndarray:
            fluid = Densities(rho, 0.0, 0.0, crust.mantle, water)
            pressure = relief_load(section.relief, section.level, fluid, constants)
            return np.where(section.under_load, pressure, 0.0)

        # Of rho 1, of the water displaced, and of 1 m more of 1 kg/m3.
        ground = np.where(section.under_load, constants, 0.0)
        self.load = np.column_stack([load(1.0, 0.0), load(0.0, crust.water), ground])
        count = section.distance.size
        picked = np.unique(np.linspace(0, count - 1, min(count, MOST_NODES)).round().astype(int))
        self.coarse = Section(
            section.distance[picked], section.relief[picked], section.undeflected[picked],
            section.deflection[picked], section.infill[picked], section.under_load[picked], section.level,
        )  # fmt: skip

        self.heights = section.ground(gravity.pairs)
        # The load's attraction is linear in its density, and the same in all trials.
        at_two = [
            gravity.average(
                sum(
                    (
                        attraction(body, gravity.pairs, self.heights, options.before)
                        for body in bodies(self.coarse, replace(crust, load=rho))
                        if body.name == LOAD
                    ),
                    np.zeros(gravity.pairs.shape),
                )
            )
            for rho in (1000.0, 2000.0)
        ]
        level = np.full(self.coarse.distance.shape, section.level)
        self.ground = gravity.average(self._sheet(level) @ self.coarse.under_load.astype(float))
        self.unit_load = (at_two[1] - at_two[0]) / 1000.0, 2.0 * at_two[0] - at_two[1]

    def deflections(self, thickness: float) -> tuple[np.ndarray, np.ndarray]:
        """Deflection, m, by the load's columns and by unit end forces, at the surface's readings and at the bodies'
        corners, each (n, 3 + p)."""
        start = float(self.section.distance[0])
        plate = self.model.plate(thickness, start)
        vector = np.hstack([
            plate.load_vector(self.load, at=self.section.distance), self.model.force_vectors(plate, start),
        ])  # fmt: skip
        bending = plate.solve(vector)
        return self.surface.average(bending.at(self.surface.pairs)), bending.at(self.coarse.distance)

    def by_shared(self, deflections: np.ndarray, rho: float) -> np.ndarray:
        """Deflection, m, by each shared parameter, (n, p): the level, where it is one, then end forces."""
        level = -(rho - self.fluid) * deflections[:, 2:3]
        return np.hstack([level[:, : int(self.level_free)], deflections[:, 3:]])

    def surface_columns(self, deflections: np.ndarray, rho: float) -> np.ndarray:
        """Change of the surface, m up, by each shared parameter, (n, p)."""
        columns = -self.by_shared(deflections, rho)
        columns[:, : int(self.level_free)] += 1.0
        return columns

    def gravity_of(self, deflections: np.ndarray, rho: float, shared: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Anomaly at the gravity readings, m/s2, (m,), under ``shared`` parameters (p,); and its change by each, (m,
        p)."""
        section, crust = self.coarse, self.crust
        by_shared = self.by_shared(deflections, rho)
        deflection = deflections[:, 0] * rho + deflections[:, 1] + by_shared @ shared
        at_pairs = np.zeros(self.gravity.pairs.shape)
        for body in bodies(section.bent(deflection), crust):
            if body.name != LOAD:
                at_pairs += attraction(body, self.gravity.pairs, self.heights, self.options.before)
        found = self.gravity.average(at_pairs)
        slope = np.zeros((found.size, self.shared))
        if self.shared:
            sunk = section.undeflected - deflection
            top = self._sheet(sunk) * (section.infill - crust.crust)
            base = self._sheet(sunk - crust.thickness) * (crust.crust - crust.mantle)
            slope = self.gravity.average((top + base) @ by_shared)
        if self.level_free:
            slope[:, 0] -= (rho - self.fluid) * self.ground
            found = found - (rho - self.fluid) * self.ground * shared[0]
        if self.section.under_load.any():
            found = found + rho * self.unit_load[0] + self.unit_load[1]
        return found, slope

    def _sheet(self, height) -> np.ndarray:
        """Attraction at the pairs of gravity's cells of sheets of 1 kg/m2 about the bodies' corners, (2 n, corners)."""
        return sheet_matrix(self.gravity.pairs, self.heights, self.coarse.distance, height)


def _gram(data: _Data, setting: Setting, whiten, columns: np.ndarray) -> tuple[np.ndarray, float]:
    """Gram matrix of columns (n, r) with the regional taken out in the metric of R^-1, and ln |X0' R^-1 X0|."""
    white = whiten(np.concatenate([columns, data.regional], axis=1))
    part, regional = white[:, : columns.shape[1]], white[:, columns.shape[1] :]
    if not regional.shape[1]:
        return part.T @ part, 0.0
    q, triangle = np.linalg.qr(regional)
    left = part - q @ (q.T @ part)
    return left.T @ left, 2.0 * float(np.log(np.abs(np.diag(triangle))).sum())


@dataclass(frozen=True)
class _Held:
    """What the surface leaves of the shared parameters, per trial."""

    mean: np.ndarray
    """(M, p)."""
    precision: np.ndarray
    """(M, p, p)."""


def _basis(stacked: np.ndarray) -> np.ndarray:
    """Orthonormal columns that hold all columns of ``stacked`` (n, many) to 1e-7 of the largest, (n, r)."""
    values, vectors = np.linalg.eigh(stacked @ stacked.T)
    return vectors[:, values > 1e-14 * values[-1]]


def _likelihood(data: _Data, z: np.ndarray, columns: np.ndarray, held: _Held | None = None) -> tuple[np.ndarray, _Held]:
    """ln likelihood of trials, (M,), and what is left of the columns' coefficients, averaged over the noise: ``z`` = value
    less offset (M, n), ``columns`` (M, n, p); see the module.

    With ``held`` the coefficients have that mean and precision beforehand, their size relative to the noise taken from
    the best trial without.
    """
    trials, count, p = columns.shape
    scale = np.sqrt((columns**2).mean(axis=(0, 1)))
    scale = np.where(scale > 0, scale, 1.0)
    flat = np.concatenate([z[:, :, None], columns / scale], axis=2)
    size = np.abs(flat).max(axis=(0, 1))
    basis = _basis((flat / np.where(size > 0, size, 1.0)).transpose(1, 0, 2).reshape(count, -1))
    held_by_basis = np.einsum("nr,mnp->mrp", basis, flat, optimize=True)
    plain = basis
    if data.regional.shape[1]:
        q, _ = np.linalg.qr(data.regional)
        plain = basis - q @ (q.T @ basis)
    prior = np.zeros(trials)
    if p:
        own = _products(held_by_basis, plain.T @ plain)[:, 1:, 1:]
        prior = 0.5 * np.linalg.slogdet(own)[1] - 0.5 * p * np.log(2.0 * np.pi * count * data.variance)
    total, coefficients, spreads = [], [], []
    for factor in data.noise.factors():
        gram, level = _gram(data, factor.setting, factor.whiten, basis)
        product = _products(held_by_basis, gram)
        base = -0.5 * factor.log_determinant - 0.5 * level + factor.setting.log_prior
        freedom = count - data.regional.shape[1]
        square, inner, right = product[:, 0, 0], product[:, 1:, 1:], product[:, 1:, 0]
        if p:
            solved = np.linalg.solve(inner, right[:, :, None])[:, :, 0]
            residual = np.maximum(square - (right * solved).sum(axis=1), 1e-300)
            size_squared = residual.min() / max(freedom - p, 1)
            if held is None:
                square = residual
                coefficients.append(solved)
                size_of_each = residual / max(freedom - p - 2, 1)
                spreads.append(size_of_each[:, None, None] * np.linalg.inv(inner))
                base = base + prior - 0.5 * np.linalg.slogdet(inner)[1]
                freedom -= p
            else:
                mean = held.mean * scale
                weight = size_squared * held.precision / (scale[:, None] * scale)
                shifted = right - np.einsum("mpq,mq->mp", inner, mean)
                square = square - 2.0 * (mean * right).sum(axis=1) + np.einsum("mp,mpq,mq->m", mean, inner, mean)
                square = square - (shifted * np.linalg.solve(inner + weight, shifted[:, :, None])[:, :, 0]).sum(axis=1)
                base = base + 0.5 * (np.linalg.slogdet(weight)[1] - np.linalg.slogdet(inner + weight)[1])
        square = np.maximum(square, 1e-300)
        one = base + gammaln(0.5 * freedom) - 0.5 * freedom * np.log(np.pi * square)
        total.append(one)
    found = logsumexp(total, axis=0)
    if not coefficients:
        return found, _Held(np.zeros((trials, p)), np.zeros((trials, p, p)))
    weight = np.exp(np.array(total) - found)
    return found, _left(weight, np.array(coefficients) / scale, np.array(spreads) / np.outer(scale, scale))


def _left(weight: np.ndarray, mean: np.ndarray, spread: np.ndarray) -> _Held:
    """Mean and precision of coefficients of which each noise setting S says mean (S, M, p) and covariance (S, M, p, p),
    under the weights (S, M) of the settings: covariance within them and between them."""
    middle = np.einsum("sm,smp->mp", weight, mean)
    apart = mean - middle
    covariance = np.einsum("sm,smpq->mpq", weight, spread + apart[..., :, None] * apart[..., None, :])
    return _Held(middle, np.linalg.inv(covariance))


def _products(columns: np.ndarray, gram: np.ndarray) -> np.ndarray:
    """Products of each trial's columns (M, r, p) in the metric of ``gram``, (M, p, p)."""
    return columns.transpose(0, 2, 1) @ (gram @ columns)


class _Trials:
    """Likelihoods of one grid of trials."""

    def __init__(
        self,
        problem: _Problem,
        log_te: np.ndarray,
        rho: np.ndarray,
        wanted: tuple[str, ...] = (SURFACE, GRAVITY, JOINT),
    ) -> None:
        self.log_te, self.rho = log_te, rho
        surface, gravity, p = problem.surface, problem.gravity, problem.shared
        count, many = log_te.size, rho.size
        z = np.empty((count, many, surface.at.size))
        columns = np.empty((count, many, surface.at.size, p))
        corners = []
        base = problem.section.level if problem.level_free else 0.0
        for i, each in enumerate(log_te):
            at_readings, at_corners = problem.deflections(float(np.exp(each)))
            z[i] = surface.value - base + (np.outer(rho, at_readings[:, 0]) + at_readings[:, 1])
            for k, density in enumerate(rho):
                columns[i, k] = problem.surface_columns(at_readings, float(density))
            corners.append(at_corners)
        flat = count * many
        self.surface_z, self.surface_columns = z.reshape(flat, -1), columns.reshape(flat, surface.at.size, p)
        of_surface, held = _likelihood(surface, self.surface_z, self.surface_columns)
        shape = (count, many)
        self.log = {SURFACE: of_surface.reshape(shape)}
        if wanted == (SURFACE,):
            return
        mean = held.mean.reshape(count, many, p)
        # Gravity bends so little in rho that three values of it tell the rest.
        some = np.unique([0, many // 2, many - 1])
        found = np.empty((count, some.size, gravity.at.size))
        slopes = np.empty((count, some.size, gravity.at.size, p))
        for i, each in enumerate(corners):
            for j, k in enumerate(some):
                found[i, j], slopes[i, j] = problem.gravity_of(each, float(rho[k]), mean[i, k])
        weights = _lagrange(rho, rho[some])
        # What was found holds for the surface's own b: its share is taken out, so that columns may carry it.
        found -= np.einsum("ijnp,ijp->ijn", slopes, mean[:, some])
        offset = np.einsum("kj,ijn->ikn", weights, found)
        slope = np.einsum("kj,ijnp->iknp", weights, slopes)
        self.gravity_z = (gravity.value - offset).reshape(flat, -1)
        self.gravity_columns = slope.reshape(flat, gravity.at.size, p)
        if GRAVITY in wanted:
            self.log[GRAVITY] = _likelihood(gravity, self.gravity_z, self.gravity_columns)[0].reshape(shape)
        if JOINT in wanted:
            given_surface = _likelihood(gravity, self.gravity_z, self.gravity_columns, held if p else None)[0]
            self.log[JOINT] = (of_surface + given_surface).reshape(shape)

    def finer(self, source: str, te_limits: np.ndarray, rho_limits: np.ndarray) -> tuple[np.ndarray, np.ndarray] | None:
        """Grids of ln Te and rho, as large as these, where a source's density is not faint; None where these will do."""
        log = self.log[source] - self.log[source].max()
        grids, wanted = [], False
        for values, profile, limits in (
            (self.log_te, log.max(axis=1), te_limits), (self.rho, log.max(axis=0), rho_limits),
        ):  # fmt: skip
            low, high = _support(values, profile, limits)
            wanted |= high - low < FINER * np.ptp(values) or low < values[0] or high > values[-1]
            grids.append(np.linspace(low, high, values.size))
        return (grids[0], grids[1]) if wanted else None


def _support(values: np.ndarray, profile: np.ndarray, limits: np.ndarray) -> tuple[float, float]:
    """Range within limits outside which ln density over its peak, ``profile``, is faint.

    Where it is not faint at an end of the grid, the range goes on beyond by half the grid: a coarser grid may have met a
    narrow density beside its peak.
    """
    if values.size == 1:
        return float(values[0]), float(values[0])
    near = np.flatnonzero(profile > -FAINT)
    step, beyond = values[1] - values[0], 0.5 * np.ptp(values)
    low = values[near[0]] - (beyond if near[0] == 0 else step)
    high = values[near[-1]] + (beyond if near[-1] == values.size - 1 else step)
    return float(max(low, limits[0])), float(min(high, limits[1]))


def _lagrange(x: np.ndarray, nodes: np.ndarray) -> np.ndarray:
    """Weights (x, nodes) of the polynomial through the nodes."""
    weights = np.ones((x.size, nodes.size))
    for j, node in enumerate(nodes):
        for other in np.delete(nodes, j):
            weights[:, j] *= (x - other) / (node - other)
    return weights


def joint_fit(
    section: Section,
    crust: Crust,
    surface: Readings,
    gravity: Readings,
    options: JointOptions,
    progress: Callable[[float], None] | None = None,
) -> JointFit:
    """Fit elastic thickness and density of the load to the bent surface, to gravity, and to both.

    ``section``: the plate, of which only the load, the undeflected surface and the infill are used; its infill is held
    fast. Without a load only the thickness is sought. ``crust.load`` is not used where the density is sought. A broken
    plate begins at the section's first station. Raises DownwarpError where data do not suffice and passes on what
    ``progress`` raises.
    """
    tell = progress if progress is not None else (lambda fraction: None)
    problem = _Problem(
        section, crust, options,
        _data(surface, options.regional, say("bent surface")),
        _data(gravity, options.gravity_regional, "gravity"),
    )  # fmt: skip
    weigh = bool(section.under_load.any()) and bool(problem.load[:, 0].any())
    if weigh and options.rho_from <= crust.water:
        raise DownwarpError(
            "RHO_LOAD_FROM ({rho_from:g} kg/m3) must exceed RHO_WATER ({water:g} kg/m3), which it displaces.",
            rho_from=options.rho_from,
            water=crust.water,
        )
    rho = np.linspace(options.rho_from, options.rho_to, DENSITIES) if weigh else np.array([crust.load])
    limits = np.log([options.te_from, options.te_to])
    first = _Trials(problem, np.linspace(*limits, THICKNESSES), rho)
    tell(0.25)
    answers, last = {}, first
    for part, source in enumerate((SURFACE, GRAVITY, JOINT), 1):
        trials = first
        for _ in range(ROUNDS):
            grids = trials.finer(source, limits, rho[[0, -1]])
            if grids is None:
                break
            trials = _Trials(problem, *grids, (source,))
        answers[source], last = _answer(source, trials, problem, limits, weigh), trials
        tell(0.25 + 0.25 * part)
    predicted, _ = _at_mode(last, problem.gravity, last.gravity_z, last.gravity_columns, JOINT)
    data = problem.gravity
    return JointFit(answers[SURFACE], answers[GRAVITY], answers[JOINT], data.at, data.value, predicted)


def _answer(source: str, trials: _Trials, problem: _Problem, limits: np.ndarray, weigh: bool) -> Answer:
    options = problem.options
    log = trials.log[source] - trials.log[source].max()
    density = np.exp(log)
    thickness = _estimate(trials.log_te, density.sum(axis=1), limits, options.confidence)
    rho = Estimate(None)
    if weigh:
        ends = np.array([options.rho_from, options.rho_to])
        rho = _estimate(trials.rho, density.sum(axis=0), ends, options.confidence)
    sides = (None if each is None else float(np.exp(each)) for each in (thickness.value, thickness.low, thickness.high))
    surface = gravity = None
    if source != GRAVITY:
        surface = _at_mode(trials, problem.surface, trials.surface_z, trials.surface_columns, source)[1]
    if source != SURFACE:
        gravity = _at_mode(trials, problem.gravity, trials.gravity_z, trials.gravity_columns, source)[1]
    return Answer(source, Estimate(*sides), rho, np.exp(trials.log_te), trials.rho, log, surface, gravity)


def _at_mode(trials: _Trials, data: _Data, z: np.ndarray, columns: np.ndarray, source: str) -> tuple[np.ndarray, float]:
    """Predicted values at a source's mode, by plain least squares in all linear parameters, and their rms residual."""
    place = int(np.argmax(trials.log[source]))
    x = columns[place]
    matrix = np.hstack([x / np.maximum(np.abs(x).max(axis=0), 1e-300), data.regional])
    left = z[place] - matrix @ np.linalg.lstsq(matrix, z[place], rcond=None)[0]
    return data.value - left, float(np.sqrt(np.mean(left**2)))


def _estimate(grid: np.ndarray, density: np.ndarray, limits: np.ndarray, confidence: float) -> Estimate:
    """Mode and highest-density interval of a density on an even grid; a side at the search limit is open where the
    density there is not small."""
    fine = np.linspace(grid[0], grid[-1], 40 * (grid.size - 1) + 1)
    height = np.interp(fine, grid, density)
    order = np.argsort(height)[::-1]
    share = np.cumsum(height[order]) / height.sum()
    inside = np.sort(order[: int(np.searchsorted(share, confidence)) + 1])
    step = (limits[1] - limits[0]) * 1e-6
    open_low = grid[0] <= limits[0] + step and density[0] > OPEN * density.max()
    open_high = grid[-1] >= limits[1] - step and density[-1] > OPEN * density.max()
    peak = int(np.argmax(density))
    mode = grid[peak]
    if 0 < peak < grid.size - 1:
        before, here, after = np.log(np.maximum(density[peak - 1 : peak + 2], 1e-300))
        bend = before - 2.0 * here + after
        mode = mode + (0.5 * (before - after) / bend if bend < 0 else 0.0) * (grid[1] - grid[0])
    return Estimate(
        float(mode), None if open_low else float(fine[inside[0]]), None if open_high else float(fine[inside[-1]])
    )
