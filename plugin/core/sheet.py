"""A thin elastic plate in plan view under a mapped load, by its spectrum.

    D (d2/du2 + d2/dv2)^2 w + k w = q        w_hat = q_hat / (D K^4 + k),   K^2 = k_u^2 + k_v^2

u and v are distances in a plane, m, deflection w is positive down in m, the flexural rigidity D (N m) and the restoring
stiffness k (Pa/m) are uniform, there is no in-plane force, and the plate runs on in all directions. A transform repeats
the load for ever; a margin without load keeps the repetitions apart. Sources: Nadai, Die elastischen Platten (1925);
Brotchie & Silvester 1969, Journal of Geophysical Research 74 (both from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import scipy.fft

from . import check
from .elastic import flexural_parameter
from .errors import DownwarpError

LEAST_PAD = 4.0
"""Flexural parameters without load, at least, between the load and its repetitions."""
FEW_ROWS = 24
"""Rows of the grid up to which they are made one by one from the spectrum; beyond, one transform makes all."""


def tapered(load: np.ndarray, cells: int) -> np.ndarray:
    """``load`` (rows, columns) brought down to 0 over its outermost ``cells`` by half a cosine.

    What lies near the edge of a window is cut off there anyway; cut off smoothly, it does not ring.
    """
    ramp = 0.5 - 0.5 * np.cos(np.pi * (np.arange(cells) + 0.5) / max(cells, 1))
    sides = []
    for count in load.shape:
        side = np.ones(count)
        reach = min(cells, count // 2)
        side[:reach] = ramp[:reach]
        side[count - reach :] = np.minimum(side[count - reach :], ramp[:reach][::-1])
        sides.append(side)
    return load * sides[0][:, None] * sides[1]


@dataclass(frozen=True)
class Sheet:
    """A load on a grid of square cells, transformed once for any number of trial plates, one after another.

    >>> sheet = Sheet(np.pad(np.full((3, 3), 1e6), 60), 5e3, 300e3)
    >>> float(sheet.deflection(1e22, 22e3).max().round(1))
    1.8
    """

    load: np.ndarray
    """Mean load of each cell, Pa, positive down, shape (rows, columns)."""
    spacing: float
    """Side of the cells, m."""
    pad: float
    """Width without load, m, that is added on one side of each direction."""

    def __post_init__(self) -> None:
        object.__setattr__(self, "load", check.finite_array("load", self.load, ndim=2))
        check.number("spacing", self.spacing, above=0)
        check.number("pad", self.pad, at_least=0)

    @cached_property
    def shape(self) -> tuple[int, int]:
        """Rows and columns with the pad, rounded up to lengths that transform quickly."""
        extra = math.ceil(self.pad / self.spacing)
        rows, columns = self.load.shape
        return scipy.fft.next_fast_len(rows + extra), scipy.fft.next_fast_len(columns + extra, real=True)

    @cached_property
    def _spectrum(self) -> np.ndarray:
        return scipy.fft.rfft2(self.load, s=self.shape)

    @cached_property
    def _square(self) -> np.ndarray:
        """K^2, 1/m2, shaped like the spectrum."""
        rows, columns = self.shape
        along = 2.0 * np.pi * scipy.fft.rfftfreq(columns, self.spacing)
        across = 2.0 * np.pi * scipy.fft.fftfreq(rows, self.spacing)
        return across[:, None] ** 2 + along**2

    @cached_property
    def _fourth(self) -> np.ndarray:
        return self._square**2

    @cached_property
    def _room(self) -> tuple[np.ndarray, np.ndarray]:
        """Room for a trial's resistance and spectrum: asking the system for it each time costs more than the trial."""
        return np.empty_like(self._fourth), np.empty_like(self._spectrum)

    def _bent(self, rigidity: float, stiffness: float) -> np.ndarray:
        """w_hat of a plate, until the next call; raises DownwarpError where the pad is too narrow for it."""
        rigidity = check.number("rigidity", rigidity, above=0)
        stiffness = check.number("stiffness", stiffness, above=0)
        alpha = float(flexural_parameter(rigidity, stiffness))
        if self.pad < LEAST_PAD * alpha:
            raise DownwarpError(
                "The plan view has {pad:.0f} km beside it, too little for a flexural parameter of {alpha:.0f} km: it "
                "takes {least:g} of them.",
                pad=self.pad / 1e3,
                alpha=alpha / 1e3,
                least=LEAST_PAD,
            )
        resistance, bent = self._room
        np.multiply(self._fourth, rigidity, out=resistance)
        resistance += stiffness
        # Two real divisions: numpy would turn the resistance into complex numbers first.
        np.divide(self._spectrum.real, resistance, out=bent.real)
        np.divide(self._spectrum.imag, resistance, out=bent.imag)
        return bent

    def deflection(self, rigidity: float, stiffness: float) -> np.ndarray:
        """w, m, of a plate of D (N m) and k (Pa/m), positive down, shape (rows, columns)."""
        rows, columns = self.load.shape
        # One direction after the other: irfft2 would copy the spectrum, and transform the pad's rows for nothing.
        across = scipy.fft.ifft(self._bent(rigidity, stiffness), axis=0, overwrite_x=True)[:rows]
        return scipy.fft.irfft(across, n=self.shape[1], axis=1)[:, :columns]


@dataclass(frozen=True)
class SheetLine:
    """Places on a sheet, in plan view, at which trial plates are wanted: a trial makes only the rows round them.

    Between cell centres w is interpolated by cubics (over 4 x 4 cells), for it is smooth where cells are short beside
    the flexural parameter.
    """

    sheet: Sheet
    row: np.ndarray
    """Fractional row of each place, counted in cell centres, shape (n,)."""
    column: np.ndarray
    """Fractional column, shape (n,)."""

    def __post_init__(self) -> None:
        for name, count in zip(("row", "column"), self.sheet.load.shape):
            values = check.finite_array(name, getattr(self, name), ndim=1)
            if values.size and (values.min() < 1 or values.max() > count - 2):
                raise DownwarpError(
                    "A place lies outside the plan view, in its outermost cells or {name}s beyond.", name=name
                )
            object.__setattr__(self, name, values)

    @cached_property
    def _stencil(self) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Rows needed (m,); of each place its rows among them (4, n), their weights, and the same of its columns."""
        rows, row_weights = _cubic(self.row)
        needed, place = np.unique(rows, return_inverse=True)
        columns, column_weights = _cubic(self.column)
        return needed, np.reshape(place, rows.shape), row_weights, columns, column_weights

    @cached_property
    def _turns(self) -> np.ndarray:
        """Matrix (rows needed, rows of the spectrum) of the inverse transform across the rows."""
        count = self.sheet.shape[0]
        angle = 2.0 * np.pi / count * (np.outer(self._stencil[0], np.arange(count)) % count)
        return (np.cos(angle) + 1j * np.sin(angle)) / count

    def deflection(self, rigidity: float, stiffness: float) -> np.ndarray:
        """w, m, at the places, of a plate of D (N m) and k (Pa/m), positive down, shape (n,)."""
        return self._read(self.sheet._bent(rigidity, stiffness))

    def laplacian(self, rigidity: float, stiffness: float) -> np.ndarray:
        """d2w/du2 + d2w/dv2, 1/m, at the places, shape (n,)."""
        return self._read(-self.sheet._square * self.sheet._bent(rigidity, stiffness))

    def load(self) -> np.ndarray:
        """Load, Pa, at the places: the mean of their own cell, shape (n,)."""
        return self.sheet.load[np.rint(self.row).astype(int), np.rint(self.column).astype(int)]

    def _read(self, spectrum: np.ndarray) -> np.ndarray:
        """Values at the places of what has a spectrum."""
        needed, rows, row_weights, columns, column_weights = self._stencil
        if needed.size <= FEW_ROWS:
            across = self._turns @ spectrum
        else:
            across = scipy.fft.ifft(spectrum, axis=0, overwrite_x=True)
            if needed[-1] - needed[0] + 1 == needed.size:
                across = across[needed[0] : needed[-1] + 1]
            else:
                across = across[needed]
        lines = scipy.fft.irfft(across, n=self.sheet.shape[1], axis=1)
        values = lines[rows[:, None, :], columns[None, :, :]]
        return np.einsum("rcn,rn,cn->n", values, row_weights, column_weights)


def _cubic(position: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The four neighbours of fractional positions and their weights in the cubic through them, each (4, n)."""
    first = np.floor(position).astype(int)
    t = position - first
    weights = np.stack([
        -t * (t - 1.0) * (t - 2.0) / 6.0,
        (t + 1.0) * (t - 1.0) * (t - 2.0) / 2.0,
        -(t + 1.0) * t * (t - 2.0) / 2.0,
        (t + 1.0) * t * (t - 1.0) / 6.0,
    ])  # fmt: skip
    return first + np.arange(-1, 3)[:, None], weights
