"""A thin elastic plate on a fluid in cylindrical bending, by cubic Hermite elements.

    (D w'')'' + (P w')' + k w = q

x runs along the transect in m, deflection w is positive down in m, D is the flexural rigidity in N m, k the restoring
stiffness in Pa/m, q the load in Pa and P the in-plane force in N/m, positive in compression. Internal moment and shear
follow the sign convention of Turcotte & Schubert (Geodynamics, section 3.9) and of Hetenyi (Beams on Elastic
Foundation): M = -D w'' is positive where the plate sags, V = dM/dx - P dw/dx, hence dV/dx = k w - q.

Unknowns are deflection and slope at every node. The energy of the plate,

    1/2 int D w''^2 - P w'^2 + k w^2 dx,

gives a symmetric matrix of half-bandwidth 3; a free end is its natural condition. Where the plate runs on past an end,
the exact stiffness of a decaying half-plate is added there (`half_plate_stiffness`).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.linalg.lapack import dpbtrf, dpbtrs

from . import check
from .errors import DownwarpError

CONTINUES, BROKEN, PINNED, CLAMPED = range(4)
"""What holds an end of the plate: it runs on for ever, it ends free, it cannot sink, it can neither sink nor turn."""

SUPPORT_NAMES = ("continues", "broken", "pinned", "clamped")

# Four Gauss points integrate the products of cubic shape functions (degree 6) without error.
_GAUSS, _WEIGHTS = np.polynomial.legendre.leggauss(4)
_GAUSS = 0.5 * (_GAUSS + 1.0)
_WEIGHTS = 0.5 * _WEIGHTS


def _shape(t, derivative: int = 0) -> np.ndarray:
    """Cubic Hermite shape functions of local coordinate t in 0..1, or their derivative by t, shape (4, ...).

    They multiply deflection and (element length x slope) at the left node, then the same at the right one.
    """
    t = np.asarray(t, dtype=float)
    one = np.ones_like(t)
    if derivative == 0:
        return np.stack([1 - 3 * t**2 + 2 * t**3, t - 2 * t**2 + t**3, 3 * t**2 - 2 * t**3, t**3 - t**2])
    if derivative == 1:
        return np.stack([6 * t**2 - 6 * t, 1 - 4 * t + 3 * t**2, 6 * t - 6 * t**2, 3 * t**2 - 2 * t])
    if derivative == 2:
        return np.stack([12 * t - 6, 6 * t - 4, 6 - 12 * t, 6 * t - 2])
    return np.stack([12 * one, 6 * one, -12 * one, 6 * one])


# The ten entries on and below the diagonal of an element's 4 x 4 matrix, those that multiply no slope first, then from
# _ONE_SLOPE on those that multiply one, and from _TWO_SLOPES on those that multiply two.
_ENTRIES = ((0, 0), (2, 0), (2, 2), (1, 0), (3, 0), (2, 1), (3, 2), (1, 1), (3, 1), (3, 3))
_ROWS, _COLUMNS = np.array(_ENTRIES).T
_ONE_SLOPE, _TWO_SLOPES = 3, 7
# Their places in the two columns of the band that belong to an element's left node, then in those of its right one.
_IN_BLOCKS = 4 * _COLUMNS + _ROWS - _COLUMNS

_SHAPES = tuple(_shape(_GAUSS, derivative) for derivative in range(3))
_FLOAT, _PULL, _BEND = (shape[_ROWS] * shape[_COLUMNS] * _WEIGHTS for shape in _SHAPES)  # each (10 entries, 4 points)
_BEND_AT, _FLOAT_AT = ({4: part, 1: part.sum(axis=1, keepdims=True)} for part in (_BEND, _FLOAT))
"""The same by the number of Gauss points at which a property is given: at all, or at one that stands for them."""
_LOAD = (_SHAPES[0] * _WEIGHTS) @ np.stack([1 - _GAUSS, _GAUSS]).T  # (4 unknowns, 2 ends)

# Share of the answer that rounding spoils (`Plate._rounding`) above which `solve` refines it, above which refining is
# in vain, and what it refines to, in so many steps at most.
_EPSILON = float(np.finfo(float).eps)
_REFINE_ABOVE = 1e-6
_ROUNDING_LIMIT = 0.1
_REFINE_TO = 1e-12
_REFINEMENTS = 20


def _combine(matrix: np.ndarray, terms: np.ndarray) -> np.ndarray:
    """``matrix`` times ``terms`` over the first axis of both, whatever the other axes of ``terms``."""
    return (matrix @ terms.reshape(terms.shape[0], -1)).reshape(-1, *terms.shape[1:])


def gauss_positions(nodes) -> np.ndarray:
    """Positions, m, at which a property that varies within elements is to be given: shape (elements, 4)."""
    nodes = np.asarray(nodes, dtype=float)
    return nodes[:-1, None] + np.diff(nodes)[:, None] * _GAUSS


def half_plate_stiffness(rigidity: float, stiffness: float, in_plane: float = 0.0) -> np.ndarray:
    """Stiffness of the half-plate x > 0 that decays to rest, for (w, w') at x = 0; shape (2, 2).

    The characteristic polynomial D m^4 + P m^2 + k factors into D (m^2 + s m + p)(m^2 - s m + p) with p = sqrt(k / D)
    and s^2 = 2 p - P / D. The decaying solutions obey w'' = -s w' - p w, hence the symmetric matrix

        D [[s p, p], [p, s]]

    that gives the force (positive down, N/m) and the moment conjugate to w', -D w'' (N), at x = 0. For the half-plate
    x < 0 the off-diagonal terms change sign. Raises DownwarpError where no decaying solution exists: P reaches the
    buckling force 2 sqrt(D k), or k is not positive.
    """
    if stiffness <= 0:
        raise DownwarpError("A plate that continues beyond its end needs a restoring stiffness k above 0 there.")
    p = math.sqrt(stiffness / rigidity)
    s_squared = 2.0 * p - in_plane / rigidity
    if s_squared <= 1e-12 * p:
        raise DownwarpError(
            "IN_PLANE is {in_plane:g} N/m, at or above the force of {force:.4g} N/m at which the plate buckles.",
            in_plane=in_plane,
            force=2.0 * math.sqrt(rigidity * stiffness),
        )
    s = math.sqrt(s_squared)
    return rigidity * np.array([[s * p, p], [p, s]])


@dataclass(frozen=True)
class Plate:
    """A plate on nodes along the transect; factorised once, on first use, for any number of loads."""

    nodes: np.ndarray
    """Positions of the nodes, m, strictly increasing, shape (n,)."""
    rigidity: np.ndarray
    """D, N m: a scalar, one value per element (n - 1,), or values at `gauss_positions` (n - 1, 4)."""
    stiffness: np.ndarray
    """k, Pa/m, 0 or more, shaped like `rigidity` may be."""
    in_plane: float = 0.0
    """P, N/m, compression positive."""
    start: int = CONTINUES
    """What holds the plate at its first node."""
    finish: int = CONTINUES
    """What holds the plate at its last node."""

    def __post_init__(self) -> None:
        nodes = check.increasing("nodes", self.nodes)
        object.__setattr__(self, "nodes", nodes)
        for name in ("rigidity", "stiffness"):
            values = check.finite_array(name, getattr(self, name))
            elements = nodes.size - 1
            if values.shape not in ((), (elements,), (elements, 4)):
                raise DownwarpError(
                    "{name} has shape {shape}; it takes a scalar, ({elements},) or ({elements}, 4).",
                    name=name,
                    shape=values.shape,
                    elements=elements,
                )
            object.__setattr__(self, name, values)
        if not (self.rigidity > 0).all():
            raise DownwarpError("Flexural rigidity must be above 0 everywhere.")
        if not (self.stiffness >= 0).all():
            raise DownwarpError("Restoring stiffness must be 0 or more everywhere.")
        check.number("IN_PLANE", self.in_plane)
        for name in ("start", "finish"):
            if getattr(self, name) not in (CONTINUES, BROKEN, PINNED, CLAMPED):
                raise DownwarpError("{name} is {value!r}; it takes 0 to 3.", name=name, value=getattr(self, name))

    @cached_property
    def lengths(self) -> np.ndarray:
        """Lengths of the elements, m."""
        return np.diff(self.nodes)

    @cached_property
    def scale(self) -> float:
        """Length, m, by which slopes are multiplied inside, so that both unknowns of a node have one unit."""
        return float(self.nodes[-1] - self.nodes[0]) / self.lengths.size

    @cached_property
    def _spans(self) -> np.ndarray:
        """`lengths` as they enter products: one alone where all are the same but for the rounding of the nodes."""
        h = self.lengths
        even = h.max() - h.min() <= 8.0 * _EPSILON * max(abs(self.nodes[0]), abs(self.nodes[-1]))
        return np.array([self.scale]) if even else h

    @cached_property
    def _ratio(self) -> np.ndarray:
        """`_spans` / scale, by which an element multiplies the slopes among the unknowns."""
        return self._spans / self.scale

    @cached_property
    def _ends(self) -> tuple[tuple[slice, float, np.ndarray], ...]:
        """For each end where the plate continues: its two unknowns, k there, and the half-plate's matrix for them."""
        ends = []
        for support, node, sign in ((self.start, 0, -1.0), (self.finish, -1, 1.0)):
            if support == CONTINUES:
                stiffness = float(self.stiffness.flat[node])
                matrix = half_plate_stiffness(float(self.rigidity.flat[node]), stiffness, self.in_plane)
                matrix[0, 1] *= sign / self.scale
                matrix[1, 0] *= sign / self.scale
                matrix[1, 1] /= self.scale**2
                ends.append((slice(0, 2) if node == 0 else slice(-2, None), stiffness, matrix))
        return tuple(ends)

    @property
    def band(self) -> np.ndarray:
        """The matrix in LAPACK's lower band storage, shape (4, 2 n), Fortran order, made anew at each call."""
        return self._assembled()[0]

    def _assembled(self) -> tuple[np.ndarray, float]:
        """`band`, and the rounding that it carries (`_rounding`)."""
        h = self._spans
        bending, floating = self._by_point("rigidity") / (h * h * h), self._by_point("stiffness") * h
        # Where all elements are alike these hold one column, which stands for all.
        bent, borne = _BEND_AT[len(bending)] @ bending, _FLOAT_AT[len(floating)] @ floating
        rounding = self._rounding(float(bent[0].sum()) / bent.shape[1], float(borne[0].sum()) / borne.shape[1])
        entries = bent + borne
        if self.in_plane:
            entries -= self.in_plane * _PULL.sum(axis=1)[:, None] / h
        entries[_ONE_SLOPE:] *= self._ratio
        entries[_TWO_SLOPES:] *= self._ratio

        if entries.shape[1] == 1:
            band = self._repeated(entries[:, 0])
        else:
            band = np.zeros((4, 2 * self.nodes.size), order="F")
            for (row, column), entry in zip(_ENTRIES, entries):
                band[row - column, column : column + 2 * self.lengths.size : 2] += entry
        for at, _, matrix in self._ends:
            band[0, at] += matrix.diagonal()
            band[1, at.start] += matrix[1, 0]
        for unknown in self._held:
            band[1:, unknown] = 0.0
            for below in range(1, min(3, unknown) + 1):
                band[below, unknown - below] = 0.0
            band[0, unknown] = 1.0
        return band, rounding

    def _repeated(self, entries: np.ndarray) -> np.ndarray:
        """The band of elements that are all alike, (4, 2 n), from one's entries (10,)."""
        blocks = np.zeros(16)
        blocks[_IN_BLOCKS] = entries
        left, right = blocks.reshape(2, 1, 8)
        band = (left + right).repeat(self.nodes.size, axis=0)
        band[0], band[-1] = left[0], right[0]
        return band.reshape(-1, 4).T

    def _by_point(self, name: str) -> np.ndarray:
        """``rigidity`` or ``stiffness`` at each element's Gauss points, (4, elements), or (1, ...) where all are one."""
        values = getattr(self, name)
        return values.T if values.ndim == 2 else values.reshape(1, -1)

    def _rounding(self, bending: float, floating: float) -> float:
        """Rounding in the bending entries beside what holds the plate: about the share of the answer that it spoils.

        ``bending``, ``floating``: means over the elements of the entries that multiply no slope. The former grows with
        1 / length^3. Against it stands the stiffness that meets a shift of the whole plate: of the foundation, of the
        half-plates, and that of its own bending between held ends (that of a beam of length L on pins, pi^4 D / 2 L^3).
        """
        count = self.lengths.size
        holding = 2.0 * count * floating + sum(matrix[0, 0] for _, _, matrix in self._ends)
        if self._held:
            holding += 0.5 * math.pi**4 * self.rigidity.min() / (self.nodes[-1] - self.nodes[0]) ** 3
        return 2.0 * _EPSILON * count * bending / holding

    @cached_property
    def _held(self) -> tuple[int, ...]:
        """Indices of the unknowns that pinned and clamped ends hold at 0."""
        last = 2 * self.nodes.size - 2
        supports = ((self.start, 0), (self.finish, last))
        return tuple(
            at + turn
            for support, at in supports
            for turn in (0, 1)
            if support == CLAMPED or (support == PINNED and turn == 0)
        )

    @property
    def factor(self) -> np.ndarray:
        """Band Cholesky factor (LAPACK dpbtrf); raises DownwarpError where the matrix is not positive definite."""
        return self._factored[0]

    @cached_property
    def _factored(self) -> tuple[np.ndarray, float]:
        # Without a foundation, two held unknowns, or one and a pull along x, keep the plate in its place.
        if not self._ends and len(self._held) + (self.in_plane < 0) < 2 and not self.stiffness.any():
            raise DownwarpError(
                "Nothing holds the plate: give it a restoring stiffness or ends that are pinned or clamped."
            )
        band, rounding = self._assembled()
        factor, info = dpbtrf(band, lower=1, overwrite_ab=1)
        if rounding > _ROUNDING_LIMIT or (info != 0 and self.in_plane <= 0):
            raise self._too_close()
        if info != 0:
            raise DownwarpError(
                "IN_PLANE is {in_plane:g} N/m: more in-plane compression than the plate can carry; it buckles.",
                in_plane=self.in_plane,
            )
        return factor, rounding

    def load_vector(self, load, beyond: bool = True, at=None) -> np.ndarray:
        """Nodal forces of distributed loads, shape (2 n, loads).

        ``load``: q, Pa, positive down; shape (n,) or (n, loads) at the nodes, linear between them, or
        (elements, 2, loads) at both ends of each element, so that it may jump at nodes. With ``at``, the load is given
        at those positions (m, increasing, from the first node or before it to the last one or beyond), shape
        (positions,) or (positions, loads): a finely sampled load then keeps its detail on longer elements. With
        ``beyond``, the load at an end where the plate continues is held constant beyond it (it enters through
        w = q / k).
        """
        forces, outer = self._element_loads(load, at)
        vector = self._assemble(forces)
        return vector + self.beyond_vector(outer[0], outer[-2]) if beyond else vector

    def beyond_vector(self, first, last) -> np.ndarray:
        """Nodal forces, (2 n, loads), of loads held constant beyond the ends where the plate continues.

        ``first``, ``last``: q at the first and at the last node, Pa, shape (loads,).
        """
        vector = np.zeros((2 * self.nodes.size, len(first)), order="F")
        for end, stiffness, matrix in self._ends:
            vector[end] = matrix[:, :1] * ((last if end.start else first) / stiffness)
        return vector

    def _assemble(self, forces: np.ndarray) -> np.ndarray:
        """Forces on every element's four unknowns, (4, elements, loads), summed at the nodes, (2 n, loads)."""
        nodes, loads = self.nodes.size, forces.shape[2]
        vector = np.zeros((2, nodes, loads), order="F")
        vector[:, :-1] = forces[:2]
        vector[:, 1:] += forces[2:]
        return vector.reshape(2 * nodes, loads, order="F")

    def _element_loads(self, load, at=None) -> tuple[np.ndarray, dict[int, np.ndarray]]:
        """Forces of a distributed load on each element's four unknowns, (4, elements, loads), and the load at the first
        and at the last node, under the keys 0 and -2 (the first of the two unknowns there)."""
        load = check.finite_array("load", load)
        if at is not None:
            return self._element_loads_between(load, at)
        elements = self.lengths.size
        if load.ndim in (1, 2) and load.shape[0] == elements + 1:
            load = load.reshape(elements + 1, -1)
            left, right = load[:-1], load[1:]
        elif load.ndim == 3 and load.shape[:2] == (elements, 2):
            left, right = load[:, 0], load[:, 1]
        else:
            raise DownwarpError(
                "load has shape {shape}; it takes ({nodes},), ({nodes}, m) or ({elements}, 2, m).",
                shape=load.shape,
                nodes=elements + 1,
                elements=elements,
            )
        forces = _combine(_LOAD, np.stack([left, right]) * self._spans[:, None])
        forces[1::2] *= self._ratio[:, None]
        return forces, {0: left[0], -2: right[-1]}

    def _element_loads_between(self, load: np.ndarray, at) -> tuple[np.ndarray, dict[int, np.ndarray]]:
        """`_element_loads` of a load linear between positions ``at`` that need not be nodes, without error."""
        at = check.increasing("at", at)
        if load.ndim not in (1, 2) or load.shape[0] != at.size:
            raise DownwarpError(
                "load has shape {shape}; it takes ({count},) or ({count}, m).", shape=load.shape, count=at.size
            )
        if at[0] > self.nodes[0] or at[-1] < self.nodes[-1]:
            raise DownwarpError("The positions of the load must reach from the first node to the last one.")
        load = load.reshape(at.size, -1)
        # Between neighbouring cuts the load is linear and the shape functions are cubic.
        cuts = np.union1d(self.nodes, at[(at > self.nodes[0]) & (at < self.nodes[-1])])
        before = np.clip(np.searchsorted(at, cuts, side="right") - 1, 0, at.size - 2)
        share = ((cuts - at[before]) / (at[before + 1] - at[before]))[:, None]
        values = (1.0 - share) * load[before] + share * load[before + 1]
        firsts = np.searchsorted(cuts, self.nodes[:-1])
        element = np.repeat(np.arange(self.lengths.size), np.diff(np.append(firsts, cuts.size - 1)))
        local = (gauss_positions(cuts) - self.nodes[element, None]) / self.lengths[element, None]
        weights = _shape(local) * np.diff(cuts)[:, None] * _WEIGHTS
        forces = (weights @ (1.0 - _GAUSS))[:, :, None] * values[:-1] + (weights @ _GAUSS)[:, :, None] * values[1:]
        forces = np.add.reduceat(forces, firsts, axis=1)
        forces[1::2] *= self._ratio[:, None]
        return forces, {0: values[0], -2: values[-1]}

    def end_vector(self, shear: float = 0.0, moment: float = 0.0, finish: bool = False) -> np.ndarray:
        """Nodal forces, shape (2 n, 1), of end shear V0 (N/m, positive down) and end moment M0 (N, positive where it
        turns the broken end down)."""
        return self.point_vector(-1 if finish else 0, shear, moment if finish else -moment)

    def point_vector(self, node: int, force: float = 0.0, couple: float = 0.0) -> np.ndarray:
        """Nodal forces, shape (2 n, 1), of a line load (N/m, down) and a couple conjugate to w' (N) at a node."""
        vector = np.zeros((2 * self.nodes.size, 1))
        at = 2 * (node % self.nodes.size)
        vector[at, 0] = check.number("force", force)
        vector[at + 1, 0] = check.number("couple", couple) / self.scale
        return vector

    def solve(self, vector: np.ndarray) -> Bending:
        """Bend the plate under nodal forces ``vector`` of shape (2 n,) or (2 n, loads), all in one call."""
        vector = self._nodal_forces("vector", vector)
        unknowns = self._substitute(vector)
        if self._factored[1] > _REFINE_ABOVE:
            unknowns = self._refine(vector, unknowns)
        return Bending(self, unknowns)

    def bend(self, load, forces: np.ndarray | None = None, at=None) -> Bending:
        """Bend the plate under distributed ``load`` (with ``at``, as `load_vector` takes them) and nodal ``forces``.

        Unlike `solve`, which does so only where elements are very short beside the flexural parameter, it always
        refines the answer until forces balance to rounding.
        """
        vector = self.load_vector(load, at=at)
        if forces is not None:
            vector = vector + self._nodal_forces("forces", forces)
        return Bending(self, self._refine(vector, self._substitute(vector)), load, at)

    def _nodal_forces(self, name: str, values) -> np.ndarray:
        """Nodal forces that a caller gave, as columns."""
        values = check.finite_array(name, values)
        if values.ndim not in (1, 2) or values.shape[0] != 2 * self.nodes.size:
            raise DownwarpError(
                "{name} has shape {shape}; it takes {size} rows.",
                name=name,
                shape=values.shape,
                size=2 * self.nodes.size,
            )
        return values.reshape(values.shape[0], -1)

    def _substitute(self, vector: np.ndarray) -> np.ndarray:
        """The unknowns under nodal forces (2 n, loads), by the factor."""
        vector = np.array(vector, order="F")
        for unknown in self._held:
            vector[unknown] = 0.0
        return dpbtrs(self.factor, vector, lower=1, overwrite_b=1)[0]

    def _refine(self, vector: np.ndarray, unknowns: np.ndarray) -> np.ndarray:
        """``unknowns`` corrected by what is left of ``vector``, again and again, each time by a fraction of before."""
        top = previous = abs(unknowns).max()
        for _ in range(_REFINEMENTS):
            correction = self._substitute(vector - self._resistance(unknowns))
            unknowns = unknowns + correction
            size = abs(correction).max()
            if size * size <= _REFINE_TO * top * previous:  # the next correction: size * (size / previous)
                return unknowns
            previous = size
        raise self._too_close()

    def _too_close(self) -> DownwarpError:
        return DownwarpError(
            "The nodes stand {spacing:.3g} m apart, too close for so stiff a plate: rounding would spoil the answer; "
            "take longer steps.",
            spacing=self.scale,
        )

    def _resistance(self, unknowns: np.ndarray) -> np.ndarray:
        """Nodal forces that hold the plate in a bent state: the matrix times ``unknowns``."""
        vector = self._assemble(self._element_forces(unknowns))
        for end, _, matrix in self._ends:
            vector[end] += matrix @ unknowns[end]
        return vector

    def _element_forces(self, unknowns: np.ndarray) -> np.ndarray:
        """Forces that act on each element's four unknowns in the bent state, shape (4, elements, loads).

        Bending, in-plane force and foundation are applied one by one, the first two to deflections less that of the
        left node: in short elements the sum of their matrices loses the digits of the foundation.
        """
        h = self._spans
        ends = np.stack([unknowns[i : unknowns.shape[0] - 3 + i : 2] for i in range(4)])
        ends[1::2] *= self._ratio[:, None]
        forces = self._act(0, self._by_point("stiffness") * h, ends)
        ends[2] -= ends[0]
        ends[0] = 0.0
        forces += self._act(2, self._by_point("rigidity") / (h * h * h), ends)
        if self.in_plane:
            forces -= self._act(1, self.in_plane / h[None], ends)
        forces[1::2] *= self._ratio[:, None]
        return forces

    @staticmethod
    def _act(derivative: int, resistance: np.ndarray, ends: np.ndarray) -> np.ndarray:
        """Forces on the unknowns ``ends`` of what resists a derivative of w by t; ``resistance`` as `_by_point`."""
        shape = _SHAPES[derivative]
        felt = _combine(shape.T, ends)
        felt *= (resistance * _WEIGHTS[:, None])[:, :, None]
        return _combine(shape, felt)


@dataclass(frozen=True)
class Bending:
    """Deflection of a plate under one or more loads."""

    plate: Plate
    unknowns: np.ndarray
    """(w, scale w') at every node, shape (2 n, loads)."""
    load: np.ndarray | None = None
    """The distributed load, Pa, where there is one."""
    load_at: np.ndarray | None = None
    """Positions, m, of the load's values where they are not the nodes."""

    @property
    def deflection(self) -> np.ndarray:
        """w at the nodes, m, positive down, shape (n, loads)."""
        return self.unknowns[0::2]

    @property
    def slope(self) -> np.ndarray:
        """w' at the nodes, 1, shape (n, loads)."""
        return self.unknowns[1::2] / self.plate.scale

    @cached_property
    def _end_forces(self) -> np.ndarray:
        """What each element's neighbours exert on its four unknowns, shape (4, elements, loads)."""
        forces = self.plate._element_forces(self.unknowns)
        if self.load is not None:
            forces -= self.plate._element_loads(self.load, self.load_at)[0]
        return forces

    def moment_and_shear(self) -> tuple[np.ndarray, np.ndarray]:
        """Moment M = -D w'' (N) and shear V = dM/dx - P w' (N/m) at the nodes, each of shape (n, loads).

        They are the forces between neighbouring elements, hence in equilibrium with loads and ends to rounding; at a
        node that carries a line load or a couple they are the values on its right (on its left at the last node).
        """
        forces = self._end_forces
        shear = -np.concatenate([forces[0], -forces[2, -1:]])
        moment = np.concatenate([forces[1], -forces[3, -1:]]) * self.plate.scale
        return moment, shear

    def moment_and_shear_at(self, positions) -> tuple[np.ndarray, np.ndarray]:
        """M (N) and V (N/m) at positions (m) within the nodes, each of shape (positions, loads).

        Between the nodes M is the cubic with the nodes' moments and slopes dM/dx = V + P w': of fourth order in the
        elements' lengths, V of third, where w'' and the third derivative of `at` are of second and first.
        """
        element, local = self._locate(positions)
        h = self.plate.lengths[element][:, None]
        forces = self._end_forces[:, element]
        pull = self.plate.in_plane * self.slope
        ends = np.stack(
            [
                forces[1] * self.plate.scale,
                h * (pull[element] - forces[0]),
                -forces[3] * self.plate.scale,
                h * (pull[element + 1] + forces[2]),
            ]
        )
        moment = (_shape(local)[:, :, None] * ends).sum(axis=0)
        rise = (_shape(local, 1)[:, :, None] * ends).sum(axis=0) / h
        return moment, rise - self.plate.in_plane * self.at(positions, 1)

    def support_forces(self) -> tuple[np.ndarray, np.ndarray]:
        """Vertical force, N/m, positive up, that what lies beyond the start and beyond the finish exerts on the plate,
        each of shape (loads,): of a half-plate (less the share of a load held constant beyond), a pin or a clamp, 0 at
        a broken end. With `foundation_force` it balances the load and all nodal forces (but those on held unknowns).
        """
        plate = self.plate
        free = np.zeros(self.unknowns.shape[1])
        start = -self._end_forces[0, 0] if plate.start in (PINNED, CLAMPED) else free
        finish = -self._end_forces[2, -1] if plate.finish in (PINNED, CLAMPED) else free
        supports = {0: start, -2: finish}
        outer = None if self.load is None else plate._element_loads(self.load, self.load_at)[1]
        for end, stiffness, matrix in plate._ends:
            supports[end.start] = matrix[0] @ self.unknowns[end]
            if outer is not None:
                supports[end.start] -= matrix[0, 0] * outer[end.start] / stiffness
        return supports[0], supports[-2]

    def foundation_force(self) -> np.ndarray:
        """Total restoring force of the foundation under the nodes' span, int k w dx, N/m, shape (loads,)."""
        points = gauss_positions(self.plate.nodes)
        weights = self.plate._by_point("stiffness").T * self.plate.lengths[:, None] * _WEIGHTS
        return weights.ravel() @ self.at(points.ravel())

    def at(self, positions, derivative: int = 0) -> np.ndarray:
        """w or a derivative of it at positions (m) within the nodes, by the elements' cubics, (positions, loads)."""
        element, local = self._locate(positions)
        shape = _shape(local, derivative) / self.plate.lengths[element] ** derivative
        shape[1::2] *= self.plate.lengths[element] / self.plate.scale
        return sum(shape[i][:, None] * self.unknowns[2 * element + i] for i in range(4))

    def _locate(self, positions) -> tuple[np.ndarray, np.ndarray]:
        """The element in which each position lies, and its local coordinate there, 0..1."""
        positions = np.asarray(positions, dtype=float)
        nodes = self.plate.nodes
        element = np.clip(np.searchsorted(nodes, positions, side="right") - 1, 0, nodes.size - 2)
        return element, (positions - nodes[element]) / self.plate.lengths[element]
