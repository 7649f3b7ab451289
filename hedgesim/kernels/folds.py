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
    hedge: Floats, low: int, high: int, net: Floats, shift: int, first: int, reached: int, mean: float, sd: float,
    smallest: float, ticket: float, cells: Ints, theta: Floats, strength: Floats,
) -> int:  # fmt: skip
    """Where the expected costs of the step from a trade are not smooth in the log price at the trade.

    They are smooth wherever the next hedge varies with the next price as the hedge does with the price. They bend where
    the hedge passes a level at which the next one stays, none after the unwinding or all or nothing delivered; and
    nearly so, over sd |dH| / |dh| nodes, where the next hedge H varies much less than the hedge h. Ticket charges jump
    where the hedge itself settles to within `smallest` of a level.

    Parameters
    ----------
    hedge : at the nodes; those from `low` to `high` count
    net : the next hedge, less what is delivered, at its nodes; the step from node n reaches index n + shift, its
        offset `first`, and the next `reached` - 1
    mean, sd : of the step, in nodes
    cells, theta, strength : overwritten with the folds, at most len(cells), and how much of its first Fourier mode a
        nearly sharp fold has kept
    """
    count = 0
    flat = 1e3 * smallest
    whole = math.floor(mean)
    inside = mean - whole
    for n in range(low + 1, high - 1):
        m = n + whole - first + shift
        if m < 0 or m + 2 >= len(net):
            continue
        here, there = (1.0 - inside) * net[m] + inside * net[m + 1], (1.0 - inside) * net[m + 1] + inside * net[m + 2]
        a, b = hedge[n] - here, hedge[n + 1] - there
        if (a > 0.0) != (b > 0.0) and abs(a) + abs(b) > flat and count < len(cells):
            width = sd * abs(there - here) / abs(b - a)
            if width < 0.5:
                cells[count], theta[count] = n, a / (a - b)
                strength[count] = math.exp(-2.0 * math.pi * math.pi * width * width)
                count += 1
    near = count
    m = 0
    while m < len(net) - 1:
        begin = m
        while m < len(net) - 1 and abs(net[m + 1] - net[m]) <= flat:
            m += 1
        if m == begin:
            m += 1
            continue
        level = net[(begin + m) // 2]
        for n in range(max(low + 1, begin - shift - reached + 1), min(high - 1, m - shift + 1)):
            a, b = hedge[n] - level, hedge[n + 1] - level
            if (a > 0.0) != (b > 0.0) and abs(a) + abs(b) > flat and count < len(cells):
                seen = False
                for q in range(near):
                    seen = seen or abs(cells[q] - n) <= 1
                for q in range(near, count):
                    seen = seen or cells[q] == n
                if not seen:
                    cells[count], theta[count] = n, root_in_cell(hedge, n, level, 0.0, 1.0, a, b)
                    strength[count] = 1.0
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
                strength[count] = 1.0
                count += 1
    return count


@device
def mend(values: Floats, low: int, high: int, m: int, theta: float, strength: float, weights: Floats) -> None:
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
        values[m - BEHIND + k] -= strength * weights[k] * (jump + away * (slope + 0.5 * away * bend))
