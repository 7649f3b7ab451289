"""The tile kernel: draws fine paths once, evaluates the book once a look, and hedges every schedule on them.

Discounted units throughout: X = S exp(-b t). Time runs outside, the few hundred paths of a tile inside. Per path the
kernel keeps Y, the discounted gain of holding one hedge unit since the inception, so that a schedule costs work only
where it trades: the gain of a hedge is the sum over its trades of -(units bought) Y.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from hedgesim.kernels.jit import device, kernel
from hedgesim.kernels.random import draw_normals, seed_streams
from hedgesim.kernels.rows import whole_lanes
from hedgesim.kernels.tables import TILE, Table, lookup
from hedgesim.kernels.vector_math import as_bits, exp, expm1_near_zero, expm1_tiny, fma

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Rows of the results, by underlying and path: what all schedules share, and what each has of its own.
PATH_ROWS = ("revaluation", "vol_gap", "sampling", "remainder", "slope_gain", "settled")
TRADE_ROWS = ("gain", "turnover", "units", "idle", "idle_discount")
DAY_ROWS = ("sum", "square", "worst")
# Residual deltas are counted in bins of 1/64 octave from 2**-40 to 2**60 currency units.
RESIDUAL_BINS = 6400
_BIN_SHIFT, _FIRST_BIN = np.int64(46), np.int64((1023 - 40) << 6)
_LARGEST_NORMAL = 14.0


class Diffusion(NamedTuple):
    """Exact log steps of correlated geometric Brownian motions; arrays are (underlying, look) unless said otherwise.

    log X moves by mean + sd Z; `variance` is sigma^2 ds, `hedge_variance` k^2 ds at the one hedge vol of an
    underlying (used when `one_vol`), `step_s` (look,) is ds; `mixing` is the lower Cholesky factor of the correlation;
    `start` and `log_start` (underlying,) are S_0 and its log.
    """

    start: Floats
    log_start: Floats
    mean: Floats
    sd: Floats
    variance: Floats
    hedge_variance: Floats
    step_s: Floats
    mixing: Floats
    one_vol: bool


class Hedging(NamedTuple):
    """When schedules trade and what a trade is worth.

    Attributes
    ----------
    first, who : schedules that trade at look i are who[first[i]:first[i + 1]]
    slot : (look,) where the target of the look is kept while a schedule holds it, -1 when none trades; what is held
        is the target of the last trade, so that schedules which traded at the same look share it. Slot 0 has the
        initial units
    from_slot : like `who`: what the schedule held before
    inverse_weight : (underlying, look) hedge units per unit of dU/dX, see Market.hedge_weights; 0 at the last look
    weight : (underlying, look) its inverse
    price_factor : (underlying, look) exp((b - r) t): X times it is the price discounted at r
    discount : (look,) exp(-r t)
    initial : (underlying,) units held before the inception
    smallest : (underlying,) fewer units than this cost no ticket: they are rounding, not a trade
    schedules : their number
    count_units : keep the row that only per-unit costs need
    """

    first: Ints
    who: Ints
    slot: Ints
    from_slot: Ints
    inverse_weight: Floats
    weight: Floats
    price_factor: Floats
    discount: Floats
    initial: Floats
    smallest: Floats
    schedules: int
    count_units: bool


class Payoff(NamedTuple):
    """Piecewise linear payoffs, by underlying and look; see hedgesim.tables.payoff_knots."""

    first: Ints
    size: Ints
    knot: Floats
    line: Floats


class BookTables(NamedTuple):
    """What the kernel asks of a book.

    Attributes
    ----------
    slope : P at the hedge vols
    variance_slope : sum_j k_j^2 P_j, used when the hedge vols of an underlying differ
    mark_slope, mark_strike : P and Q at the mark vols, at the looks where the book is valued
    hedge_strike : Q at the hedge vols, at the last look when positions are still open there
    payoff : what settles
    start_hedge, start_mark : (underlying,) U^k(0) and U^m(0)
    valued : (look,) the looks that end a trading day, or the last one
    """

    slope: Table
    variance_slope: Table
    mark_slope: Table
    mark_strike: Table
    hedge_strike: Table
    payoff: Payoff
    start_hedge: Floats
    start_mark: Floats
    valued: NDArray[np.bool_]


class DayCosts(NamedTuple):
    """Cost terms by underlying, to charge the daily P&L of watched paths.

    `tickets` (schedule, look) is the sum of exp(-r t) over the schedule's trading looks so far.
    """

    half_spread: Floats
    per_unit: Floats
    per_trade: Floats
    tickets: Floats


@device
def _settle(payoff: Payoff, u: int, look: int, x: Floats, paid: Floats, delivered: Floats) -> None:
    """Add the discounted payoff of what settles at the look to `paid`; set the units that are handed over."""
    first, size = payoff.first[u, look], payoff.size[u, look]
    for p in range(len(x)):
        low, high = 0, size
        while low < high:
            middle = (low + high) >> 1
            if payoff.knot[first + middle] < x[p]:
                low = middle + 1
            else:
                high = middle
        line = payoff.line[first + low]
        paid[p] += line[0] + line[1] * x[p]
        delivered[p] = line[2]


@device
def _trade(
    target: Floats, held: Floats, y: Floats, price: Floats, smallest: float, gain: Floats, turnover: Floats
) -> int:
    """Book the trade from `held` to `target` units; returns how many paths had no more than `smallest` to trade."""
    idle = 0
    for p in range(len(target)):
        bought = target[p] - held[p]
        gain[p] = fma(-bought, y[p], gain[p])
        size = abs(bought)
        turnover[p] = fma(size, price[p], turnover[p])
        idle += size <= smallest
    return idle


@device
def _trade_after_delivery(
    target: Floats,
    held: Floats,
    delivered: Floats,
    y: Floats,
    price: Floats,
    smallest: float,
    gain: Floats,
    turnover: Floats,
) -> int:
    """As `_trade`; units handed over by settling options count as bought, but cost nothing."""
    idle = 0
    for p in range(len(target)):
        bought = target[p] - held[p]
        gain[p] = fma(-bought, y[p], gain[p])
        size = abs(bought - delivered[p])
        turnover[p] = fma(size, price[p], turnover[p])
        idle += size <= smallest
    return idle


@device
def _count_trade(
    target: Floats,
    held: Floats,
    delivered: Floats,
    smallest: float,
    discount: float,
    units: Floats,
    idle: Floats,
    idle_discount: Floats,
) -> None:
    """Book units and idle looks, where they are needed."""
    for p in range(len(target)):
        size = abs(target[p] - held[p] - delivered[p])
        units[p] = fma(size, discount, units[p])
        if size <= smallest:
            idle[p] += 1.0
            idle_discount[p] += discount


@device
def _grow(mean: float, sd: float, z: Floats, log_x: Floats, x: Floats, gain: Floats, dx: Floats) -> None:
    """Move the paths over one look: `gain` is set to X_i+1 / X_i - 1, `dx` to X_i+1 - X_i."""
    reach = abs(mean) + _LARGEST_NORMAL * sd
    if reach < 1.0 / 12.0:
        for p in range(len(z)):
            step = fma(sd, z[p], mean)
            log_x[p] += step
            gain[p] = expm1_tiny(step)
    elif reach < 0.34:
        for p in range(len(z)):
            step = fma(sd, z[p], mean)
            log_x[p] += step
            gain[p] = expm1_near_zero(step)
    else:
        for p in range(len(z)):
            step = fma(sd, z[p], mean)
            log_x[p] += step
            gain[p] = exp(step) - 1.0
    for p in range(len(z)):
        dx[p] = x[p] * gain[p]
        x[p] += dx[p]


@device
def _book_look(
    variance: float, weight: float, slope: Floats, gamma: Floats, gain: Floats, dx: Floats, y: Floats, rows: Floats
) -> None:
    """Book what one look adds to sampling and to sum P dX; gamma is X P'(log X)."""
    sampling, slope_gain = rows[2], rows[4]
    for p in range(len(gain)):
        sampling[p] = fma(0.5 * gamma[p], fma(gain[p], gain[p], -variance), sampling[p])
    for p in range(len(gain)):
        slope_gain[p] = fma(slope[p], dx[p], slope_gain[p])
        y[p] = fma(weight, dx[p], y[p])


@device
def _count_residuals(size: Floats, n: int, bins: Ints) -> float:
    total = 0.0
    for p in range(n):
        total += size[p]
        place = (as_bits(size[p]) >> _BIN_SHIFT) - _FIRST_BIN
        bins[min(max(place, np.int64(0)), np.int64(RESIDUAL_BINS - 1))] += 1
    return total


@kernel
def run_chunk(
    seed: int,
    first_path: int,
    looks: int,
    diffusion: Diffusion,
    hedging: Hedging,
    book: BookTables,
    day_costs: DayCosts,
    watch: bool,
    path_out: Floats,
    trade_out: Floats,
    residual_bins: Ints,
    residual_sum: Floats,
    day_out: Floats,
) -> None:
    """Ledger rows of the paths from `first_path` on.

    The last tile is worked off whole and its surplus paths are dropped.

    Parameters
    ----------
    seed, first_path : the normals of path n are a pure function of (seed, underlying, n)
    looks : looks after the inception
    watch : also fill the last three arrays, which may be empty otherwise
    path_out : (underlying, PATH_ROWS, path), overwritten. `slope_gain` is sum P dX, `settled` the payoffs and the
        mark of what is still open at the last look; the others are components of the P&L identity
    trade_out : (schedule, underlying, TRADE_ROWS, path), overwritten. `gain` is the discounted gain of the hedge;
        `idle` counts looks at which the schedule found nothing to trade
    residual_bins, residual_sum : (schedule, RESIDUAL_BINS) and (schedule,), added to
    day_out : (schedule, DAY_ROWS, path), overwritten: sum, sum of squares and minimum of daily P&L
    """
    count = path_out.shape[2]
    underlyings = path_out.shape[0]
    schedules = hedging.schedules
    lanes = whole_lanes(min(TILE, count))
    tile = (underlyings, lanes)
    log_x, x, y = np.empty(tile), np.empty(tile), np.empty(tile)
    slope, gamma = np.empty(tile), np.empty(tile)
    target, price, paid, delivered = np.empty(tile), np.empty(tile), np.empty(tile), np.zeros(tile)
    fresh = np.empty(tile)
    state = np.empty((underlyings, 4, lanes), dtype=np.uint64)
    raw, late = np.empty(lanes, dtype=np.uint64), np.empty(lanes + 1, dtype=np.int32)
    z, gain, dx = np.empty(lanes), np.empty(lanes), np.empty(lanes)
    cell, part = np.empty(lanes, dtype=np.int32), np.empty(lanes)
    one, two, three = np.empty(lanes), np.empty(lanes), np.empty(lanes)
    rows = np.empty((underlyings, len(PATH_ROWS), lanes))
    targets = np.empty((schedules + 2, underlyings, lanes))
    holds = np.empty(schedules, dtype=np.int64)
    trades = np.empty((schedules, underlyings, len(TRADE_ROWS), lanes))
    before = np.empty((schedules, lanes))
    days = np.empty((schedules, len(DAY_ROWS), lanes))

    for begin in range(0, count, lanes):
        n = min(lanes, count - begin)
        for u in range(underlyings):
            seed_streams(np.uint64(seed), np.uint64(u), first_path + begin, state[u])
            log_x[u] = diffusion.log_start[u]
            x[u] = diffusion.start[u]
            targets[0, u] = hedging.initial[u]
        holds[:] = 0
        y[:] = 0.0
        paid[:] = 0.0
        rows[:] = 0.0
        trades[:] = 0.0
        days[:, 0:2] = 0.0
        days[:, 2] = np.inf

        for i in range(looks + 1):
            for u in range(underlyings):
                settles = book.payoff.first[u, i] >= 0
                if settles:
                    _settle(book.payoff, u, i, x[u], paid[u], delivered[u])
                lookup(book.slope, u, i, log_x[u], cell, part, slope[u], gamma[u])
                factor = hedging.price_factor[u, i]
                unwind = -hedging.inverse_weight[u, i]
                smallest = hedging.smallest[u]
                for p in range(lanes):
                    gamma[u, p] *= x[u, p]
                    target[u, p] = unwind * slope[u, p]
                    price[u, p] = factor * x[u, p]
                asked = hedging.slot[i]
                if asked >= 0:
                    targets[asked, u] = target[u]
                for k in range(hedging.first[i], hedging.first[i + 1]):
                    s = hedging.who[k]
                    held, mine = targets[hedging.from_slot[k], u], trades[s, u]
                    if settles:
                        idle = _trade_after_delivery(
                            target[u], held, delivered[u], y[u], price[u], smallest, mine[0], mine[1]
                        )
                    else:
                        idle = _trade(target[u], held, y[u], price[u], smallest, mine[0], mine[1])
                    if hedging.count_units or idle > 0:
                        _count_trade(
                            target[u], held, delivered[u], smallest, hedging.discount[i], mine[2], mine[3], mine[4]
                        )
                if settles:
                    delivered[u] = 0.0
            for k in range(hedging.first[i], hedging.first[i + 1]):
                holds[hedging.who[k]] = hedging.slot[i]

            if watch and i < looks:
                for s in range(schedules):
                    one[:] = 0.0
                    for u in range(underlyings):
                        for p in range(lanes):
                            one[p] += abs(targets[holds[s], u, p] - target[u, p]) * price[u, p] / hedging.discount[i]
                    residual_sum[s] += _count_residuals(one, n, residual_bins[s])
            if watch and (i == 0 or book.valued[i]):
                z[:] = 0.0
                for u in range(underlyings):
                    lookup(book.mark_slope, u, i, log_x[u], cell, part, one, three)
                    lookup(book.mark_strike, u, i, log_x[u], cell, part, two, three)
                    for p in range(lanes):
                        z[p] += one[p] * x[u, p] - two[p] + paid[u, p]
                for s in range(schedules):
                    one[:] = z
                    if i > 0:
                        for u in range(underlyings):
                            mine = trades[s, u]
                            for p in range(lanes):
                                one[p] += mine[0, p] + targets[holds[s], u, p] * y[u, p]
                                one[p] -= day_costs.half_spread[u] * mine[1, p] + day_costs.per_unit[u] * mine[2, p]
                                one[p] -= day_costs.per_trade[u] * (day_costs.tickets[s, i] - mine[4, p])
                        for p in range(lanes):
                            day = one[p] - before[s, p]
                            days[s, 0, p] += day
                            days[s, 1, p] += day * day
                            days[s, 2, p] = min(days[s, 2, p], day)
                    before[s] = one

            if i < looks:
                for u in range(underlyings):
                    draw_normals(state[u], raw, one, two, late, fresh[u])
                for u in range(underlyings):
                    # The first underlying's normals are its own: the factor's corner is one.
                    normals = fresh[0] if u == 0 else z
                    if u > 0:
                        share = diffusion.mixing[u, u]
                        for p in range(lanes):
                            z[p] = share * fresh[u, p]
                        for v in range(u):
                            share = diffusion.mixing[u, v]
                            for p in range(lanes):
                                z[p] = fma(share, fresh[v, p], z[p])
                    gap = rows[u, 1]
                    variance = diffusion.variance[u, i]
                    if diffusion.one_vol:
                        excess = 0.5 * (variance - diffusion.hedge_variance[u, i])
                        for p in range(lanes):
                            gap[p] = fma(excess, gamma[u, p], gap[p])
                    else:
                        lookup(book.variance_slope, u, i, log_x[u], cell, part, one, two)
                        for p in range(lanes):
                            gap[p] += 0.5 * (variance * gamma[u, p] - diffusion.step_s[i] * x[u, p] * two[p])
                    _grow(diffusion.mean[u, i], diffusion.sd[u, i], normals, log_x[u], x[u], gain, dx)
                    _book_look(variance, hedging.weight[u, i], slope[u], gamma[u], gain, dx, y[u], rows[u])

        for u in range(underlyings):
            # What is still open at the last look is valued, at both vol sets; tables without cells give zero.
            lookup(book.slope, u, looks, log_x[u], cell, part, one, three)
            lookup(book.hedge_strike, u, looks, log_x[u], cell, part, two, three)
            for p in range(lanes):
                z[p] = one[p] * x[u, p] - two[p]
            lookup(book.mark_slope, u, looks, log_x[u], cell, part, one, three)
            lookup(book.mark_strike, u, looks, log_x[u], cell, part, two, three)
            at_start = book.start_hedge[u] - book.start_mark[u]
            for p in range(lanes):
                marked = one[p] * x[u, p] - two[p]
                rows[u, 0, p] = marked - z[p] + at_start
                # Telescoped: the change of U^k less its delta and gamma terms.
                explained = rows[u, 4, p] + rows[u, 1, p] + rows[u, 2, p]
                rows[u, 3, p] = z[p] + paid[u, p] - book.start_hedge[u] - explained
                rows[u, 5, p] = paid[u, p] + marked

        end = begin + n
        path_out[:, :, begin:end] = rows[:, :, :n]
        trade_out[:, :, :, begin:end] = trades[:, :, :, :n]
        if watch:
            day_out[:, :, begin:end] = days[:, :, :n]
