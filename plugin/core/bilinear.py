"""Bilinear interpolation in a grid of cells, some of which may hold no data.

Rows and columns are counted from 0 in *cell centres*: 0.0 is the centre of the first cell, whose outer edge is at -0.5.
Between that edge and the outermost centres the nearest centres count. Cells without data are NaN: their weight falls
to the others, but a point has no value where a cell without data weighs more than every cell with data (it is the
nearest), or where cells without data hold more than half of the weight.
"""

from __future__ import annotations

import numpy as np

_ROUNDING = 1e-6
"""Cells by which a point may lie outside the outer edge and still count as on it."""


def corners(
    row: np.ndarray, column: np.ndarray, shape: tuple[int, int], closed: bool = False
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """The four cells round each point: their rows, columns and weights, each of shape (4, *points).

    ``row``, ``column``: fractional positions, any common shape; ``shape``: rows and columns of the grid. With
    ``closed`` the first column follows the last (a grid round the Earth). Points outside the grid, or NaN, have
    weights of 0.
    """
    row, column = np.broadcast_arrays(np.asarray(row, dtype=float), np.asarray(column, dtype=float))
    rows, columns = shape
    reach = 0.5 + _ROUNDING
    inside = (row >= -reach) & (row <= rows - 1 + reach)
    inside &= np.isfinite(column) if closed else (column >= -reach) & (column <= columns - 1 + reach)
    everywhere = bool(inside.all())
    if not everywhere:
        row, column = np.where(inside, row, 0.0), np.where(inside, column, 0.0)
    row = np.minimum(np.maximum(row, 0.0), rows - 1.0)
    if not closed:
        column = np.minimum(np.maximum(column, 0.0), columns - 1.0)
    top, left = np.floor(row), np.floor(column)
    down, right = row - top, column - left
    top, left = top.astype(np.int64), left.astype(np.int64)
    next_row = np.minimum(top + 1, rows - 1)
    if closed:
        left %= columns
        next_column = (left + 1) % columns
    else:
        next_column = np.minimum(left + 1, columns - 1)
    up, here = 1 - down, 1 - right
    weights = np.stack([up * here, up * right, down * here, down * right])
    return (
        np.stack([top, top, next_row, next_row]),
        np.stack([left, next_column, left, next_column]),
        weights if everywhere else np.where(inside, weights, 0.0),
    )


def blend(values: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """Weighted mean of the cells round each point, NaN where the module's rule gives no value.

    ``values`` (NaN where there is no data) and ``weights``, as `corners` gives them: shape (4, *points).
    """
    known = np.isfinite(values)
    if known.all() and (weights > 0.0).any(axis=0).all():
        return (weights * values).sum(axis=0) / weights.sum(axis=0)
    known_weights = np.where(known, weights, 0.0)
    total = known_weights.sum(axis=0)
    # A little below a half, so that rounding does not tip an even split.
    has_value = (total >= 0.5 - 1e-9) & (known_weights.max(axis=0) >= np.where(known, 0.0, weights).max(axis=0) - 1e-9)
    summed = (known_weights * np.where(known, values, 0.0)).sum(axis=0)
    return np.where(has_value, summed / np.where(has_value, total, 1.0), np.nan)


def bilinear(window: np.ndarray, row: np.ndarray, column: np.ndarray, closed: bool = False) -> np.ndarray:
    """Values at fractional positions in a 2-D array ``window`` (NaN where there is no data), shaped like ``row``.

    >>> float(bilinear(np.array([[0.0, 1.0], [2.0, 3.0]]), 0.5, 0.5))
    1.5
    """
    rows, columns, weights = corners(row, column, window.shape, closed)
    return blend(window[rows, columns], weights)
