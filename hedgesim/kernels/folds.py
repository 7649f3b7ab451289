"""Folds: where expected costs are not smooth in the log price, and plain sums over the lattice that allow for it."""

import math

import numpy as np
from numpy.typing import NDArray

from hedgesim.kernels.breaks import BEHIND, STENCIL, root_in_cell
from hedgesim.kernels.jit import device

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@device
def find_folds(
    hedge: Floats, low: int, high: int, net: Floats, smallest: float, ticket: float, cells: Ints, theta: Floats
) -> int:  # fmt: skip
    """Where the expected costs of the step from a trade are not smooth in the log price at the trade.

    They are smooth wherever the next hedge varies with the next price. They bend where the hedge passes a level at
    which the next one stays (none after the unwinding, all or nothing delivered); and ticket charges jump where the
    hedge itself settles to within `smallest` of a level.

    Parameters
    ----------
    hedge : at the nodes; those from `low` to `high` count
    net : the next hedge, less what is delivered, at its nodes
    cells, theta : overwritten with the folds; at most len(cells)
    """
    count = 0
    flat = 1e3 * smallest
    levels = np.empty(len(cells))
    found, m = 0, 0
    while m < len(net) - 1:
        begin = m
        while m < len(net) - 1 and abs(net[m + 1] - net[m]) <= flat:
            m += 1
        if m == begin:
            m += 1
            continue
        level = net[(begin + m) // 2]
        fresh = found < len(levels)
        for q in range(found):
            fresh = fresh and abs(levels[q] - level) > flat
        if not fresh:
            continue
        levels[found] = level
        found += 1
        for n in range(low, high):
            a, b = hedge[n] - level, hedge[n + 1] - level
            if (a > 0.0) != (b > 0.0) and abs(a) + abs(b) > flat and low < n < high - 1 and count < len(cells):
                cells[count], theta[count] = n, root_in_cell(hedge, n, level, 0.0, 1.0, a, b)
                count += 1
    if ticket == 0.0:
        return count
    m = low
    while m < high:
        begin = m
        while m < high and abs(hedge[m + 1] - hedge[m]) <= 1e-3 * smallest:
            m += 1
        if m == begin:
            m += 1
            continue
        level = hedge[(begin + m) // 2]
        for side in range(2):
            node = begin if side == 0 else m
            step = -1 if side == 0 else 1
            while low < node < high and abs(hedge[node] - level) <= smallest:
                node += step
            if low < node < high and abs(hedge[node - step] - level) <= smallest and count < len(cells):
                outer = math.log(abs(hedge[node] - level) / smallest)
                inner = math.log(max(abs(hedge[node - step] - level), 1e-9 * smallest) / smallest)
                away = outer / (outer - inner)
                cells[count] = node if side == 0 else node - 1
                theta[count] = away if side == 0 else 1.0 - away
                count += 1
    return count


@device
def mend(values: Floats, low: int, high: int, m: int, theta: float, weights: Floats) -> None:
    """Change node values about a fold at m + theta so that plain sums over them miss nothing there.

    The jump of value, slope and curvature comes from cubics through four nodes on either side; `weights` are the edge
    weights of unit spacing.
    """
    if m - 3 < low or m + 4 > high:
        return
    jump, slope, bend = 0.0, 0.0, 0.0
    coarse_jump, coarse_slope = 0.0, 0.0
    for side in range(2):
        # From the fold outwards, so that leaving out the last node leaves a parabola.
        first, step = (m, -1) if side == 0 else (m + 1, 1)
        f0, f1, f2, f3 = values[first], values[first + step], values[first + 2 * step], values[first + 3 * step]
        d1, d2, d3 = f1 - f0, f2 - 2.0 * f1 + f0, f3 - 3.0 * f2 + 3.0 * f1 - f0
        u = -theta if side == 0 else theta - 1.0
        sign = -1.0 if side == 0 else 1.0
        parabola, incline = f0 + u * d1 + u * (u - 1.0) / 2.0 * d2, d1 + (u - 0.5) * d2
        coarse_jump += sign * parabola
        coarse_slope += sign * step * incline
        jump += sign * (parabola + u * (u - 1.0) * (u - 2.0) / 6.0 * d3)
        slope += sign * step * (incline + (3.0 * u * u - 6.0 * u + 2.0) / 6.0 * d3)
        bend += sign * (d2 + (u - 1.0) * d3)
    # A fold that two fits see differently is not sharp at this spacing, and the sum needs no mending.
    if abs(jump - coarse_jump) > 0.25 * abs(jump) and abs(slope - coarse_slope) > 0.25 * abs(slope):
        return
    for k in range(STENCIL):
        away = k - BEHIND - theta
        values[m - BEHIND + k] -= weights[k] * (jump + away * (slope + 0.5 * away * bend))
