"""A plate that weakens towards its break: two zones of elastic thickness, or a thickness given along the line.

The thickness that a fit searches is that *beyond* the change; nearer to the break the plate is `ZonedModel.share` times
as thick. Both models are forward models like `forward.TransectModel` and stand wherever one of those does.

`ZoneSearch` lays the trials of share and change on one axis, so that a search over thickness and a second parameter
(`posterior.thickness_posterior` with its breaks) serves for all three, and turns its posterior into intervals.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, fields

import numpy as np

from . import check
from .errors import DownwarpError
from .forward import TransectModel
from .plate import gauss_positions
from .posterior import OPEN, Interval, Posterior
from .settings import BROKEN
from .wording import say

LEAST_SHARE = 0.2
"""Thickness near the break over that beyond, at least, in a search."""
SHARES = 9
"""Trials of it, even in its logarithm, up to `MOST_SHARE`."""
MOST_SHARE = 0.9
"""And at most: a plate that weakens by less is one zone for all that a line can tell."""
CHANGES = 9
"""Trials of the distance of the change."""
WANTED = 5
"""Trials of share and of change that are wanted within `FAR`."""
FAR = 5.0
"""ln of the weight below its largest at which a trial no longer matters."""
ROUNDS = 3
"""Refinements of a search after which it takes what it has."""
HELD = 1.0
"""Distance, m, to either side of a change that is held at which it is tried."""
CELLS = 200
"""Cells in which a posterior is gathered for its interval."""


@dataclass(frozen=True)
class ZonedModel(TransectModel):
    """Two zones of uniform thickness, welded at a distance from the break (from the line's start where there is none).

    >>> line, load, stiffness = np.array([0.0, 300e3]), np.zeros(2), np.array([22e3])
    >>> model = ZonedModel(line, load, stiffness, Elastic(), share=0.5, change=50e3)
    >>> model.thickness_at(30e3, 0.0, np.array([49e3, 51e3]))
    array([15000., 30000.])
    """

    share: float = 1.0
    """Thickness nearer than the change over that beyond it, 1."""
    change: float = 0.0
    """Distance of the change from the break, m."""

    def __post_init__(self) -> None:
        check.number(say("the share of the thickness"), self.share, above=0)
        check.number(say("the distance of the change"), self.change, at_least=0)

    def thickness_jumps(self, break_position: float) -> np.ndarray:
        """The place of the change, m."""
        begin = break_position if self.kind == BROKEN else float(self.distance[0])
        return np.array([begin + self.change])

    def thickness_at(self, thickness: float, break_position: float, positions: np.ndarray) -> np.ndarray:
        """Elastic thickness, m, at positions, m; ``thickness``: that from the change on."""
        near = np.asarray(positions) < self.thickness_jumps(break_position)[0]
        return np.where(near, self.share * thickness, thickness)

    def rigidity(self, thickness: float, break_position: float, nodes: np.ndarray) -> np.ndarray:
        """Flexural rigidity, N m, of each element, shape (elements,)."""
        return self.elastic.rigidity(self.thickness_at(thickness, break_position, 0.5 * (nodes[1:] + nodes[:-1])))


@dataclass(frozen=True)
class VaryingModel(TransectModel):
    """A thickness given along the line, times one that may be searched (1 to take it as given)."""

    along: np.ndarray = field(default_factory=lambda: np.ones(0))
    """Elastic thickness at the stations, m, or its share of the searched one, linear between them, shape (n,)."""

    def __post_init__(self) -> None:
        along = check.finite_array(say("the elastic thickness along the line"), self.along, ndim=1)
        if along.shape != self.distance.shape:
            raise DownwarpError(
                "The elastic thickness has {count} values for {stations} stations.",
                count=along.size,
                stations=self.distance.size,
            )
        if not (along > 0).all():
            raise DownwarpError("The elastic thickness must be above 0 everywhere along the line.")

    def thickness_at(self, thickness: float, break_position: float, positions: np.ndarray) -> np.ndarray:
        """Elastic thickness, m, at positions, m."""
        return thickness * np.interp(positions, self.distance, self.along)

    def thinnest(self, thickness: float, break_position: float, places: np.ndarray) -> np.ndarray:
        """The least thickness of the line, m, between all places."""
        return np.full(places.size - 1, thickness * self.along.min())

    def rigidity(self, thickness: float, break_position: float, nodes: np.ndarray) -> np.ndarray:
        """Flexural rigidity, N m, at the Gauss points, shape (elements, 4)."""
        return self.elastic.rigidity(self.thickness_at(thickness, break_position, gauss_positions(nodes)))


def zoned(model: TransectModel, share: float, change: float) -> ZonedModel:
    """``model`` with two zones: ``share`` of the thickness up to ``change``, m, from the break."""
    return ZonedModel(**_parts(model), share=share, change=change)


def varying(model: TransectModel, along: np.ndarray) -> VaryingModel:
    """``model`` with the thickness ``along`` its stations, m; it is then bent at a thickness of 1."""
    return VaryingModel(**_parts(model), along=along)


def _parts(model: TransectModel) -> dict:
    return {each.name: getattr(model, each.name) for each in fields(TransectModel)}


@dataclass(frozen=True)
class Zones:
    """What a search over two zones comes to."""

    near: float
    """Elastic thickness nearer than the change at the joint mode, m."""
    near_interval: Interval
    """m."""
    beyond: float
    """Elastic thickness beyond the change, m."""
    beyond_interval: Interval
    """m."""
    change: float
    """Distance of the change from the break, m."""
    change_interval: Interval
    """m."""
    reduction: float
    """1 less near over beyond at the mode, 1."""


@dataclass(frozen=True)
class ZoneSearch:
    """Trials of two zones laid on one axis: places 0, 1, 2, ... stand for pairs of share and change.

    The path goes to and fro through the changes, so that neighbouring places are neighbouring plates; a place between
    two of them stands for the nearer one.
    """

    shares: np.ndarray
    """Thickness near over thickness beyond, 1, shape (s,), even in its logarithm."""
    changes: np.ndarray
    """Distance of the change from the break, m, shape (c,), even."""
    first: ZoneSearch | None = None
    """The search that this one refines; None where it is the first."""

    def __post_init__(self) -> None:
        object.__setattr__(self, "shares", check.increasing(say("the shares"), self.shares))
        object.__setattr__(self, "changes", check.increasing(say("the distances of the change"), self.changes))
        if self.shares[0] <= 0 or self.changes[0] < 0:
            raise DownwarpError("Shares of the thickness must be above 0, distances of its change 0 or more.")

    @classmethod
    def between(cls, change_from: float, change_to: float) -> ZoneSearch:
        """The search of a change between two distances from the break, m."""
        return cls(np.geomspace(LEAST_SHARE, MOST_SHARE, SHARES), np.linspace(change_from, change_to, CHANGES))

    @classmethod
    def held(cls, change: float) -> ZoneSearch:
        """The search of the share alone, for a change at a distance, m, from the break."""
        changes = np.array([max(change - HELD, 0.0), change + HELD])
        return cls(np.geomspace(LEAST_SHARE, MOST_SHARE, SHARES), changes)

    @property
    def places(self) -> np.ndarray:
        """The axis, (s c,), as `posterior.thickness_posterior` takes breaks."""
        return np.arange(float(self.shares.size * self.changes.size))

    @property
    def log_prior(self) -> float:
        """ln of the part of the first search's range that this one covers: it goes to the evidence."""
        whole = self.first or self
        shares = np.log(self.shares[-1] / self.shares[0]) / np.log(whole.shares[-1] / whole.shares[0])
        return float(np.log(shares * np.ptp(self.changes) / np.ptp(whole.changes)))

    def pairs(self, places) -> tuple[np.ndarray, np.ndarray]:
        """Share and change, m, at places on the axis."""
        row, column = self._indices(places)
        return self.shares[row], self.changes[column]

    def _indices(self, places) -> tuple[np.ndarray, np.ndarray]:
        count = self.changes.size
        whole = np.clip(np.floor(np.asarray(places) + 0.5), 0, self.shares.size * count - 1).astype(int)
        row, column = np.divmod(whole, count)
        return row, np.where(row % 2 == 0, column, count - 1 - column)

    def model(self, model: TransectModel, place: float) -> ZonedModel:
        """The forward model at a place on the axis."""
        share, change = self.pairs(place)
        return zoned(model, float(share), float(change))

    def _weights(self, posterior: Posterior) -> np.ndarray:
        """Posterior weight of each share and change, summing to 1, shape (s, c)."""
        weight = np.zeros((self.shares.size, self.changes.size))
        np.add.at(weight, self._indices(posterior.search.grid.breaks), _joint(posterior).sum(axis=1))
        return weight

    def finer(self, posterior: Posterior) -> ZoneSearch | None:
        """The search about what ``posterior`` leaves, None where its trials are close enough.

        They are where, of both share and change, `WANTED` trials have more than exp(-`FAR`) of the largest weight.
        """
        weight = self._weights(posterior)
        axes, enough = [], []
        for axis, values in ((0, np.log(self.shares)), (1, self.changes)):
            marginal = weight.sum(axis=1 - axis)
            near = np.flatnonzero(marginal > np.exp(-FAR) * marginal.max())
            enough.append(near.size >= min(WANTED, values.size))
            low, high = values[max(near[0] - 1, 0)], values[min(near[-1] + 1, values.size - 1)]
            axes.append(np.linspace(low, high, values.size))
        if all(enough):
            return None
        return ZoneSearch(np.exp(axes[0]), axes[1], self.first or self)

    def summary(self, posterior: Posterior, confidence: float) -> Zones:
        """Thicknesses and change with their highest-density intervals, each marginal over the others.

        ``posterior``: of a search for the thickness beyond with `places` for breaks. A side is open where the weight at
        that end of the first search's range is more than `posterior.OPEN` of the largest.
        """
        grid = posterior.search.grid
        joint = _joint(posterior)
        share, _ = self.pairs(grid.breaks)
        mode_share, mode_change = (float(values) for values in self.pairs(posterior.break_at))
        weight = self._weights(posterior)
        at_share, at_change = weight.sum(axis=1), weight.sum(axis=0)
        whole, te = self.first or self, posterior.te_interval
        log_step = np.log(self.shares[1] / self.shares[0])
        low, high = _hull(np.log(share)[:, None] + grid.log_te, joint, confidence, log_step)
        nearest, furthest = _hull(self.changes, at_change, confidence, self.changes[1] - self.changes[0])
        open_share = np.isclose(self.shares[0], whole.shares[0]) and at_share[0] > OPEN * at_share.max()
        open_near, open_far = (
            np.isclose(self.changes[end], whole.changes[end]) and at_change[end] > OPEN * at_change.max()
            for end in (0, -1)
        )
        return Zones(
            mode_share * posterior.te,
            Interval(
                None if te.low is None or open_share else float(np.exp(low)),
                None if te.high is None else float(np.exp(high)),
            ),
            posterior.te,
            te,
            mode_change,
            Interval(None if open_near else nearest, None if open_far else furthest),
            1.0 - mode_share,
        )


def search_zones(run: Callable[[ZoneSearch], Posterior], search: ZoneSearch) -> tuple[ZoneSearch, Posterior]:
    """Refine a search about its own posterior until the trials are close enough (`ROUNDS` times at most).

    ``run`` calls `posterior.thickness_posterior` with the search's `places` for breaks and its `model` for each. The
    evidence against another model is that of the posterior returned plus `ZoneSearch.log_prior` of the search returned.
    """
    posterior = run(search)
    for _ in range(ROUNDS):
        finer = search.finer(posterior)
        if finer is None:
            break
        search, posterior = finer, run(finer)
    return search, posterior


def _joint(posterior: Posterior) -> np.ndarray:
    """Posterior weight of every trial, summing to 1, shape (places, thicknesses)."""
    grid = posterior.search.grid
    log_weight = grid.marginal() / posterior.search.tempering
    weight = np.exp(log_weight - log_weight.max())
    weight[:, [0, -1]] *= 0.5
    return weight / weight.sum()


def _hull(values: np.ndarray, weight: np.ndarray, confidence: float, cell: float) -> tuple[float, float]:
    """Ends of the highest-density set of weighted values (any shape), each of which stands for the even ``cell``
    about it: its weight is spread over the points of a grid that lie in it."""
    values, weight = values.ravel(), weight.ravel()
    known = weight > 1e-9 * weight.max()
    values, weight = values[known], weight[known]
    edges = np.linspace(values.min() - 0.5 * cell, values.max() + 0.5 * cell, CELLS + 1)
    # Distribution function at the edges: each value adds its weight linearly across its own cell.
    below = (np.clip((edges[:, None] - values) / cell + 0.5, 0.0, 1.0) * weight).sum(axis=1)
    density = np.diff(below)
    order = np.argsort(density)[::-1]
    kept = order[: int(np.searchsorted(np.cumsum(density[order]), confidence * density.sum())) + 1]
    return float(edges[kept.min()]), float(edges[kept.max() + 1])
