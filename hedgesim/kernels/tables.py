"""Piecewise-quintic tables in log price of sums of normal distribution functions, and their evaluation.

Everything a European book needs at a look is a sum F(y) = sum_j a_j N((y - k_j) / w_j + c w_j): the hedge slope with
c = 1/2, the strike leg of the value with c = -1/2. On a cell the quintic that matches F, F' and F'' at both ends is
kept by its six coefficients in u = (y - node) / cell width.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from hedgesim.kernels.jit import device, kernel
from hedgesim.kernels.rows import LANES, quintic_of_eight
from hedgesim.kernels.vector_math import normal_cdf_and_pdf

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Paths that a kernel works off side by side.
TILE = 1024


class Table(NamedTuple):
    """Tables of one function family, by underlying and look.

    Attributes
    ----------
    start : (underlying, look) first row of `coefficients`
    cells : (underlying, look) number of cells, 0 where the function is zero
    low : (underlying, look) log price of the first node
    per_cell : (underlying, look) cells per unit of log price
    coefficients : (cell, 8), of which six columns are used: a row is one line of the cache
    """

    start: Ints
    cells: Ints
    low: Floats
    per_cell: Floats
    coefficients: Floats


@kernel
def fill_cells(
    low: float,
    width: float,
    amount: Floats,
    log_strike: Floats,
    root: Floats,
    shift: float,
    constant: float,
    out: Floats,
) -> None:
    """Coefficients of F(y) = constant + sum_j amount_j N((y - log_strike_j) / root_j + shift root_j).

    `out` is (cells, 8), of which six columns are filled; the nodes are low + i width; `root` = vol sqrt(variance years
    to expiry), positive.
    """
    cells = out.shape[0]
    value = np.full(cells + 1, constant)
    slope = np.zeros(cells + 1)
    bend = np.zeros(cells + 1)
    for j in range(len(amount)):
        inv = 1.0 / root[j]
        first = (low - log_strike[j]) * inv + shift * root[j]
        step = width * inv
        a = amount[j]
        for i in range(cells + 1):
            d = first + i * step
            below, bell = normal_cdf_and_pdf(d)
            density = a * inv * bell
            value[i] += a * below
            slope[i] += density
            bend[i] -= density * d * inv
    for i in range(cells):
        rise = value[i + 1] - value[i]
        s0, s1 = width * slope[i], width * slope[i + 1]
        b0, b1 = width * width * bend[i], width * width * bend[i + 1]
        out[i, 0] = value[i]
        out[i, 1] = s0
        out[i, 2] = 0.5 * b0
        out[i, 3] = 10.0 * rise - 6.0 * s0 - 4.0 * s1 - 1.5 * b0 + 0.5 * b1
        out[i, 4] = -15.0 * rise + 8.0 * s0 + 7.0 * s1 + 1.5 * b0 - b1
        out[i, 5] = 6.0 * rise - 3.0 * (s0 + s1) - 0.5 * (b0 - b1)


@device
def lookup(
    table: Table,
    underlying: int,
    look: int,
    log_price: Floats,
    cell: NDArray[np.int32],
    part: Floats,
    value: Floats,
    slope: Floats,
) -> None:
    """F and dF/dy at each log price; beyond the ends of the table the value at the end, with its slope there.

    All arrays have the same length, a multiple of `LANES`; `cell` and `part` are scratch.
    """
    if len(log_price) % LANES != 0:
        raise ValueError("the number of log prices must be a multiple of LANES")
    cells = table.cells[underlying, look]
    if cells == 0:
        for p in range(len(log_price)):
            value[p] = 0.0
            slope[p] = 0.0
        return
    first = table.start[underlying, look]
    low, per_cell = table.low[underlying, look], table.per_cell[underlying, look]
    top = np.float64(cells) - 1e-9
    for p in range(len(log_price)):
        place = min(max((log_price[p] - low) * per_cell, 0.0), top)
        whole = np.int32(place)
        cell[p] = whole
        part[p] = place - whole
    for p in range(0, len(log_price), LANES):
        quintic_of_eight(table.coefficients, first, cell, part, per_cell, value, slope, p)
