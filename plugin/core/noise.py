"""How residuals along a line hang together: families of stationary noise, each with a white part.

The covariance of the residuals at stations i and j, d_ij apart, is s^2 R_ij with

    R_ij = (1 - w) a_i a_j rho(d_ij / L) + (w a_i^2 sigma_i^2 + extra_i) delta_ij

where rho is a Matern correlation of smoothness 1/2, 3/2 or 5/2 and length L, w the white share, sigma_i the stations'
own errors relative to their median, a_i the local amplitude (1 where the noise does not vary along the line) and
extra_i the surplus variance of stations that count as outliers. The size s is integrated out where the noise is used.

Source of the correlations: Rasmussen & Williams, Gaussian Processes for Machine Learning, section 4.2.1 (from memory).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy.linalg.lapack import dpotrf, dtrtrs

from . import check
from .errors import DownwarpError

FAMILIES = ("white", "Matern 1/2", "Matern 3/2", "Matern 5/2")
"""Names of the families; their place in this tuple is `Setting.family`."""

WHITE_SHARES = (1e-6, 1e-3, 0.01, 0.05, 0.2, 0.5, 0.8)
"""White shares w of the correlated families. The least one is not 0, so that two stations may share a place, but small:
0.001 is enough to make smooth noise look rough and intervals too narrow."""

LENGTHS = 9
"""Number of correlation lengths, from half the stations' mean spacing to a third of the line."""


def correlation(family: int, separation: np.ndarray) -> np.ndarray:
    """Matern correlation rho of ``family`` (1, 2, 3: smoothness 1/2, 3/2, 5/2) at separations d / L (any shape).

        e^-r        (1 + r) e^-r, r = sqrt(3) d / L        (1 + r + r^2 / 3) e^-r, r = sqrt(5) d / L

    >>> correlation(1, np.array([0.0, 1.0])).round(4).tolist()
    [1.0, 0.3679]
    """
    r = np.sqrt(2.0 * family - 1.0) * np.asarray(separation, dtype=float)
    decay = np.exp(-r)
    if family == 1:
        return decay
    if family == 2:
        return (1.0 + r) * decay
    return (1.0 + r + r * r / 3.0) * decay


@dataclass(frozen=True)
class Setting:
    """One noise model, but for its size."""

    family: int
    """Place in `FAMILIES`."""
    length: float
    """Correlation length L, m; 0 for white noise."""
    white_share: float
    """w, 1."""
    log_prior: float
    """Logarithm of its prior weight."""


@dataclass(frozen=True)
class Factor:
    """Covariance of one setting, factorised."""

    setting: Setting
    lower: np.ndarray
    """Lower Cholesky factor of R, shape (n, n); entries above the diagonal are not used."""
    log_determinant: float
    """ln |R|."""

    def whiten(self, columns: np.ndarray) -> np.ndarray:
        """Return lower^-1 columns, shape (n, m)."""
        return dtrtrs(self.lower, columns, lower=1)[0]


KNOWN_ERROR_SPREAD = 0.05
"""Standard deviation of the logarithm of a stated error: how far it may itself be wrong."""


class NoiseFamily:
    """All noise settings of one line; covariances are factorised on first use and kept for every later trial."""

    def __init__(
        self,
        distance,
        sigma=None,
        amplitude=None,
        extra=None,
        *,
        known_error: float = 0.0,
        families: tuple[int, ...] = (0, 1, 2),
        lengths=None,
        white_shares: tuple[float, ...] = WHITE_SHARES,
    ) -> None:
        """``distance``: of the stations, m, shape (n,), any order; ``sigma``: their own errors, any unit, shape (n,);
        ``amplitude``: local size of the noise, 1, shape (n,); ``extra``: surplus variance of outliers in units of the
        noise's variance, shape (n,); ``known_error``: the least white noise, m (see `log_prior_of_size`); ``lengths``:
        correlation lengths, m, in place of the usual ones."""
        self.distance = check.finite_array("distance", distance, ndim=1)
        n = self.distance.size
        if n < 3:
            raise DownwarpError("There are {n} stations to fit; it takes at least 3.", n=n)
        ones = np.ones(n)
        self.sigma = ones if sigma is None else _positive("sigma", sigma, n)
        self.known_error = check.number("known_error", known_error, at_least=0)
        self.sigma = self.sigma / np.median(self.sigma)
        self.amplitude = ones if amplitude is None else _positive("amplitude", amplitude, n)
        self.extra = np.zeros(n) if extra is None else check.finite_array("extra", extra, ndim=1)
        self.span = float(np.ptp(self.distance))
        if self.span <= 0.0:
            raise DownwarpError("All stations lie at one distance; they need to be spread along the line.")
        spacing = self.span / (n - 1)
        if lengths is None:
            lengths = np.geomspace(0.5 * spacing, max(self.span / 3.0, spacing), LENGTHS)
        self.lengths = np.asarray(lengths, dtype=float)
        self.settings = self._settings(families, white_shares)
        self._separation = np.abs(self.distance[:, None] - self.distance[None, :])
        self._factors: dict[Setting, Factor] = {}

    def _settings(self, families: tuple[int, ...], white_shares: tuple[float, ...]) -> tuple[Setting, ...]:
        """Families count alike; so do lengths (spaced by their logarithm) and white shares within a family."""
        settings = []
        for family in families:
            if family == 0:
                settings.append(Setting(0, 0.0, 1.0, -np.log(len(families))))
                continue
            prior = -np.log(len(families) * self.lengths.size * len(white_shares))
            settings += [
                Setting(family, float(length), share, prior) for length in self.lengths for share in white_shares
            ]
        return tuple(settings)

    def log_prior_of_size(self, setting: Setting, size: float) -> float:
        """ln prior, up to a constant, of a noise of size s, m, whose white part is smaller than the known error.

        -1/2 [ln(min(error, s) / (s sqrt(w))) / spread]^2 where the white part is the smaller, else 0: residuals may be
        whiter than the stations' own errors, for models are not exact, but not smoother, whatever smoothness would gain.
        """
        white = size * np.sqrt(setting.white_share)
        least = min(self.known_error, size)
        if not least > white:
            return 0.0
        return float(-0.5 * (np.log(least / max(white, 1e-12 * least)) / KNOWN_ERROR_SPREAD) ** 2)

    def covariance(self, setting: Setting, correlated: np.ndarray | None = None) -> np.ndarray:
        """R of one setting, shape (n, n); ``correlated``: its part without the white share, if at hand."""
        own = setting.white_share * self.sigma**2 * self.amplitude**2 + self.extra
        if setting.family == 0:
            return np.diag(own)
        matrix = (self._correlated(setting) if correlated is None else correlated) * (1.0 - setting.white_share)
        matrix.flat[:: own.size + 1] += own
        return matrix

    def _correlated(self, setting: Setting) -> np.ndarray:
        matrix = correlation(setting.family, self._separation / setting.length)
        return matrix * (self.amplitude[:, None] * self.amplitude)

    def factors(self, settings: tuple[Setting, ...] | None = None) -> Iterator[Factor]:
        """Yield the factorised covariance of each setting (all by default), in order."""
        shape: tuple[int, float] | None = None
        correlated = np.zeros((0, 0))
        diagonal = np.arange(self.distance.size)
        for setting in self.settings if settings is None else settings:
            factor = self._factors.get(setting)
            if factor is None:
                if setting.family and (setting.family, setting.length) != shape:
                    shape, correlated = (setting.family, setting.length), self._correlated(setting)
                matrix = self.covariance(setting, correlated)
                # Turned, for LAPACK's order of columns: it would copy it otherwise, and it is symmetric.
                lower, info = dpotrf(matrix.T, lower=1, clean=0, overwrite_a=1)
                if info != 0:
                    raise DownwarpError("The noise covariance is singular: too many stations share one place.")
                factor = Factor(setting, lower, 2.0 * float(np.log(lower[diagonal, diagonal]).sum()))
                self._factors[setting] = factor
            yield factor


def _positive(name: str, values, n: int) -> np.ndarray:
    array = check.finite_array(name, values, ndim=1)
    if array.size != n:
        raise DownwarpError(
            "{name} holds {count} values; it takes {n}, one for each station.", name=name, count=array.size, n=n
        )
    if not (array > 0).all():
        raise DownwarpError("{name} must be above 0 at every station.", name=name)
    return array


def merge_matrix(distance: np.ndarray, width: float, sigma: np.ndarray | None = None) -> np.ndarray:
    """Weights, shape (cells, n), that average stations nearer together than ``width`` (m) into one.

    Cells of ``width`` are counted from the first station; empty ones are left out. Weights go by 1 / sigma^2 and sum to
    1 in each cell. Inference uses the averages, for stations closer than the data's resolution repeat each other.
    """
    start = distance.min()
    cell = np.floor((distance - start) / width + 1e-9).astype(int) if width > 0 else np.arange(distance.size)
    _, cell = np.unique(cell, return_inverse=True)
    weights = np.ones(distance.size) if sigma is None else 1.0 / sigma**2
    matrix = np.zeros((int(cell.max()) + 1, distance.size))
    matrix[cell, np.arange(distance.size)] = weights
    return matrix / matrix.sum(axis=1, keepdims=True)
