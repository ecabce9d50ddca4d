"""Posterior of the elastic thickness (and of the break), linear parameters and noise integrated out.

A trial fixes the elastic thickness Te (and the break). The observed elevations y (m, up) are then

    y = offset + X1 b1 + X0 b0 + noise,            noise ~ N(0, s^2 R)

with the plate's own linear parameters b1 (end shear, end moment, load scale: columns that change with the trial) and
the regional b0 (level, tilt, bow: columns common to all trials). With z = y - offset, n stations, p0 and p1 parameters,
f = n - p0 - p1 and the residual sum of squares in the metric of R^-1

    S = min over b0, b1 of |z - X0 b0 - X1 b1|^2

the likelihood with b0 (flat prior, columns made orthonormal), b1 and the size s (prior ds^2 / s^2) integrated out is

    |R|^-1/2 |X' R^-1 X|^-1/2 Gamma(f/2) (pi S)^(-f/2) |X1' Q X1|^1/2 (2 pi n v)^(-p1/2),

where Q takes out the regional by plain least squares and v is the variance of y about the regional. The last two
factors are the prior density of b1: normal, with deflections as large as the observed relief. They make the likelihood
independent of how columns of X1 are scaled or mixed, hence fair to trials whose columns have different units or sizes
(a flat prior on end shear and moment is not), and comparable between models with different numbers of plate parameters:
the evidence. The likelihood is averaged over the R of `noise`. The prior of Te is flat in its logarithm over the search
range, that of the break flat over its range.

The noise may vary along the line and have heavy tails, as relief does (`_unevenness`): its local amplitude is
measured from leave-one-out residuals and followed as far as it exceeds what stationary noise would show, and the
logarithm of the likelihood is divided by a tempering where the residuals' kurtosis shows heavy tails.

Source of the restricted likelihood: Harville 1974, Biometrika 61 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Callable

import numpy as np
from scipy.special import gammaln, logsumexp, ndtr

from . import check
from .errors import DownwarpError
from .noise import FAMILIES, NoiseFamily, Setting, merge_matrix
from .wording import say

Model = Callable[[np.ndarray, "float | None"], "tuple[np.ndarray, np.ndarray]"]
"""model(te, break_at): te (T,) in m, break in m or None -> offset (T, N) in m, columns (T, N, p)."""

COARSE_INTERVALS = 24
"""Intervals of the first grid of ln Te."""
WANTED_POINTS = 24
"""Grid points wanted where the posterior is within `REACH` of its mode."""
REACH = 12.0
"""ln of the posterior below its mode at which refinement ends."""
MOST_TOGETHER = 1_000_000
"""Numbers that are kept at a time of noise settings by trials."""
MOST_CELLS = 250
"""Stations beyond this number are averaged for inference."""
NEGLIGIBLE = 1e-4
"""Weight of a noise setting, relative to the best, below which it is dropped."""
IMPOSSIBLE = 1e-8
"""The same, below which it is not looked at again when the noise's local amplitude has been found."""
MOST_REFINEMENTS = 6
"""Grids after which the search takes what it has."""
DECISIVE = float(np.log(10.0))
"""ln odds (10 to 1) at which a model counts as preferred, and a bent plate as resolved."""
WINDOW = 45e3
"""Standard deviation, m, of the window in which the noise's local amplitude is averaged."""
HEAVY_FROM = (3.4, 4.4)
"""Kurtosis of the residuals at which tempering sets in and at which it is full."""
TEMPERING = (1.5, 2.6)
"""Numbers by which the ln likelihood is divided where residuals have heavy tails, without and with down-weighting of
outliers (which takes the tails away that would widen the interval); calibrated on the relief of five ocean regions and
verified on five others (tests/calibration)."""
OPEN = 0.1
"""Density at an end of the search range, over the mode's, above which that side counts as open."""
ROBUST_PASSES = 3
"""Times that outliers are looked for, each time with those found before down-weighted."""
OUTLIER, WIDE_OUTLIER = 5.0, 8.0
"""Robust standard deviations beyond which a station counts as an outlier: of its leave-one-out residual, and of its
plain one (for seamounts several stations wide)."""


@dataclass(frozen=True)
class Interval:
    """A highest-density interval; a side that the data leave open is None."""

    low: float | None
    """Lower bound, in the unit of the quantity."""
    high: float | None
    """Upper bound, in the unit of the quantity."""


@dataclass(frozen=True)
class NoiseSummary:
    """What the residuals look like, averaged over the noise settings by their weight."""

    family_weights: dict[str, float]
    """Posterior weight of each family, 1."""
    length: float
    """Correlation length, m: weighted geometric mean over correlated families; 0 where all weight is on white noise."""
    white_share: float
    """Share of the variance that is white, 1."""
    size: float
    """Standard deviation of the residuals, m."""
    effective_stations: float
    """Number of independent stations that would fix the regional level as well: 1' R^-1 1."""
    tempering: float
    """The logarithm of the likelihood was divided by this, 1."""
    outliers: int
    """Stations down-weighted as outliers."""


@dataclass(frozen=True)
class Surface:
    """Every trial that was evaluated, for the misfit table."""

    te: np.ndarray
    """Elastic thickness, m, shape (trials,)."""
    break_at: np.ndarray
    """Break, m, NaN where none is searched, shape (trials,)."""
    rms: np.ndarray
    """Root mean square residual of the plain least-squares fit, m, shape (trials,)."""
    relative_likelihood: np.ndarray
    """Marginal likelihood over the best trial's, 1, shape (trials,)."""


@dataclass(frozen=True)
class Posterior:
    """What the data say about elastic thickness, break and linear parameters."""

    te: float
    """Elastic thickness at the posterior's mode, m: it lies in the interval whatever the search range."""
    te_interval: Interval
    """Highest-density interval of the elastic thickness (density in ln Te), m."""
    resolved: bool
    """Whether the data tell a bent plate from the regional alone."""
    remarks: tuple[str, ...]
    """What a reader must know, in plain words."""
    te_grid: np.ndarray
    """Final grid of elastic thickness, m, shape (T,)."""
    te_density: np.ndarray
    """Posterior weight of each point of `te_grid`, summing to 1, shape (T,)."""
    break_at: float | None
    """Break at the joint mode, m; None where it is not searched."""
    break_interval: Interval | None
    """Highest-density interval of the break, m."""
    break_grid: np.ndarray
    """Final grid of the break, m, shape (K,); empty where it is not searched."""
    break_density: np.ndarray
    """Posterior weight of each break, shape (K,)."""
    linear: np.ndarray
    """Linear parameters at the mode by generalised least squares, in the order of the model's columns, shape (p,)."""
    linear_low: np.ndarray
    """Lower bounds of the linear parameters, marginal over thickness, break and noise, shape (p,)."""
    linear_high: np.ndarray
    """Upper bounds of the linear parameters, shape (p,)."""
    predicted: np.ndarray
    """Predicted surface at the mode, m up, shape (N,)."""
    predicted_low: np.ndarray
    """Lower edge of the predicted surface's pointwise band, m, shape (N,)."""
    predicted_high: np.ndarray
    """Upper edge of the predicted surface's pointwise band, m, shape (N,)."""
    rms: float
    """Root mean square of observed less predicted at the fitted stations, m."""
    station_weights: np.ndarray
    """Weights that the robust fit left to the fitted stations, 1, shape (fitted,)."""
    noise: NoiseSummary
    log_odds_bent: float
    """ln odds of the bent plate against the regional alone, tempered; `compare` weighs two models."""
    surface: Surface
    trials: int
    """Number of trials that the forward model was asked for."""
    search: Search
    """What `compare` needs of this fit."""


@dataclass(frozen=True)
class _Line:
    """A line's fitted stations as inference sees them: averaged to the data's resolution."""

    observed: np.ndarray
    """(m,)"""
    merge: np.ndarray
    """(m, fitted)"""
    fitted: np.ndarray
    """Places of the fitted stations, (fitted,)"""
    regional: np.ndarray
    """Orthonormal regional columns, (m, p0)"""
    regional_turn: np.ndarray
    """Matrix that turns coefficients of `regional` into those of the model's columns, (p0, p0)"""
    common: int


@dataclass
class _Grid:
    """Trials on a regular grid of ln Te by break, and their marginal likelihood under each noise setting."""

    log_te: np.ndarray
    """(T,)"""
    breaks: np.ndarray
    """(K,)"""
    offset: np.ndarray
    """(K T, N)"""
    columns: np.ndarray
    """(K T, N, p)"""
    coordinates: np.ndarray
    """z and X1 of each trial in the basis, (K T, r, 1 + p1)"""
    basis: np.ndarray
    """(m, r)"""
    settings: tuple[Setting, ...] = ()
    """Noise settings that the trials were weighed under"""
    log_likelihood: np.ndarray = field(default_factory=lambda: np.zeros((0, 0)))
    """(settings, K T)"""
    moments: np.ndarray = field(default_factory=lambda: np.zeros((0, 0, 0)))
    """Gram matrices of the basis and the regional columns, (settings, r + p0, r + p0)"""

    def marginal(self) -> np.ndarray:
        """ln likelihood averaged over noise settings, (K, T)."""
        prior = np.array([setting.log_prior for setting in self.settings])
        return logsumexp(self.log_likelihood + prior[:, None], axis=0).reshape(self.breaks.size, self.log_te.size)


@dataclass(frozen=True)
class Search:
    """A model's trials near its mode under the noise that was found."""

    line: _Line
    noise: NoiseFamily
    grid: _Grid
    weighed: tuple[tuple[_Grid, np.ndarray], ...]
    te_width: float
    """ln(te_to / te_from)"""
    break_width: float
    """Width of the break's search range, m; 0 where it is not searched."""
    possible: tuple[Setting, ...]
    """Noise settings that might matter under noise of another local amplitude."""
    tempering: float = 1.0


def thickness_posterior(
    observed,
    distance,
    model: Model,
    common: int,
    te_from: float,
    te_to: float,
    *,
    fitted=None,
    sigma=None,
    known_error: float = 0.0,
    resolution: float = 0.0,
    confidence: float = 0.9,
    breaks=None,
    robust: bool = False,
    families: tuple[int, ...] = (0, 1, 2),
    progress: Callable[[float], None] | None = None,
) -> Posterior:
    """Infer the elastic thickness (and the break) of one line.

    ``observed``: elevations y, m up, shape (N,), NaN allowed where not fitted. ``distance``: m, shape (N,).
    ``model(te, break_at)`` returns for thicknesses te (T,), m, the offset (T, N) and columns (T, N, p) of
    y = offset + columns b; the last ``common`` columns are the regional and must not depend on the trial.
    ``te_from``, ``te_to``: search range, m. ``fitted``: bool (N,), the stations to fit (all by default). ``sigma``:
    their own errors, (N,); they shape the white part of the noise, and only their ratios count. ``known_error``: m, the
    least white noise that the stations are known to have. ``resolution``: cell size of the data, m; stations nearer
    together are averaged for inference. ``confidence``: 0 to 1.
    ``breaks``: evenly spaced break positions to search, m, two or more. ``robust``: down-weight outliers.
    ``families``: places in `noise.FAMILIES` to average over. ``progress``: is told the fraction done.

    Raises DownwarpError on input that cannot be used, and passes on what ``progress`` or ``model`` raise.
    """
    te_from = check.number("TE_FROM", te_from, above=0)
    te_to = check.number("TE_TO", te_to, above=te_from)
    confidence = check.number("CONFIDENCE", confidence, above=0, below=1)
    resolution = check.number("resolution", resolution, at_least=0)
    distance = check.finite_array("distance", distance, ndim=1)
    observed = np.asarray(observed, dtype=float)
    fitted = np.ones(distance.size, dtype=bool) if fitted is None else np.asarray(fitted, dtype=bool)
    if observed.shape != distance.shape or fitted.shape != distance.shape:
        raise DownwarpError("observed, distance and fitted must have one value for each station.")
    places = np.flatnonzero(fitted)
    check.finite_array("observed", observed[places])
    if sigma is not None:
        sigma = check.finite_array("sigma", np.asarray(sigma, dtype=float)[places])
        if not (sigma > 0).all():
            raise DownwarpError("sigma must be above 0 at every fitted station.")
    searched = breaks is not None
    breaks = check.increasing("breaks", breaks) if searched else np.array([np.nan])
    if searched and not np.allclose(np.diff(breaks), breaks[1] - breaks[0]):
        raise DownwarpError("breaks must be evenly spaced.")
    tell = progress if progress is not None else (lambda fraction: None)

    asked = 0

    def evaluate(log_te: np.ndarray, positions: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        nonlocal asked
        parts = [model(np.exp(log_te), float(at) if searched else None) for at in positions]
        asked += log_te.size * positions.size
        return np.concatenate([part[0] for part in parts]), np.concatenate([part[1] for part in parts])

    step = (np.log(te_to) - np.log(te_from)) / COARSE_INTERVALS
    log_te = np.log(te_from) + step * np.arange(COARSE_INTERVALS + 1)
    offset, columns = evaluate(log_te, breaks)
    regional = columns.shape[2] - common
    if not np.array_equal(columns[0, :, regional:], columns[-1, :, regional:]):
        raise DownwarpError(
            "The last {common} columns of the model are the regional and must not depend on the trial.", common=common
        )
    line = _line(observed, distance, places, sigma, resolution, columns[0], common)
    if line.observed.size < columns.shape[2] + 3:
        raise DownwarpError(
            "There are {count} stations to fit, at the data's resolution of {resolution:g} m; with {parameters} "
            "linear parameters it takes at least {least}.",
            count=line.observed.size,
            resolution=resolution,
            parameters=columns.shape[2],
            least=columns.shape[2] + 3,
        )
    centre = line.merge @ distance[places]
    errors = None if sigma is None else 1.0 / np.sqrt((line.merge > 0) @ sigma**-2.0 / (line.merge > 0).sum(axis=1))
    tell(0.2)
    known = {_place(log_te, breaks): _grid(line, log_te, breaks, offset, columns)}

    def trials(log_te: np.ndarray, positions: np.ndarray) -> _Grid:
        """The grid of these trials, not weighed yet; several searches of a line ask for the same."""
        place = _place(log_te, positions)
        if place not in known:
            known[place] = _grid(line, log_te, positions, *evaluate(log_te, positions))
        return replace(known[place])

    def search_under(noise: NoiseFamily, settings: tuple[Setting, ...]) -> Search:
        return _search(line, noise, settings, trials, (log_te, breaks), searched)

    noise = NoiseFamily(centre, errors, known_error=known_error, families=families)
    search = search_under(noise, noise.settings)
    tell(0.4)
    amplitude, heavy = _unevenness(line, search)
    for _ in range(ROBUST_PASSES if robust else 0):
        extra = _outliers(line, search)
        settled = bool(np.array_equal(extra > 0, search.noise.extra > 0))
        noise = NoiseFamily(centre, errors, extra=extra, known_error=known_error, families=families)
        search = search_under(noise, noise.settings)
        if settled:
            break
    tell(0.7)
    if search.noise.extra.any():
        amplitude = _unevenness(line, search)[0]  # tails are judged with the outliers in
    if (amplitude != 1.0).any():
        noise = NoiseFamily(centre, errors, amplitude, search.noise.extra, known_error=known_error, families=families)
        search = search_under(noise, search.possible)
    noise = search.noise
    search = replace(search, tempering=1.0 + heavy * (TEMPERING[int(robust)] - 1.0))
    tell(0.9)
    te_mode, break_mode = _mode(search)
    mode = trials(te_mode, break_mode)
    _weigh(line, noise, mode, search.grid.settings)
    return _summary(line, search, mode, observed, te_from, te_to, breaks, searched, confidence, asked)


def _place(log_te: np.ndarray, breaks: np.ndarray) -> tuple[bytes, bytes]:
    return log_te.tobytes(), breaks.tobytes()


def _search(
    line: _Line,
    noise: NoiseFamily,
    settings: tuple[Setting, ...],
    trials: Callable[[np.ndarray, np.ndarray], _Grid],
    coarse: tuple[np.ndarray, np.ndarray],
    searched: bool,
) -> Search:
    """Refine the grid near the mode, from the ``coarse`` one on, under the given noise and such of its settings."""
    weighed = []
    possible = settings
    grid = trials(*coarse)
    for remaining in range(MOST_REFINEMENTS, 0, -1):
        _weigh(line, noise, grid, settings)
        weighed.append((grid, grid.marginal()))
        if _near_mode(grid).sum() >= 3:
            if possible is settings:
                possible = _surviving(grid, IMPOSSIBLE)
            settings = _surviving(grid, NEGLIGIBLE)
        finer = _refined(grid, searched)
        if finer is None or remaining == 1:
            break
        grid = trials(*finer)
    width = float(np.ptp(weighed[0][0].log_te)), float(np.ptp(weighed[0][0].breaks)) if searched else 0.0
    return Search(line, noise, grid, tuple(weighed), *width, possible)


def _mode(search: Search) -> tuple[np.ndarray, np.ndarray]:
    """ln Te and break at the posterior's mode, each (1,): a parabola through the best grid point and its neighbours."""
    marginal = search.grid.marginal()
    row, column = np.unravel_index(int(np.argmax(marginal)), marginal.shape)
    return (
        _peak(search.grid.log_te, marginal[row], int(column)),
        _peak(search.grid.breaks, marginal[:, column], int(row)),
    )


def _peak(values: np.ndarray, height: np.ndarray, at: int) -> np.ndarray:
    if at in (0, values.size - 1):
        return values[at : at + 1]
    before, here, after = height[at - 1 : at + 2]
    bend = before - 2.0 * here + after
    shift = 0.5 * (before - after) / bend if bend < 0.0 else 0.0
    return values[at : at + 1] + shift * (values[at + 1] - values[at])


@dataclass(frozen=True)
class _Alone:
    """What each station says against all others: residuals of prediction from the rest (leave one out), at the mode."""

    residual: np.ndarray
    """Observed less predicted from the plate, the regional and the correlation with the others, m, (m,)"""
    variance: np.ndarray
    """Expected variance of `residual` over s^2, without the outliers' surplus, (m,)"""
    correlation: np.ndarray
    """Correlation of the standardised residuals, (m, m)"""
    plain: np.ndarray
    """Observed less plate and regional, m, (m,)"""


def _alone(line: _Line, search: Search):
    """Yield (weight, _Alone) for every noise setting that matters; weights sum to 1.

    With P = R^-1 - R^-1 X (X' R^-1 X)^-1 X' R^-1 the residual of station i predicted from the others is
    (P z)_i / P_ii, its variance s^2 / P_ii.
    """
    grid, noise = search.grid, search.noise
    best = int(np.argmax(grid.marginal()))
    joint = grid.log_likelihood[:, best] + np.array([setting.log_prior for setting in grid.settings])
    weight = np.exp(joint - joint.max())
    weight = np.where(weight > 0.05, weight, 0.0)
    weight /= weight.sum()
    coordinates = grid.coordinates[best]
    z = grid.basis @ coordinates[:, 0]
    columns = np.concatenate([grid.basis @ coordinates[:, 1:], line.regional], axis=1)
    columns = columns / np.maximum(np.sqrt((columns**2).sum(axis=0)), 1e-300)
    count = z.size
    for factor, share in zip(noise.factors(grid.settings), weight):
        if share == 0.0:
            continue
        white = factor.whiten(np.concatenate([np.eye(count), z[:, None], columns], axis=1))
        q, triangle = np.linalg.qr(white[:, count + 1 :])
        half = white[:, :count] - q @ (q.T @ white[:, :count])
        precision = half.T @ half
        own = np.maximum(np.diag(precision), 1e-12 * np.diag(precision).max())
        target = q.T @ white[:, count]
        coefficients = np.linalg.lstsq(triangle, target, rcond=1e-10)[0]
        yield (
            share,
            _Alone(
                residual=(half.T @ (white[:, count] - q @ target)) / own,
                variance=np.maximum(1.0 / own - noise.extra, 1e-3 / own),
                correlation=precision / np.sqrt(own[:, None] * own),
                plain=z - columns @ coefficients,
            ),
        )


def _unevenness(line: _Line, search: Search) -> tuple[np.ndarray, float]:
    """Local amplitude of the noise along the line, (m,), and how heavy its tails are, 0 to 1.

    Squares of the standardised leave-one-out residuals are averaged in a Gaussian window; their variation along the
    line beyond what stationary Gaussian noise would show says how far to follow it. Their kurtosis, 3 for Gaussian
    noise, tells heavy tails.
    """
    at = search.noise.distance
    window = max(WINDOW, search.noise.span / (at.size - 1))
    kernel = np.exp(-0.5 * ((at[:, None] - at) / window) ** 2)
    kernel /= kernel.sum(axis=1, keepdims=True)
    ratio, expected, kurtosis = np.zeros(at.size), 0.0, 0.0
    for share, alone in _alone(line, search):
        square = alone.residual**2 / (alone.variance + search.noise.extra)
        square = square / max(float(square.mean()), 1e-300)
        ratio += share * (kernel @ square)
        expected += share * 2.0 * float(np.mean((kernel @ alone.correlation**2) * kernel) * at.size)
        kurtosis += share * float(np.mean(square**2))
    excess = max(float(np.mean((ratio - 1.0) ** 2)) - expected, 0.0)
    follow = excess / (excess + expected)
    low, high = HEAVY_FROM
    heavy = float(np.clip((kurtosis - low) / (high - low), 0.0, 1.0))
    return np.sqrt(np.maximum(1.0 + follow * (ratio - 1.0), 0.01)), heavy


def _outliers(line: _Line, search: Search) -> np.ndarray:
    """Surplus variance, over s^2, of stations that stand out, (m,).

    A station stands out alone (its leave-one-out residual) or, as on a seamount several stations wide, by its plain
    residual; both against the median absolute deviation of all.
    """
    extra = np.zeros(line.observed.size)
    for share, alone in _alone(line, search):
        standard = alone.residual / np.sqrt(alone.variance)
        scale = max(1.4826 * float(np.median(np.abs(standard))), 1e-300)
        single = np.where(np.abs(standard) > OUTLIER * scale, (standard / scale) ** 2 * alone.variance, 0.0)
        plain = alone.plain - np.median(alone.plain)
        spread = max(1.4826 * float(np.median(np.abs(plain))), 1e-300)
        wide = np.where(np.abs(plain) > WIDE_OUTLIER * spread, (plain / scale) ** 2, 0.0)
        extra += share * np.maximum(single, wide)
    return extra


def _line(observed, distance, places, sigma, resolution, columns, common) -> _Line:
    at = distance[places]
    width = max(resolution, float(np.ptp(at)) / MOST_CELLS if at.size > MOST_CELLS else 0.0)
    merge = merge_matrix(at, width, sigma)
    regional = merge @ columns[places, columns.shape[1] - common :]
    scale = np.sqrt((regional**2).sum(axis=0))
    if common and (not (scale > 0).all() or np.linalg.matrix_rank(regional / scale) < common):
        raise DownwarpError(
            "The fitted stations cannot tell the regional's terms apart: fit more stations or fewer terms."
        )
    orthonormal, turn = np.linalg.qr(regional)
    return _Line(merge @ observed[places], merge, places, orthonormal, np.linalg.inv(turn), common)


def _grid(line: _Line, log_te, breaks, offset, columns) -> _Grid:
    """Bring every trial's data and plate columns into one small orthonormal basis, so that a noise setting has to be
    applied to few vectors only: columns of neighbouring trials are nearly the same."""
    plate = columns.shape[2] - line.common
    z = line.observed - offset[:, line.fitted] @ line.merge.T
    x = np.matmul(line.merge, columns[:, line.fitted, :plate]) if plate else np.zeros((*z.shape, 0))
    vectors = np.concatenate([z[:, :, None], x], axis=2)  # (trials, m, 1 + p1)
    flat = np.moveaxis(vectors, 1, 0).reshape(z.shape[1], -1)
    size = np.sqrt((flat**2).sum(axis=0))
    unit = flat / np.where(size > 0, size, 1.0)
    if not np.isfinite(unit).all():
        raise DownwarpError(
            "The plate's predicted surface is not finite for some elastic thickness in the search range."
        )
    value, basis = np.linalg.eigh(unit @ unit.T)
    basis = basis[:, value > 1e-13 * value[-1]]
    return _Grid(log_te, breaks, offset, columns, np.matmul(basis.T, vectors), basis)


def _weigh(line: _Line, noise: NoiseFamily, grid: _Grid, settings: tuple[Setting, ...]) -> None:
    """Fill in the marginal likelihood of all trials under each noise setting."""
    rank = grid.basis.shape[1]
    both = np.concatenate([grid.basis, line.regional], axis=1)
    count, common = line.observed.size, line.regional.shape[1]
    floor = count * (1e-5 * np.std(line.observed)) ** 2 + 1e-300
    coordinates = grid.coordinates
    trials, _, width = coordinates.shape
    plate = width - 1
    plain = _inner_products(_without_regional((both.T @ both)[None], rank)[0], coordinates)
    scale = np.sqrt(np.maximum(np.einsum("stii->sti", plain[:, :, 1:, 1:]), 1e-300))
    volume, _ = _plate_terms(plain, scale)
    detrended = line.observed - line.regional @ (line.regional.T @ line.observed)
    variance = max(float(detrended @ detrended) / count, floor / count)
    free = count - common - plate
    constant = gammaln(0.5 * free) - 0.5 * free * np.log(np.pi) - 0.5 * plate * np.log(2.0 * np.pi * count * variance)
    grams, determinants = np.empty((len(settings), rank + common, rank + common)), np.empty(len(settings))
    for place, factor in enumerate(noise.factors(settings)):
        white = factor.whiten(both)
        grams[place], determinants[place] = white.T @ white, factor.log_determinant
    middle, log_regional = _without_regional(grams, rank)
    likelihood = np.empty((len(settings), trials))
    together = max(MOST_TOGETHER // (trials * width * max(rank, 1)), 1)
    for start in range(0, len(settings), together):
        part = slice(start, start + together)
        inner = _inner_products(middle[part], coordinates)
        precision, explained = _plate_terms(inner, scale)
        left = np.maximum(inner[:, :, 0, 0] - explained, 0.0) + floor
        sizes = np.sqrt(left.min(axis=1) / free).tolist()
        prior = [noise.log_prior_of_size(setting, size) for setting, size in zip(settings[part], sizes)]
        likelihood[part] = 0.5 * (volume - precision) - 0.5 * free * np.log(left) + np.array(prior)[:, None]
    likelihood += (constant - 0.5 * (determinants + log_regional))[:, None]
    grid.settings, grid.log_likelihood, grid.moments = settings, likelihood, grams


def _inner_products(middle: np.ndarray, coordinates: np.ndarray) -> np.ndarray:
    """Gram matrices of (z, X1), (settings, trials, 1 + p1, 1 + p1), from those of the basis, (settings, r, r)."""
    trials, rank, width = coordinates.shape
    flat = np.moveaxis(coordinates, 1, 0).reshape(rank, trials * width)
    turned = np.matmul(middle, flat).reshape(middle.shape[0], rank, trials, width)
    return np.einsum("tri,srtj->stij", coordinates, turned)


def _plate_terms(inner: np.ndarray, scale: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """ln determinant of the plate columns' Gram matrix (columns divided by ``scale``, (trials, p1)) and the sum of
    squares that they explain, per setting and trial, from Gram matrices of (z, X1)."""
    plate = scale.shape[-1]
    if plate == 0:
        return np.zeros(inner.shape[:2]), np.zeros(inner.shape[:2])
    matrix = inner[..., 1:, 1:] / (scale[..., :, None] * scale[..., None, :])
    ridge = 1e-10 * np.einsum("stii->st", matrix) + 1e-30  # columns may be parallel, or 0 at every station
    matrix = matrix + ridge[..., None, None] * np.eye(plate)
    right = inner[..., 1:, 0] / scale
    explained = (right * np.linalg.solve(matrix, right[..., None])[..., 0]).sum(axis=-1)
    return np.linalg.slogdet(matrix)[1], np.maximum(explained, 0.0)


def _without_regional(gram: np.ndarray, rank: int) -> tuple[np.ndarray, np.ndarray]:
    """The basis' Gram matrices with the regional fitted out, and ln |X0' R^-1 X0|, (settings,)."""
    if gram.shape[-1] == rank:
        return gram, np.zeros(gram.shape[0])
    regional = gram[:, rank:, rank:]
    cross = gram[:, :rank, rank:]
    fitted = np.matmul(cross, np.linalg.solve(regional, np.swapaxes(cross, 1, 2)))
    return gram[:, :rank, :rank] - fitted, np.linalg.slogdet(regional)[1]


def _log_evidence(search: Search) -> float:
    """ln of the tempered marginal likelihood averaged over the search range."""
    grid = search.grid
    scaled = grid.marginal() / search.tempering
    weight = np.ones_like(scaled)
    share = 1.0
    for axis, values, width in ((1, grid.log_te, search.te_width), (0, grid.breaks, search.break_width)):
        if width > 0.0:
            ends = np.ones(values.size)
            ends[[0, -1]] = 0.5
            weight *= np.expand_dims(ends, 1 - axis)
            share *= (values[1] - values[0]) / width
    return float(logsumexp(scaled, b=weight) + np.log(share))


def _log_evidence_regional(line: _Line, noise: NoiseFamily, tempering: float) -> float:
    """The same of the regional alone."""
    stations = int(line.fitted.max()) + 1
    grid = _grid(line, np.zeros(1), np.array([np.nan]), np.zeros((1, stations)), np.zeros((1, stations, line.common)))
    _weigh(line, noise, grid, noise.settings)
    return float(grid.marginal()[0, 0]) / tempering


def _surviving(grid: _Grid, least: float) -> tuple[Setting, ...]:
    """Noise settings whose weight, over the best one's, is above ``least``."""
    prior = np.array([setting.log_prior for setting in grid.settings])[:, None]
    joint = logsumexp(grid.log_likelihood + prior, axis=1)
    keep = joint > joint.max() + np.log(least)
    return tuple(setting for setting, kept in zip(grid.settings, keep) if kept)


def _near_mode(grid: _Grid) -> np.ndarray:
    """Thicknesses within `REACH` of the mode for some break, bool (T,)."""
    marginal = grid.marginal()
    return (marginal > marginal.max() - REACH).any(axis=0)


def _refined(grid: _Grid, searched: bool) -> tuple[np.ndarray, np.ndarray] | None:
    """Finer grid over the region near the mode, or None where the grid is fine enough."""
    near = grid.marginal() > grid.marginal().max() - REACH
    near_te, near_break = near.any(axis=0), near.any(axis=1)
    enough_te = near_te.sum() >= WANTED_POINTS
    wanted_breaks = 7
    enough_break = not searched or near_break.sum() >= wanted_breaks
    if enough_te and enough_break:
        return None
    log_te = _finer(grid.log_te, near_te, WANTED_POINTS)
    positions = _finer(grid.breaks, near_break, wanted_breaks) if searched else grid.breaks
    return log_te, positions


def _finer(values: np.ndarray, near: np.ndarray, wanted: int) -> np.ndarray:
    """The span of ``near`` and one step beyond on each side, its step divided by a power of 2 (16 at most)."""
    index = np.flatnonzero(near)
    first, last = max(index[0] - 1, 0), min(index[-1] + 1, values.size - 1)
    power = int(np.clip(np.ceil(np.log2(wanted / near.sum())), 0, 2 if near.sum() < 3 else 4))
    return np.linspace(values[first], values[last], (last - first) * 2**power + 1)


def _highest_density(values: np.ndarray, weight: np.ndarray, confidence: float, low_end: float, high_end: float):
    """Hull of the highest-density set of a density given on a regular grid, each bound None where it reaches an end of
    the search range; linear interpolation between points."""
    dense_at = np.linspace(values[0], values[-1], 40 * (values.size - 1) + 1)
    dense = np.exp(np.interp(dense_at, values, np.log(np.maximum(weight, 1e-300))))
    order = np.argsort(dense)[::-1]
    inside = order[: int(np.searchsorted(np.cumsum(dense[order]), confidence * dense.sum())) + 1]
    low, high = dense_at[inside.min()], dense_at[inside.max()]
    tiny = 1e-9 * (high_end - low_end)
    open_low = low <= low_end + tiny or (values[0] <= low_end + tiny and weight[0] > OPEN * weight.max())
    open_high = high >= high_end - tiny or (values[-1] >= high_end - tiny and weight[-1] > OPEN * weight.max())
    return None if open_low else float(low), None if open_high else float(high)


def _mixture_quantile(mean: np.ndarray, spread: np.ndarray, weight: np.ndarray, probability: float) -> np.ndarray:
    """Quantile of a mixture of normals by bisection; mean and spread (components, points), weight (components,)."""
    low, high = (mean - 8.0 * spread).min(axis=0), (mean + 8.0 * spread).max(axis=0)
    safe = np.maximum(spread, 1e-12 * np.abs(mean) + 1e-100)  # a spread of 0 is a step
    for _ in range(40):
        middle = 0.5 * (low + high)
        below = weight @ ndtr((middle - mean) / safe) < probability
        low, high = np.where(below, middle, low), np.where(below, high, middle)
    return 0.5 * (low + high)


def _parameters(line: _Line, grid: _Grid, trials: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Mean (trials, p) and covariance (trials, p, p) of the linear parameters, averaged over noise settings, and the
    mean variance of the noise (trials,)."""
    rank, common = grid.basis.shape[1], line.common
    coordinates = grid.coordinates[trials]
    plate = coordinates.shape[2] - 1
    number = plate + common
    prior = np.array([setting.log_prior for setting in grid.settings])[:, None]
    weight = np.exp(grid.log_likelihood[:, trials] + prior - (grid.log_likelihood[:, trials] + prior).max(axis=0))
    weight /= weight.sum(axis=0)
    scale = np.maximum(np.sqrt((coordinates[:, :, 1:] ** 2).sum(axis=1)), 1e-300)
    embed = np.zeros((trials.size, rank + common, 1 + number))
    embed[:, :rank, 0] = coordinates[:, :, 0]
    embed[:, :rank, 1 : 1 + plate] = coordinates[:, :, 1:] / scale[:, None, :]
    embed[:, rank + np.arange(common), 1 + plate + np.arange(common)] = 1.0
    mean = np.zeros((trials.size, number))
    second = np.zeros((trials.size, number, number))
    variance = np.zeros(trials.size)
    for gram, share in zip(grid.moments, weight):
        if share.max() < 1e-3:
            continue
        inner = np.matmul(np.swapaxes(embed, 1, 2), np.matmul(gram, embed))
        inverse = np.linalg.pinv(inner[:, 1:, 1:], rcond=1e-12, hermitian=True)
        estimate = np.matmul(inverse, inner[:, 1:, :1])[:, :, 0]
        rest = np.maximum(inner[:, 0, 0] - (estimate * inner[:, 1:, 0]).sum(axis=1), 0.0)
        size = rest / max(line.observed.size - number, 1)
        mean += share[:, None] * estimate
        second += share[:, None, None] * (size[:, None, None] * inverse + estimate[:, :, None] * estimate[:, None, :])
        variance += share * size
    total = weight[weight.max(axis=1) >= 1e-3].sum(axis=0)
    mean, second, variance = mean / total[:, None], second / total[:, None, None], variance / total
    covariance = second - mean[:, :, None] * mean[:, None, :]
    turn = np.zeros((trials.size, number, number))
    turn[:, np.arange(plate), np.arange(plate)] = 1.0 / scale
    turn[:, plate:, plate:] = line.regional_turn
    mean = np.matmul(turn, mean[:, :, None])[:, :, 0]
    return mean, np.matmul(turn, np.matmul(covariance, np.swapaxes(turn, 1, 2))), variance


def _summary(line, search, mode, observed, te_from, te_to, breaks, searched, confidence, asked) -> Posterior:
    grid, noise, tempering = search.grid, search.noise, search.tempering
    marginal = grid.marginal() / tempering
    density = np.exp(marginal - marginal.max())
    quadrature = np.ones(grid.log_te.size)
    quadrature[[0, -1]] = 0.5
    te_density = density.sum(axis=0)
    low, high = _highest_density(grid.log_te, te_density, confidence, np.log(te_from), np.log(te_to))
    te_mode = float(np.exp(mode.log_te[0]))  # kept inside where the grid's rounding would leave it just outside
    te_interval = Interval(
        None if low is None else min(float(np.exp(low)), te_mode),
        None if high is None else max(float(np.exp(high)), te_mode),
    )
    break_interval = None
    break_density = np.zeros(0)
    if searched:
        break_density = (density * quadrature).sum(axis=1)
        break_interval = Interval(*_highest_density(grid.breaks, break_density, confidence, breaks[0], breaks[-1]))
        break_density = break_density / break_density.sum()
    odds = _log_evidence(search) - _log_evidence_regional(line, noise, tempering)
    resolved = odds >= DECISIVE and (te_interval.low is not None or te_interval.high is not None)
    if not resolved:
        te_interval = Interval(None, None)
        break_interval = Interval(None, None) if searched else None
    remarks = _remarks(resolved, odds, te_interval, break_interval, te_from, te_to, noise, tempering)

    flat = (density * quadrature).ravel()
    trials = np.flatnonzero(flat > 1e-3 * flat.max())
    mean, covariance, variance = _parameters(line, grid, trials)
    covariance = covariance * tempering
    weight = flat[trials] / flat[trials].sum()
    columns, offset = grid.columns[trials], grid.offset[trials]
    surface_mean = offset + np.matmul(columns, mean[:, :, None])[:, :, 0]
    surface_spread = np.sqrt(np.maximum((np.matmul(columns, covariance) * columns).sum(axis=2), 0.0))
    spread = np.sqrt(np.maximum(np.einsum("tii->ti", covariance), 0.0))
    tails = 0.5 * (1.0 - confidence), 0.5 * (1.0 + confidence)
    linear = _parameters(line, mode, np.zeros(1, dtype=int))[0][0]
    predicted = mode.offset[0] + mode.columns[0] @ linear
    residual = observed[line.fitted] - predicted[line.fitted]
    return Posterior(
        te=te_mode,
        te_interval=te_interval,
        resolved=bool(resolved),
        remarks=remarks,
        te_grid=np.exp(grid.log_te),
        te_density=(te_density * quadrature) / (te_density * quadrature).sum(),
        break_at=float(mode.breaks[0]) if searched else None,
        break_interval=break_interval,
        break_grid=grid.breaks if searched else np.zeros(0),
        break_density=break_density,
        linear=linear,
        linear_low=_mixture_quantile(mean, spread, weight, tails[0]),
        linear_high=_mixture_quantile(mean, spread, weight, tails[1]),
        predicted=predicted,
        predicted_low=_mixture_quantile(surface_mean, surface_spread, weight, tails[0]),
        predicted_high=_mixture_quantile(surface_mean, surface_spread, weight, tails[1]),
        rms=float(np.sqrt(np.mean(residual**2))),
        station_weights=(line.merge > 0).T @ (1.0 / (1.0 + noise.extra)),
        noise=_noise_summary(line, search, float(weight @ variance)),
        log_odds_bent=float(odds),
        surface=_surface(line, search),
        trials=asked,
        search=search,
    )


def _remarks(resolved, odds, te_interval, break_interval, te_from, te_to, noise, tempering) -> tuple[str, ...]:
    """What a reader must know, in plain words."""
    remarks = []
    if not resolved:
        remarks.append(
            say("Elastic thickness is not resolved: every thickness in the search range fits.")
            if odds >= DECISIVE
            else say(
                "Elastic thickness is not resolved: the stations do not tell a bent plate from the regional alone."
            )
        )
    else:
        if te_interval.low is None:
            remarks.append(
                say(
                    "Elastic thickness has no lower bound in the search range (from {te_from:g} km).",
                    te_from=te_from / 1e3,
                )
            )
        if te_interval.high is None:
            remarks.append(
                say("Elastic thickness has no upper bound in the search range (up to {te_to:g} km).", te_to=te_to / 1e3)
            )
        if break_interval is not None and (break_interval.low is None or break_interval.high is None):
            remarks.append(say("The break is not bounded on both sides in its search range."))
    outliers = int((noise.extra > 0).sum())
    if outliers:
        remarks.append(say("{outliers} stations were down-weighted as outliers.", outliers=outliers))
    if tempering >= 1.05 and resolved:
        remarks.append(
            say(
                "Residuals have heavy tails: intervals were widened (likelihood tempered by {tempering:.2g}).",
                tempering=tempering,
            )
        )
    return tuple(remarks)


@dataclass(frozen=True)
class Comparison:
    """Two models of the same stations weighed against each other."""

    log_odds: float
    """ln odds of the first model against the second, 1: the less decisive of the odds under either model's noise."""
    preferred: int | None
    """0 or 1 for the first or the second model, None where the odds are below 10 to 1: undecided."""
    remark: str
    """The same in plain words, with the odds."""


def compare(
    first: Posterior,
    second: Posterior,
    names: tuple[str, str] = ("first", "second"),
    starts: tuple[str, str] = ("First", "Second"),
) -> Comparison:
    """Weigh two fits of the same stations (the same regional, resolution and sigma) by evidence.

    Plate parameters have a proper prior, of deflections as large as the observed relief, and elastic thickness and
    break are averaged over their search ranges, so that a model pays for what it can adjust. Both are judged under one
    noise: that found with the first model and that found with the second in turn, and the less decisive odds count.
    Raises DownwarpError where the fits are not of the same stations.
    """
    lines = first.search.line, second.search.line
    if (
        lines[0].observed.shape != lines[1].observed.shape
        or not np.allclose(lines[0].observed, lines[1].observed)
        or lines[0].common != lines[1].common
    ):
        raise DownwarpError("Two models can be compared only on the same stations with the same regional.")
    odds = []
    for judge in (first.search, second.search):
        evidence = []
        for search in (first.search, second.search):
            grid = replace(search.grid)
            settings = tuple(dict.fromkeys(first.search.grid.settings + second.search.grid.settings))
            _weigh(search.line, judge.noise, grid, settings)
            evidence.append(_log_evidence(replace(search, grid=grid, tempering=judge.tempering)))
        odds.append(evidence[0] - evidence[1])
    log_odds = min(odds, key=abs) if odds[0] * odds[1] > 0.0 else 0.0
    preferred = None if abs(log_odds) < DECISIVE else int(log_odds < 0.0)
    ratio = f"{np.exp(min(abs(log_odds), 13.8)):.2g}" if abs(log_odds) < 13.8 else say("more than a million")
    better, worse = names if log_odds >= 0.0 else names[::-1]
    if preferred is None:
        remark = say(
            "Undecided between {first} and {second} (odds {ratio} to 1 for {better}).",
            first=names[0],
            second=names[1],
            ratio=ratio,
            better=better,
        )
    else:
        remark = say(
            "{better} is preferred to {worse} (odds {ratio} to 1).",
            better=starts[int(log_odds < 0.0)],
            worse=worse,
            ratio=ratio,
        )
    return Comparison(float(log_odds), preferred, remark)


def _noise_summary(line: _Line, search: Search, variance: float) -> NoiseSummary:
    grid, noise = search.grid, search.noise
    prior = np.array([setting.log_prior for setting in grid.settings])
    joint = logsumexp(grid.log_likelihood, axis=1) + prior
    weight = np.exp(joint - logsumexp(joint))
    families = dict.fromkeys(FAMILIES, 0.0)
    for setting, share in zip(grid.settings, weight):
        families[FAMILIES[setting.family]] += float(share)
    correlated = np.array([setting.family > 0 for setting in grid.settings])
    lengths = np.array([setting.length if setting.family else 1.0 for setting in grid.settings])
    share = weight[correlated].sum()
    effective = 0.0
    for factor, part in zip(noise.factors(grid.settings), weight):
        if part > 1e-3:
            effective += part * float((factor.whiten(np.ones((line.observed.size, 1))) ** 2).sum())
    return NoiseSummary(
        family_weights=families,
        length=float(np.exp(weight[correlated] @ np.log(lengths[correlated]) / share)) if share > 1e-3 else 0.0,
        white_share=float(weight @ [setting.white_share for setting in grid.settings]),
        size=float(np.sqrt(variance)),
        effective_stations=effective / float(weight[weight > 1e-3].sum()),
        tempering=search.tempering,
        outliers=int((noise.extra > 0).sum()),
    )


def _surface(line: _Line, search: Search) -> Surface:
    te, breaks, rms, likelihood = [], [], [], []
    for grid, marginal in search.weighed:
        rank = grid.basis.shape[1]
        both = np.concatenate([grid.basis, line.regional], axis=1)
        inner = _inner_products(_without_regional((both.T @ both)[None], rank)[0], grid.coordinates)
        scale = np.sqrt(np.maximum(np.einsum("stii->sti", inner[:, :, 1:, 1:]), 1e-300))
        left = (inner[:, :, 0, 0] - _plate_terms(inner, scale)[1])[0]
        te.append(np.tile(np.exp(grid.log_te), grid.breaks.size))
        breaks.append(np.repeat(grid.breaks, grid.log_te.size))
        rms.append(np.sqrt(np.maximum(left, 0.0) / line.observed.size))
        likelihood.append(marginal.ravel() / search.tempering)
    every = np.concatenate(likelihood)
    return Surface(np.concatenate(te), np.concatenate(breaks), np.concatenate(rms), np.exp(every - every.max()))
