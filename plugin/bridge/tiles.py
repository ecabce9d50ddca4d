"""Cells of a raster read in square tiles, of which those used last stay in memory for whoever asks next."""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Callable

import numpy as np

SIDE_BITS = 7
"""Tiles have 2 to this power, 128, cells along each side; at the raster's right and lower edge they are cut off."""
MOST_BYTES = 1 << 25
"""Memory, bytes, that the tiles of one band take at most: 512 tiles of 4-byte cells, 256 of 8-byte ones."""

_FIRST_ROOM = 16
"""Tiles that there is memory for at first."""

Read = Callable[[int, int, int, int], np.ndarray]
"""Cells of a window as numbers, from its first row and column and its rows and columns: shape (rows, columns)."""


class Tiles:
    """The cells of one band; a tile is read when a cell of it is first asked for, and again once it was dropped.

    Where there is no more room, the tile that has not been used for longest makes way.
    """

    def __init__(
        self,
        read: Read,
        shape: tuple[int, int],
        dtype: np.dtype,
        side_bits: int = SIDE_BITS,
        most_bytes: int = MOST_BYTES,
    ) -> None:
        """``shape``: rows and columns of the raster; ``dtype``: of the numbers that ``read`` returns."""
        self._read, self._shape, self._dtype, self._bits = read, shape, dtype, side_bits
        self._side = 1 << side_bits
        down, self._across = (-(-count // self._side) for count in shape)
        most = most_bytes // (self._side**2 * dtype.itemsize)
        self._room = max(1, min(most, down * self._across))
        """Tiles that are kept at most."""
        self._kept: OrderedDict[int, int] = OrderedDict()
        """Place in the pool of each tile that is kept, the one used last at the end."""
        self._pool = np.empty((min(self._room, _FIRST_ROOM), self._side, self._side), dtype)
        """Cells of the tiles kept, (tiles, side, side); it grows up to the room."""

    def values(self, rows: np.ndarray, columns: np.ndarray, progress: Callable[[float], None]) -> np.ndarray:
        """Values of cells of the raster, float, in the shape of ``rows`` and ``columns``.

        ``progress`` is called with the fraction done before each tile, and may raise to stop.
        """
        shape, rows, columns = rows.shape, rows.ravel(), columns.ravel()
        bits, inside = self._bits, self._side - 1
        tile = rows >> bits
        tile *= self._across
        tile += columns >> bits
        cell = rows & inside
        cell <<= bits
        cell += columns & inside
        # Points follow each other along lines: long runs of them share a tile.
        starts = np.flatnonzero(np.concatenate([[True], tile[1:] != tile[:-1]])[: tile.size])
        lengths = np.diff(np.append(starts, tile.size))
        needed, of_run = np.unique(tile[starts], return_inverse=True)
        values = np.empty(tile.size)
        for first in range(0, needed.size, self._room):
            part = needed[first : first + self._room]
            places = np.empty(part.size, dtype=np.int64)
            for number, each in enumerate(part.tolist()):
                progress((first + number) / needed.size)
                places[number] = self._place(each)
            if part.size == needed.size:
                cell += np.repeat(places[of_run] << 2 * bits, lengths)
                values[:] = self._pool.reshape(-1).take(cell)
            else:
                own = np.flatnonzero(np.repeat((of_run >= first) & (of_run < first + part.size), lengths))
                place = places[np.repeat(of_run, lengths)[own] - first]
                values[own] = self._pool.reshape(-1)[(place << 2 * bits) + cell[own]]
        return values.reshape(shape)

    def _place(self, tile: int) -> int:
        """Place in the pool of a tile, which is read where it is not there."""
        if tile in self._kept:
            self._kept.move_to_end(tile)
            return self._kept[tile]
        top, left = tile // self._across * self._side, tile % self._across * self._side
        rows, columns = min(self._side, self._shape[0] - top), min(self._side, self._shape[1] - left)
        cells = self._read(top, left, rows, columns)
        place = len(self._kept)
        if place == self._room:
            place = self._kept.popitem(last=False)[1]
        elif place == len(self._pool):
            larger = np.empty((min(self._room, 2 * place), *self._pool.shape[1:]), self._dtype)
            larger[:place] = self._pool
            self._pool = larger
        self._pool[place, :rows, :columns] = cells
        self._kept[tile] = place
        return place
