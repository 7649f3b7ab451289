"""Means and co-moments of many columns, with a fixed order of summation: the same bits on every machine."""

import numpy as np
from numpy.typing import NDArray

from hedgesim.kernels.jit import device, kernel

Floats = NDArray[np.float64]
_LANES = 16


@device
def _sum_products(a: Floats, b: Floats, a0: float, b0: float, lanes: Floats) -> float:
    """Sum of (a - a0)(b - b0) in sixteen interleaved running sums, which vectorises without reordering."""
    n = len(a)
    whole = n - n % _LANES
    lanes[:] = 0.0
    for i in range(0, whole, _LANES):
        for k in range(_LANES):
            lanes[k] += (a[i + k] - a0) * (b[i + k] - b0)
    total = 0.0
    for k in range(_LANES):
        total += lanes[k]
    for i in range(whole, n):
        total += (a[i] - a0) * (b[i] - b0)
    return total


@kernel
def comoments(columns: Floats, moving: NDArray[np.bool_], fresh: NDArray[np.bool_], mean: Floats, out: Floats) -> None:
    """Mean (column,) and sum of centred products (column, column) of `columns` (column, path).

    Columns that are not `moving` are constant: their mean is the first entry, their products zero. What concerns only
    columns that are not `fresh` stands in `mean` and `out` already, and is left as it is.
    """
    lanes = np.empty(_LANES)
    one = np.ones(columns.shape[1])
    for c in range(columns.shape[0]):
        if not moving[c]:
            mean[c] = columns[c, 0]
        elif fresh[c]:
            mean[c] = _sum_products(columns[c], one, 0.0, 0.0, lanes) / columns.shape[1]
    for c in range(columns.shape[0]):
        for d in range(c + 1):
            if not (moving[c] and moving[d]):
                out[c, d] = 0.0
            elif fresh[c] or fresh[d]:
                out[c, d] = _sum_products(columns[c], columns[d], mean[c], mean[d], lanes)
            out[d, c] = out[c, d]
