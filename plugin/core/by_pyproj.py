"""pyproj's functions over arrays of any shape.

From arrays of one element pyproj 3.5 to 3.7 make scalars, and by a conversion that numpy is giving up.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np


def in_shape(function: Callable, *places: Any, **options: Any) -> tuple[np.ndarray, ...]:
    """What a function of pyproj's (`Geod.inv`, `Transformer.transform`, a `Proj`, ...) gives for ``places``, arrays of one
    shape, as arrays of that shape; units are the function's own.

    >>> from pyproj import Geod
    >>> [part.shape for part in in_shape(Geod(ellps="WGS84").fwd, [[0.0]], [[50.0]], [[90.0]], [[1000.0]])]
    [(1, 1), (1, 1), (1, 1)]
    """
    arrays = [np.asarray(values, dtype=float) for values in places]
    given = [array.item() if array.size == 1 else array for array in arrays]
    return tuple(np.reshape(part, arrays[0].shape) for part in function(*given, **options))
