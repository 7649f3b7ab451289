"""Breaks of an integrand on a lattice of log prices: where they are, and what the trapezoid sum misses there.

The payoff of settling positions breaks at their strikes, the cost of a trade where the trade changes sign, and ticket
charges where it falls below rounding. A break at lattice position m + theta, 0 <= theta < 1, belongs to the cell from
node m to node m + 1. The sum over the nodes beyond it is corrected with `edge_weights`, exact for the normal density of
the step times a quintic through the stencil, the nodes m - 2 to m + 3.
"""

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from hedgesim.kernels.jit import device, kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

STENCIL = 6
BEHIND = 2  # nodes of the stencil before the cell of the break
EDGE_BINS = 64  # bins of theta in a table of edge weights; one more node at either end for cubic interpolation

# Rows of the state at a trading look, by lattice node: price, hedge after the trade, cost of a unit, expected gross and
# costs from here on, central moments of their sum; mean squares and product of gross and costs in the step from here;
# then gross with what settles here, and hedge less what is delivered.
X, HEDGE, UNIT_COST, GROSS, COSTS, SECOND, THIRD, FOURTH, SQUARES, PAID, NET, LOG_X = (*range(9), 11, 12, 13)
STATE_ROWS = 14


@kernel
def edge_weights(spacing: float, mean: float, sd: float, first: int, taylor: Floats, out: Floats) -> None:
    """Error of the trapezoid sum beyond a break, for a normal density times Lagrange polynomials of the stencil.

    With density f of a normal step and L_s the Lagrange polynomials of the nodes c - 2 .. c + 3 (in units of the
    spacing), out[c - first, b, s] is the sum over nodes above the break less the integral above it, both of f L_s;
    the break is at c + theta_b, theta_b = (b - 1) / EDGE_BINS.

    Parameters
    ----------
    taylor : (bin, STENCIL, power) coefficients of L_s in powers of (position - theta_b)
    out : (cell, EDGE_BINS + 3, STENCIL), overwritten; the step reaches the offsets first .. first + cells
    """
    cells = out.shape[0]
    density = np.empty(cells + 1)
    for n in range(cells + 1):
        z = ((first + n) * spacing - mean) / sd
        density[n] = math.exp(-0.5 * z * z) / (sd * math.sqrt(2.0 * math.pi)) * spacing
    scale = sd / spacing
    moment, tail = np.empty(STENCIL), np.empty(STENCIL)
    for c in range(cells):
        for b in range(out.shape[1]):
            theta = (b - 1) / EDGE_BINS
            z = ((first + c + theta) * spacing - mean) / sd
            # The error beyond the break is minus the error before it: take the side with less mass.
            side = 1.0 if z >= 0.0 else -1.0
            z = abs(z)
            tail[0] = 0.5 * math.erfc(z / math.sqrt(2.0))
            tail[1] = math.exp(-0.5 * z * z) / math.sqrt(2.0 * math.pi) - z * tail[0]
            for q in range(2, STENCIL):
                tail[q] = (q - 1) * tail[q - 2] - z * tail[q - 1]
            moment[:] = 0.0
            if side > 0.0:
                for n in range(c + 1, cells + 1):
                    term, distance = density[n], n - c - theta
                    for q in range(STENCIL):
                        moment[q] += term
                        term *= distance
            else:
                for n in range(c + 1):
                    term, distance = density[n], c + theta - n
                    for q in range(STENCIL):
                        moment[q] += term
                        term *= distance
            power = 1.0
            for q in range(STENCIL):
                moment[q] = side * (moment[q] - power * tail[q])
                power *= scale
            for s in range(STENCIL):
                total, sign = 0.0, 1.0
                for q in range(STENCIL):
                    total += taylor[b, s, q] * moment[q] * sign
                    sign *= side
                out[c, b, s] = total


@device
def edge_at(edges: Floats, cell: int, theta: float, weights: Floats) -> None:
    """Edge weights of a break, by cubic interpolation in theta."""
    place = theta * EDGE_BINS
    b = min(int(place), EDGE_BINS - 1)
    u = place - b
    w0 = -u * (u - 1.0) * (u - 2.0) / 6.0
    w1 = (u + 1.0) * (u - 1.0) * (u - 2.0) / 2.0
    w2 = -(u + 1.0) * u * (u - 2.0) / 2.0
    w3 = (u + 1.0) * u * (u - 1.0) / 6.0
    for s in range(STENCIL):
        inner = w1 * edges[cell, b + 1, s] + w2 * edges[cell, b + 2, s]
        weights[s] = w0 * edges[cell, b, s] + inner + w3 * edges[cell, b + 3, s]


@device
def _between(node: Floats, m: int, u: float) -> float:
    """Cubic interpolation of lattice values at position m + u."""
    return (
        -u * (u - 1.0) * (u - 2.0) / 6.0 * node[m - 1]
        + (u + 1.0) * (u - 1.0) * (u - 2.0) / 2.0 * node[m]
        - (u + 1.0) * u * (u - 2.0) / 2.0 * node[m + 1]
        + (u + 1.0) * u * (u - 1.0) / 6.0 * node[m + 2]
    )


@device
def root_in_cell(node: Floats, m: int, level: float, a: float, b: float, fa: float, fb: float) -> float:
    """Position in [a, b] of the cell where the interpolated node values pass `level`; fa and fb differ in sign."""
    enough = 1e-12 * abs(fb - fa)
    u, kept = a, 0
    for _ in range(20):
        u = a + (b - a) * fa / (fa - fb)
        f = _between(node, m, u) - level
        if abs(f) <= enough:
            break
        # Regula falsi, the end that stays put halved (the Illinois rule).
        if (f > 0.0) == (fb > 0.0):
            b, fb = u, f
            if kept == 1:
                fa *= 0.5
            kept = 1
        else:
            a, fa = u, f
            if kept == 2:
                fb *= 0.5
            kept = 2
    return u


class Breaks(NamedTuple):
    """Breaks of the integrand found for the source nodes of a block.

    Attributes
    ----------
    source : source node in the block
    node : cell of the break, as an index into the state
    line : (break, 2) payoff line on the left and on the right
    sign : (break, 2) sign of the trade
    active : (break, 2) 1 where the trade costs a ticket
    weights : (break, STENCIL)
    gross, costs : (break, 2, STENCIL) gross and costs at the stencil, the formula of each side carried on across
    """

    source: Ints
    node: Ints
    line: Ints
    sign: Floats
    active: Floats
    weights: Floats
    gross: Floats
    costs: Floats


@device
def _add_break(
    breaks: Breaks,
    count: int,
    source: int,
    node: int,
    line: tuple[int, int],
    sign: tuple[float, float],
    active: tuple[float, float],
    edges: Floats,
    cell: int,
    theta: float,
) -> int:
    breaks.source[count] = source
    breaks.node[count] = node
    for side in range(2):
        breaks.line[count, side] = line[side]
        breaks.sign[count, side] = sign[side]
        breaks.active[count, side] = active[side]
    edge_at(edges, cell, theta, breaks.weights[count])
    return count + 1


@device
def _segment(
    breaks: Breaks,
    count: int,
    source: int,
    node: int,
    line: int,
    hedge: Floats,
    level: float,
    a: float,
    b: float,
    ua: float,
    ub: float,
    smallest: float,
    ticket: float,
    edges: Floats,
    cell: int,
) -> int:
    """Add the break of |trade| between positions a and b of a cell, where the trade goes from ua to ub."""
    active_a, active_b = abs(ua) > smallest, abs(ub) > smallest
    if active_a and active_b:
        if (ua > 0.0) != (ub > 0.0):
            theta = root_in_cell(hedge, node, level, a, b, ua, ub)
            sign = 1.0 if ub > 0.0 else -1.0
            return _add_break(breaks, count, source, node, (line, line), (-sign, sign), (1.0, 1.0), edges, cell, theta)
    elif active_a != active_b and ticket != 0.0:
        # The trade dies out like a normal tail: nearly linear in its logarithm.
        la, lb = math.log(max(abs(ua), 1e-9 * smallest)), math.log(max(abs(ub), 1e-9 * smallest))
        theta = a + (b - a) * (math.log(smallest) - la) / (lb - la)
        leading = ua if active_a else ub
        sign = 1.0 if leading > 0.0 else -1.0
        sides = (1.0 if active_a else 0.0, 1.0 if active_b else 0.0)
        return _add_break(breaks, count, source, node, (line, line), (sign, sign), sides, edges, cell, theta)
    return count


@device
def find_breaks(
    breaks: Breaks,
    count: int,
    source: int,
    held: float,
    base: int,
    cells: int,
    state: Floats,
    node_line: Ints,
    lines: Floats,
    theta: Floats,
    strikes: int,
    smallest: float,
    ticket: float,
    costly: bool,
    edges: Floats,
) -> int:
    """Breaks of one source node; the cells that its step reaches begin at index `base` of the state."""
    hedge, net = state[HEDGE], state[NET]
    if strikes == 0:
        if not costly:
            return count
        before = net[base] - held
        for c in range(cells):
            after = net[base + c + 1] - held
            if (before > smallest) != (after > smallest) or (before < -smallest) != (after < -smallest):
                count = _segment(
                    breaks, count, source, base + c, 0, hedge, held, 0.0, 1.0, before, after, smallest, ticket, edges, c
                )  # fmt: skip
            before = after
        return count
    for c in range(cells):
        m = base + c
        here, there = node_line[m], node_line[m + 1]
        if here == there and not costly:
            continue
        a = 0.0
        level = held + lines[here, 2]
        ua = hedge[m] - level
        for k in range(here, there):
            b = theta[k]
            value = _between(hedge, m, b)
            ub = value - level
            if costly:
                count = _segment(
                    breaks, count, source, m, k, hedge, level, a, b, ua, ub, smallest, ticket, edges, c
                )  # fmt: skip
            level = held + lines[k + 1, 2]
            ua = value - level
            count = _add_break(
                breaks,
                count,
                source,
                m,
                (k, k + 1),
                (1.0 if ub > 0.0 else -1.0, 1.0 if ua > 0.0 else -1.0),
                (1.0 if abs(ub) > smallest else 0.0, 1.0 if abs(ua) > smallest else 0.0),
                edges,
                c,
                b,
            )
            a = b
        if costly:
            ub = hedge[m + 1] - level
            count = _segment(
                breaks, count, source, m, there, hedge, level, a, 1.0, ua, ub, smallest, ticket, edges, c
            )  # fmt: skip
    return count


@device
def find_turns(
    breaks: Breaks, state: Floats, held: Floats, first_source: int, sources: int, base: int, cells: int, edges: Floats,
    means: Floats,
) -> int:  # fmt: skip
    """Breaks of steps on which nothing settles and tickets are free: where the trade changes sign, and no others.

    Takes the trapezoid error off the mean costs at once, and keeps the cost of the trade in `breaks.costs[:, 0]`, with
    the sign it has beyond the break. The sources from `first_source` up to `sources` of the block are looked at.
    """
    hedge, unit_cost = state[HEDGE], state[UNIT_COST]
    found = 0
    for i in range(first_source, sources):
        h, m = held[i], base + i
        above = hedge[m] > h
        for c in range(cells):
            m += 1
            now_above = hedge[m] > h
            if now_above == above:
                continue
            above = now_above
            # Cubic through the four nodes about the cell, by Newton from the straight line.
            f0, f1, f2, f3 = hedge[m - 2] - h, hedge[m - 1] - h, hedge[m] - h, hedge[m + 1] - h
            third = (f3 - 3.0 * f2 + 3.0 * f1 - f0) / 6.0
            second = 0.5 * (f2 - 2.0 * f1 + f0)
            first = f2 - f1 - second - third
            u = f1 / (f1 - f2)
            for _ in range(2):
                value = f1 + u * (first + u * (second + u * third))
                rise = first + u * (2.0 * second + 3.0 * u * third)
                if rise != 0.0:
                    u = min(max(u - value / rise, 0.0), 1.0)
            place = u * EDGE_BINS
            b = min(int(place), EDGE_BINS - 1)
            v = place - b
            w0, w1 = -v * (v - 1.0) * (v - 2.0) / 6.0, (v + 1.0) * (v - 1.0) * (v - 2.0) / 2.0
            w2, w3 = -(v + 1.0) * v * (v - 2.0) / 2.0, (v + 1.0) * v * (v - 1.0) / 6.0
            sign = 1.0 if now_above else -1.0
            miss = 0.0
            for s in range(STENCIL):
                k = m - 1 - BEHIND + s
                inner = w1 * edges[c, b + 1, s] + w2 * edges[c, b + 2, s]
                weight = w0 * edges[c, b, s] + inner + w3 * edges[c, b + 3, s]
                cost = unit_cost[k] * sign * (hedge[k] - h)
                breaks.weights[found, s] = weight
                breaks.costs[found, 0, s] = cost
                miss += weight * cost
            means[1, i] += 2.0 * miss
            breaks.source[found], breaks.node[found] = i, m - 1
            found += 1
    return found


@device
def correct_turns(
    breaks: Breaks, found: int, state: Floats, held_x: Floats, gain: Floats, inner: Floats, base: int, means: Floats,
    squares: Floats, powers: Floats,
) -> None:  # fmt: skip
    """Take the errors at the breaks of `find_turns` off squares and moments; arguments as for `correct_powers`.

    A cost q that is added before the break and taken off beyond it changes a power of the deviation t by its odd terms.
    """
    for b in range(found):
        i, first = breaks.source[b], breaks.node[b] - BEHIND
        shift = breaks.node[b] - base - i
        gross_mean, costs_mean, hx = means[0, i], means[1, i], held_x[i]
        cross, square, p2, p3, p4 = 0.0, 0.0, 0.0, 0.0, 0.0
        for s in range(STENCIL):
            m = first + s
            q = breaks.costs[b, 0, s]
            wq = breaks.weights[b, s] * q
            dg, dc = hx * gain[shift + s] + state[GROSS, m] - gross_mean, state[COSTS, m] - costs_mean
            second = state[SECOND, m] + hx * hx * inner[shift + s]
            t = dg + dc
            cross += wq * dg
            square += wq * dc
            p2 += wq * t
            p3 += wq * (q * q + 3.0 * (t * t + second))
            p4 += wq * (t * (t * t + q * q + 3.0 * second) + state[THIRD, m])
        squares[1, i] += 2.0 * cross
        squares[2, i] += 4.0 * square
        powers[0, i] += 4.0 * p2
        powers[1, i] += 2.0 * p3
        powers[2, i] += 8.0 * p4


@device
def correct_means(
    breaks: Breaks, found: int, state: Floats, lines: Floats, strikes: int, held: Floats, held_x: Floats,
    gain: Floats, base: int, ticket: float, means: Floats,
) -> None:  # fmt: skip
    """Take the trapezoid error at the breaks off the means of gross and costs, (2, source).

    `gain` begins at the first node of the stencil of the first cell that the step reaches, which is cell `base` of the
    state for the first source node.
    """
    for b in range(found):
        i, first = breaks.source[b], breaks.node[b] - BEHIND
        shift = breaks.node[b] - base - i
        for side in range(2):
            row, sign, charge = breaks.line[b, side], breaks.sign[b, side], ticket * breaks.active[b, side]
            at_zero, slope, units = 0.0, 0.0, held[i]
            if strikes > 0:
                at_zero, slope, units = lines[row, 0], lines[row, 1], held[i] + lines[row, 2]
            outer = 1.0 if side == 1 else -1.0
            for s in range(STENCIL):
                m = first + s
                gross = held_x[i] * gain[shift + s] + state[GROSS, m] + at_zero + slope * state[X, m]
                costs = state[COSTS, m] - state[UNIT_COST, m] * sign * (state[HEDGE, m] - units) - charge
                breaks.gross[b, side, s] = gross
                breaks.costs[b, side, s] = costs
                means[0, i] -= outer * breaks.weights[b, s] * gross
                means[1, i] -= outer * breaks.weights[b, s] * costs


@device
def correct_powers(
    breaks: Breaks, found: int, state: Floats, held_x: Floats, inner: Floats, base: int, means: Floats,
    squares: Floats, powers: Floats,
) -> None:  # fmt: skip
    """The same for the squares, (3, source), and the central moments of the total; `inner` is laid out like `gain`."""
    for b in range(found):
        i, first = breaks.source[b], breaks.node[b] - BEHIND
        shift = breaks.node[b] - base - i
        for side in range(2):
            for s in range(STENCIL):
                m = first + s
                weight = breaks.weights[b, s] if side == 0 else -breaks.weights[b, s]
                second = state[SECOND, m] + held_x[i] * held_x[i] * inner[shift + s]
                dg, dc = breaks.gross[b, side, s] - means[0, i], breaks.costs[b, side, s] - means[1, i]
                t = dg + dc
                squares[0, i] += weight * dg * dg
                squares[1, i] += weight * dg * dc
                squares[2, i] += weight * dc * dc
                powers[0, i] += weight * t * t
                powers[1, i] += weight * t * (t * t + 3.0 * second)
                powers[2, i] += weight * t * (t * (t * t + 6.0 * second) + 4.0 * state[THIRD, m])
