"""Trials of the break of a uniform plate, in closed form from the same plate unbroken.

Between stations the load q is linear, so that q / k solves (D w')''' + k w = q there, and what is left comes from the
stations x_j where its slope changes by c_j. With t = |x - x_j| / alpha, alpha = (4 D / k)^(1/4), the unbroken plate has

    w = q / k + sum_j  alpha c_j / (4 k) e^-t (cos t - sin t)
    M = -D w''  = -D sum_j  c_j / (2 k alpha) e^-t (cos t + sin t)
    V = -D w''' =  D sum_j  c_j / (k alpha^2) e^-t sin t sgn(x - x_j)

A plate broken at b is the unbroken one beyond b, its moment and shear there undone by the end forces V0 = V(b) and
M0 = M(b), whose deflection, with s = (x - b) / alpha, is

    w = alpha^2 / (2 D) e^-s [(V0 alpha + M0) cos s - M0 sin s]

and a line load V0 at b of an unbroken plate gives w = V0 alpha^3 / (8 D) e^-|s| (cos s + sin |s|) (Turcotte & Schubert,
Geodynamics, section 3.16; Hetenyi, Beams on Elastic Foundation, chapter 2; both from memory). So the plate is solved
once for all breaks.
"""

from __future__ import annotations

from dataclasses import replace
from functools import lru_cache

import numpy as np

from .elastic import flexural_parameter
from .forward import TransectModel
from .plate import CONTINUES
from .settings import BROKEN, CONTINUOUS


def is_uniform(model: TransectModel) -> bool:
    """Whether a model is a plate of one rigidity and one stiffness, without in-plane force, that runs on at its end."""
    return (
        type(model) is TransectModel
        and model.fill is None
        and not model.in_plane
        and model.start is None
        and model.finish == CONTINUES
        and np.ptp(model.stiffness) == 0
    )


class UniformBreak:
    """Predicted surfaces of a uniform plate (`is_uniform`) at fixed positions, for any thickness and break."""

    def __init__(self, model: TransectModel, positions: np.ndarray) -> None:
        """``positions``: where the surface is predicted, m, shape (N,)."""
        self.model, self.positions = model, positions
        whole = replace(model, kind=CONTINUOUS, shear=False, moment=False)

        @lru_cache(maxsize=1)
        def unbroken(thicknesses: bytes) -> tuple[np.ndarray, np.ndarray]:
            return whole.columns(np.frombuffer(thicknesses), 0.0, positions)

        self._unbroken = unbroken

    def columns(self, thicknesses: np.ndarray, break_position: float) -> tuple[np.ndarray, np.ndarray]:
        """Offsets (T, N) and columns (T, N, p) as `TransectModel.columns` gives them, for thicknesses (T,), m; before
        the break of a broken plate they hold the regional alone."""
        offsets, regional = self._unbroken(thicknesses.tobytes())
        rigidity = self.model.elastic.rigidity(thicknesses)[:, None]
        stiffness = float(self.model.stiffness[0])
        alpha = flexural_parameter(rigidity, stiffness)
        turned = np.exp((1j - 1.0) * np.abs(self.positions - break_position) / alpha)
        names = self.model.end_forces
        columns = np.concatenate([np.zeros((*offsets.shape, len(names))), regional], axis=2)
        if self.model.kind != BROKEN:
            if names:
                columns[:, :, 0] = -(alpha**3 / (8.0 * rigidity)) * (turned.real + turned.imag)
            return offsets, columns
        shear, moment = self._at_break(break_position, rigidity, stiffness, alpha)
        size = alpha**2 / (2.0 * rigidity)
        by_shear, by_moment = size * alpha * turned.real, size * (turned.real - turned.imag)
        beyond = self.positions >= break_position
        by_shear[:, ~beyond] = by_moment[:, ~beyond] = 0.0
        for place, name in enumerate(names):
            columns[:, :, place] = -(by_shear if name == "end_shear" else by_moment)
        return np.where(beyond, offsets, 0.0) - shear * by_shear - moment * by_moment, columns

    def _at_break(self, place: float, rigidity, stiffness: float, alpha) -> tuple[np.ndarray, np.ndarray]:
        """V and M of the unbroken plate at a place, m, each (T, 1)."""
        distance, load = self.model.distance, self.model.load
        bends = np.diff(np.diff(load) / np.diff(distance), prepend=0.0, append=0.0)
        at = np.flatnonzero(bends)
        apart = place - distance[at]
        turned = np.exp((1j - 1.0) * np.abs(apart) / alpha)
        moment = -rigidity / (2.0 * stiffness * alpha) * ((turned.real + turned.imag) @ bends[at])[:, None]
        shear = rigidity / (stiffness * alpha**2) * (turned.imag @ (np.sign(apart) * bends[at]))[:, None]
        return shear, moment
