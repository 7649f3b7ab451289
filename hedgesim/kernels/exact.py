"""Backward recursion of the exact engine: conditional moments of the hedged P&L on a lattice of log prices.

One step leads from a trade to the next. Given X_k = x, what the book still earns is

    h(x) I + pay(X_k+1) - kappa(X_k+1) |H(X_k+1) - h(x) - delivered(X_k+1)| - ticket + rest(X_k+1)

with I the discounted gain of one hedge unit. The lattice is uniform in log X and the step of log X is normal, so each
expectation is a trapezoid sum with weights that depend on the distance alone. For smooth integrands the sum converges
faster than any power of the spacing (Trefethen and Weideman 2014, SIAM Review 56); see kernels.breaks for the others.
"""

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from hedgesim.kernels.breaks import (
    BEHIND,
    COSTS,
    FOURTH,
    GROSS,
    HEDGE,
    LOG_X,
    NET,
    PAID,
    SECOND,
    SQUARES,
    STATE_ROWS,
    STENCIL,
    THIRD,
    UNIT_COST,
    Breaks,
    X,
    correct_means,
    correct_powers,
    correct_turns,
    edge_at,
    find_breaks,
    find_turns,
)
from hedgesim.kernels.folds import find_folds, mend
from hedgesim.kernels.jit import device, kernel
from hedgesim.kernels.simulate import Payoff
from hedgesim.kernels.tables import Table, lookup
from hedgesim.kernels.vector_math import exp, fma

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_BLOCK = 128
_MOST_FOLDS = 256

# Results of `run_schedule`.
MOMENT_ROWS = ("gross", "costs", "second", "third", "fourth", "gross_gross", "gross_costs", "costs_costs")


class Lattice(NamedTuple):
    """Nodes origin + n spacing of log X that are worked off at each look (or trade), n from `low` to `high`.

    `pad_low` and `pad_high` are the nodes that steps into the look can reach, a multiple of `kernels.rows.LANES` of
    them; moments are extrapolated there. `mean` and `sd` are those of log X at the look, the mean less the origin.
    """

    origin: float
    spacing: float
    low: Ints
    high: Ints
    pad_low: Ints
    pad_high: Ints
    mean: Floats
    sd: Floats


class Steps(NamedTuple):
    """Steps between looks (or trades); arrays are by step unless said otherwise.

    Attributes
    ----------
    kind : row of the tables that steps of one mean and sd share
    first, last : (kind,) offsets, in nodes, that a step can reach
    law : (kind, 2) mean and standard deviation of the step, in nodes
    density : (kind, offset) lattice weights of the step from offset `first` on
    edges : (kind, cell, bin, STENCIL) see `edge_weights`; empty when no integrand breaks
    unit : (1, bin, STENCIL) edge weights of a plain sum, see `folds.mend`
    start : first entry of `gain` and `inner`, which begin BEHIND + 1 nodes before offset `first`
    gain : expected discounted gain of one hedge unit over X_k, given both ends of the step, by offset
    inner : variance of the same, given both ends
    """

    kind: Ints
    first: Ints
    last: Ints
    law: Floats
    density: Floats
    edges: Floats
    unit: Floats
    start: Ints
    gain: Floats
    inner: Floats


class Trading(NamedTuple):
    """What trades of one underlying are; arrays are by trade.

    Attributes
    ----------
    look : look of the trade
    inverse_weight : hedge units per unit of -dU/dX; 0 at the last trade, which unwinds
    spread : discounted half-spread of one unit over X
    unit, ticket : discounted commission of one unit, and ticket charge
    smallest : fewer units than this cost no ticket
    initial : units held before the first trade
    """

    look: Ints
    inverse_weight: Floats
    spread: Floats
    unit: Floats
    ticket: Floats
    smallest: float
    initial: float


class Strikes(NamedTuple):
    """Strikes that settle at each trade, as lattice positions, ascending; see Payoff for the lines between them.

    `first` and `size` by trade; `cell` and `theta` by strike; `line` first row of Payoff.line, by trade.
    """

    first: Ints
    size: Ints
    line: Ints
    cell: Ints
    theta: Floats


@device
def _accumulate_means(
    weight: float, paid: Floats, costs: Floats, unit_cost: Floats, net: Floats, held: Floats, smallest: float,
    ticket: float, gross_out: Floats, costs_out: Floats,
) -> None:  # fmt: skip
    """Add one offset's share of the expected gross and costs of each source node of a block."""
    n = len(held)
    for i in range(n):
        gross_out[i] = fma(weight, paid[i], gross_out[i])
    for i in range(n):
        size = abs(net[i] - held[i])
        charge = fma(-unit_cost[i], size, costs[i]) - (ticket if size > smallest else 0.0)
        costs_out[i] = fma(weight, charge, costs_out[i])


@device
def _deviations(
    gain: float, paid: Floats, costs: Floats, unit_cost: Floats, net: Floats, held: Floats, held_x: Floats,
    smallest: float, ticket: float, gross_mean: Floats, costs_mean: Floats, d_gross: Floats, d_costs: Floats,
) -> None:  # fmt: skip
    """Deviations of gross and costs from their conditional means, at one offset from each source node."""
    n = len(held)
    for i in range(n):
        d_gross[i] = fma(held_x[i], gain, paid[i]) - gross_mean[i]
    for i in range(n):
        size = abs(net[i] - held[i])
        charge = fma(-unit_cost[i], size, costs[i]) - (ticket if size > smallest else 0.0)
        d_costs[i] = charge - costs_mean[i]


@device
def _accumulate_squares(weight: float, d_gross: Floats, d_costs: Floats, out: Floats) -> None:
    """Add one offset's share of the squares of gross, of gross times costs, and of costs; `out` is (3, source)."""
    gross, cross, costs = out[0], out[1], out[2]
    for i in range(len(d_gross)):
        scaled = weight * d_gross[i]
        gross[i] = fma(scaled, d_gross[i], gross[i])
        cross[i] = fma(scaled, d_costs[i], cross[i])
    for i in range(len(d_gross)):
        costs[i] = fma(weight * d_costs[i], d_costs[i], costs[i])


@device
def _accumulate_powers(
    weight: float, second: Floats, third: Floats, fourth: Floats, d_gross: Floats, d_costs: Floats, out: Floats,
    deviation: Floats,
) -> None:  # fmt: skip
    """Add one offset's share of the central moments of the total; `out` is (3, source), `deviation` scratch."""
    n = len(d_gross)
    for i in range(n):
        deviation[i] = d_gross[i] + d_costs[i]
    for i in range(n):
        t = deviation[i]
        out[0, i] = fma(weight, fma(t, t, second[i]), out[0, i])
    for i in range(n):
        t = deviation[i]
        out[1, i] = fma(weight, fma(t, fma(t, t, 3.0 * second[i]), third[i]), out[1, i])
    for i in range(n):
        t = deviation[i]
        rest = fma(t * t, fma(t, t, 6.0 * second[i]), 4.0 * t * third[i])
        out[2, i] = fma(weight, rest + fourth[i], out[2, i])


@device
def _accumulate_inner(
    weight: float, inner: float, held_x: Floats, second: Floats, deviation: Floats, squares: Floats, powers: Floats
) -> None:
    """Add what the gain between the ends of a step contributes, normal given them, of variance `inner` X^2 a unit."""
    two, three, four = powers[0], powers[1], powers[2]
    for i in range(len(held_x)):
        own = weight * inner * held_x[i] * held_x[i]
        squares[i] += own
        two[i] += own
    for i in range(len(held_x)):
        own, t = inner * held_x[i] * held_x[i], deviation[i]
        three[i] += 3.0 * weight * own * t
        four[i] += 3.0 * weight * own * (2.0 * t * t + own + 2.0 * second[i])


@device
def _fill_known(
    state: Floats, lattice: Lattice, k: int, trading: Trading, slope: Table, underlying: int,
    cell: NDArray[np.int32], part: Floats, scratch: Floats,
) -> None:  # fmt: skip
    """Price, hedge and unit cost at the nodes of trade k, padding included."""
    low, n = lattice.pad_low[k], lattice.pad_high[k] - lattice.pad_low[k] + 1
    for i in range(n):
        state[LOG_X, i] = fma(lattice.spacing, np.float64(low + i), lattice.origin)
    for i in range(n):
        state[X, i] = exp(state[LOG_X, i])
    units = -trading.inverse_weight[k]
    if units != 0.0:
        lookup(slope, underlying, trading.look[k], state[LOG_X, :n], cell, part, state[HEDGE, :n], scratch[:n])
        for i in range(n):
            state[HEDGE, i] *= units
    else:
        state[HEDGE, :n] = 0.0
    for i in range(n):
        state[UNIT_COST, i] = fma(trading.spread[k], state[X, i], trading.unit[k])


@device
def _settle_state(state: Floats, lattice: Lattice, k: int, strikes: Strikes, lines: Floats, node_line: Ints) -> int:
    """Add what settles at trade k to the gross P&L and to the units in hand; returns the number of strikes."""
    low, n = lattice.pad_low[k], lattice.pad_high[k] - lattice.pad_low[k] + 1
    size, first = strikes.size[k], strikes.first[k]
    state[PAID, :n] = state[GROSS, :n]
    state[NET, :n] = state[HEDGE, :n]
    if size == 0:
        return 0
    row = 0
    for i in range(n):
        while row < size and strikes.cell[first + row] < low + i:
            row += 1
        node_line[i] = row
        line = lines[strikes.line[k] + row]
        state[PAID, i] += fma(line[1], state[X, i], line[0])
        state[NET, i] -= line[2]
    return size


@device
def _extend(state: Floats, low: int, high: int, n: int) -> None:
    """Carry the moments on beyond the nodes low .. high: gross P&L straight in X, the others level."""
    for row in range(COSTS, FOURTH + 1):
        for i in range(low):
            state[row, i] = state[row, low]
        for i in range(high + 1, n):
            state[row, i] = state[row, high]
    x, gross = state[X], state[GROSS]
    rise = (gross[low + 1] - gross[low]) / (x[low + 1] - x[low]) if high > low else 0.0
    for i in range(low):
        gross[i] = gross[low] + rise * (x[i] - x[low])
    rise = (gross[high] - gross[high - 1]) / (x[high] - x[high - 1]) if high > low else 0.0
    for i in range(high + 1, n):
        gross[i] = gross[high] + rise * (x[i] - x[high])


@kernel
def run_schedule(
    underlying: int,
    lattice: Lattice,
    steps: Steps,
    trading: Trading,
    strikes: Strikes,
    slope: Table,
    mark_slope: Table,
    mark_strike: Table,
    payoff: Payoff,
    break_room: int,
    out: Floats,
) -> None:
    """Moments of the P&L of one underlying under one schedule, seen from the first trade.

    Parameters
    ----------
    lattice, trading, strikes : by trade
    steps : from each trade to the next
    slope : P at the hedge vols
    mark_slope, mark_strike : P and Q at the mark vols, at the last trade, for what is still open there
    break_room : most breaks that the steps from one source node can meet
    out : (MOMENT_ROWS,), overwritten: expected gross and costs, entry included; central moments of the total; variances
        and covariance of gross and costs, from the expected conditional ones under the known law of X
    """
    trades = len(trading.look)
    size = 0
    for k in range(trades):
        size = max(size, lattice.pad_high[k] - lattice.pad_low[k] + 1)
    both = np.zeros((2, STATE_ROWS, size))
    node_line = np.zeros(size, dtype=np.int64)
    cell, part, scratch = np.empty(size, dtype=np.int32), np.empty(size), np.empty(size)
    room = _BLOCK * break_room
    breaks = Breaks(
        np.empty(room, dtype=np.int64),
        np.empty(room, dtype=np.int64),
        np.empty((room, 2), dtype=np.int64),
        np.empty((room, 2)),
        np.empty((room, 2)),
        np.empty((room, STENCIL)),
        np.empty((room, 2, STENCIL)),
        np.empty((room, 2, STENCIL)),
    )
    held, held_x = np.empty(_BLOCK), np.empty(_BLOCK)
    d_gross, d_costs, deviation = np.empty(_BLOCK), np.empty(_BLOCK), np.empty(_BLOCK)
    fold_cell, fold_theta = np.empty(_MOST_FOLDS, dtype=np.int64), np.empty(_MOST_FOLDS)
    fold_weights, fold_strength = np.empty(STENCIL), np.empty(_MOST_FOLDS)
    means, squares, powers = np.empty((2, _BLOCK)), np.empty((3, _BLOCK)), np.empty((3, _BLOCK))
    out[:] = 0.0
    costly = False
    for k in range(trades):
        costly = costly or trading.spread[k] != 0.0 or trading.unit[k] != 0.0 or trading.ticket[k] != 0.0

    now = both[0]
    last = trades - 1
    n = lattice.pad_high[last] - lattice.pad_low[last] + 1
    _fill_known(now, lattice, last, trading, slope, underlying, cell, part, scratch)
    lookup(mark_slope, underlying, trading.look[last], now[LOG_X, :n], cell, part, now[GROSS, :n], scratch[:n])
    lookup(mark_strike, underlying, trading.look[last], now[LOG_X, :n], cell, part, now[NET, :n], scratch[:n])
    for i in range(n):
        now[GROSS, i] = now[GROSS, i] * now[X, i] - now[NET, i]

    for k in range(trades - 2, -1, -1):
        after, now = both[(k + trades) % 2], both[(k + trades + 1) % 2]
        kinks = _settle_state(after, lattice, k + 1, strikes, payoff.line, node_line)
        lines = payoff.line[strikes.line[k + 1] : strikes.line[k + 1] + kinks + 1]
        theta = strikes.theta[strikes.first[k + 1] : strikes.first[k + 1] + kinks]
        _fill_known(now, lattice, k, trading, slope, underlying, cell, part, scratch)
        kind = steps.kind[k]
        first, reached = steps.first[kind], steps.last[kind] - steps.first[kind] + 1
        density = steps.density[kind]
        ticket = trading.ticket[k + 1]
        begin = steps.start[k] + BEHIND + 1
        turning = costly and kinks == 0 and ticket == 0.0
        stencil_gain, stencil_inner = steps.gain[begin - BEHIND :], steps.inner[begin - BEHIND :]
        expected_gain = 0.0
        for o in range(reached):
            expected_gain = fma(density[o], steps.gain[begin + o], expected_gain)
        offset = lattice.low[k] - lattice.pad_low[k]
        for block in range(lattice.low[k], lattice.high[k] + 1, _BLOCK):
            nb = min(_BLOCK, lattice.high[k] + 1 - block)
            own = block - lattice.pad_low[k]
            base = block + first - lattice.pad_low[k + 1]
            for i in range(nb):
                held[i] = now[HEDGE, own + i]
                held_x[i] = held[i] * now[X, own + i]
            means[:] = 0.0
            squares[:] = 0.0
            powers[:] = 0.0
            for o in range(reached):
                a, b = base + o, base + o + nb
                _accumulate_means(
                    density[o], after[PAID, a:b], after[COSTS, a:b], after[UNIT_COST, a:b], after[NET, a:b],
                    held[:nb], trading.smallest, ticket, means[0], means[1],
                )  # fmt: skip
            for i in range(nb):
                means[0, i] = fma(held_x[i], expected_gain, means[0, i])
            found = 0
            if turning:
                # Prices in the outermost twentieth at either end are too unlikely for the kinks of costs to matter.
                margin = (lattice.high[k] - lattice.low[k]) // 20
                begins = max(0, lattice.low[k] + margin - block)
                ends = min(nb, lattice.high[k] - margin + 1 - block)
                found = find_turns(breaks, after, held, begins, ends, base, reached - 1, steps.edges[kind], means)
            elif costly or kinks > 0:
                for i in range(nb):
                    found = find_breaks(
                        breaks, found, i, held[i], base + i, reached - 1, after, node_line, lines, theta, kinks,
                        trading.smallest, ticket, costly, steps.edges[kind],
                    )  # fmt: skip
                correct_means(
                    breaks, found, after, lines, kinks, held, held_x, stencil_gain, base, ticket, means
                )  # fmt: skip
            for o in range(reached):
                a, b = base + o, base + o + nb
                _deviations(
                    steps.gain[begin + o], after[PAID, a:b], after[COSTS, a:b], after[UNIT_COST, a:b],
                    after[NET, a:b], held[:nb], held_x, trading.smallest, ticket, means[0], means[1], d_gross,
                    d_costs,
                )  # fmt: skip
                _accumulate_squares(density[o], d_gross[:nb], d_costs, squares)
                _accumulate_powers(
                    density[o], after[SECOND, a:b], after[THIRD, a:b], after[FOURTH, a:b], d_gross[:nb], d_costs,
                    powers, deviation,
                )  # fmt: skip
                inner = steps.inner[begin + o]
                if inner != 0.0:
                    _accumulate_inner(
                        density[o], inner, held_x[:nb], after[SECOND, a:b], deviation, squares[0], powers
                    )  # fmt: skip
            if turning:
                correct_turns(
                    breaks, found, after, held_x, stencil_gain, stencil_inner, base, means, squares, powers
                )  # fmt: skip
            elif found > 0:
                correct_powers(breaks, found, after, held_x, stencil_inner, base, means, squares, powers)
            for i in range(nb):
                now[GROSS, own + i] = means[0, i]
                now[COSTS, own + i] = means[1, i]
                now[SECOND, own + i] = powers[0, i]
                now[THIRD, own + i] = powers[1, i]
                now[FOURTH, own + i] = powers[2, i]
                for row in range(3):
                    now[SQUARES + row, own + i] = squares[row, i]
        end = lattice.high[k] - lattice.pad_low[k]
        if costly:
            reachable = lattice.pad_high[k + 1] - lattice.pad_low[k + 1] + 1
            folds = find_folds(
                now[HEDGE], offset, end, after[NET, :reachable], lattice.pad_low[k] - lattice.pad_low[k + 1] + first,
                first, reached, steps.law[kind, 0], steps.law[kind, 1], trading.smallest, ticket, fold_cell, fold_theta,
                fold_strength,
            )  # fmt: skip
            # Gross P&L has no folds: what costs add to the variance is mended alone, so that the fit cannot harm the
            # rest. Third and fourth moments stay as they are.
            if folds > 0:
                for i in range(offset, end + 1):
                    now[SECOND, i] -= 2.0 * now[SQUARES + 1, i] + now[SQUARES + 2, i]
                for f in range(folds):
                    edge_at(steps.unit, 0, fold_theta[f], fold_weights)
                    for row in (COSTS, SQUARES + 1, SQUARES + 2):
                        mend(now[row], offset, end, fold_cell[f], fold_theta[f], fold_strength[f], fold_weights)
                for i in range(offset, end + 1):
                    now[SECOND, i] += 2.0 * now[SQUARES + 1, i] + now[SQUARES + 2, i]
        for i in range(offset, end + 1):
            share = 1.0
            if k > 0:
                z = ((lattice.pad_low[k] + i) * lattice.spacing - lattice.mean[k]) / lattice.sd[k]
                share = math.exp(-0.5 * z * z) / (lattice.sd[k] * math.sqrt(2.0 * math.pi)) * lattice.spacing
            for row in range(3):
                out[5 + row] = fma(share, now[SQUARES + row, i], out[5 + row])
        _extend(
            now, offset, lattice.high[k] - lattice.pad_low[k], lattice.pad_high[k] - lattice.pad_low[k] + 1
        )  # fmt: skip

    start = lattice.low[0] - lattice.pad_low[0]
    entry = abs(now[HEDGE, start] - trading.initial)
    out[0] = now[GROSS, start]
    out[1] = now[COSTS, start] - now[UNIT_COST, start] * entry
    if entry > trading.smallest:
        out[1] -= trading.ticket[0]
    out[2], out[3], out[4] = now[SECOND, start], now[THIRD, start], now[FOURTH, start]
