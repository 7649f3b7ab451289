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
from hedgesim.kernels.tables import Table, lookup
from hedgesim.kernels.vector_math import as_bits, exp, expm1_near_zero, expm1_tiny, fma

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

TILE = 256
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
    inverse_weight : (underlying, look) hedge units per unit of dU/dX, see Market.hedge_weights; 0 at the last look
    weight : (underlying, look) its inverse
    price_factor : (underlying, look) exp((b - r) t): X times it is the price discounted at r
    discount : (look,) exp(-r t)
    initial : (underlying,) units held before the inception
    schedules : their number
    count_units : keep the row that only per-unit costs need
    """

    first: Ints
    who: Ints
    inverse_weight: Floats
    weight: Floats
    price_factor: Floats
    discount: Floats
    initial: Floats
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
    target: Floats,
    delivered: Floats,
    y: Floats,
    price: Floats,
    discount: float,
    count_units: bool,
    hedge: Floats,
    rows: Floats,
    traded: Floats,
) -> None:
    """Set the hedge to `target`; units handed over by settling options count as bought, but cost nothing."""
    gain, turnover = rows[0], rows[1]
    idle = 0
    for p in range(len(target)):
        bought = target[p] - hedge[p]
        hedge[p] = target[p]
        gain[p] = fma(-bought, y[p], gain[p])
        size = abs(bought - delivered[p])
        turnover[p] = fma(size, price[p], turnover[p])
        traded[p] = size
        idle += size == 0.0
    if count_units:
        units = rows[2]
        for p in range(len(target)):
            units[p] = fma(traded[p], discount, units[p])
    if idle > 0:
        for p in range(len(target)):
            if traded[p] == 0.0:
                rows[3, p] += 1.0
                rows[4, p] += discount


@device
def _step(
    mean: float,
    sd: float,
    variance: float,
    hedge_variance: float,
    step_s: float,
    weight: float,
    one_vol: bool,
    z: Floats,
    slope: Floats,
    gamma: Floats,
    hedge_gamma: Floats,
    log_x: Floats,
    x: Floats,
    y: Floats,
    rows: Floats,
) -> None:
    """Move the paths over one look and book what the look adds. gamma is X P'(log X), times k^2 in hedge_gamma."""
    gap, sampling, pdx = rows[1], rows[2], rows[4]
    reach = abs(mean) + _LARGEST_NORMAL * sd
    if reach < 1.0 / 12.0:
        for p in range(len(z)):
            z[p] = fma(sd, z[p], mean)
            gain = expm1_tiny(z[p])
            dx = x[p] * gain
            half = 0.5 * gamma[p]
            sampling[p] = fma(half, fma(gain, gain, -variance), sampling[p])
            pdx[p] = fma(slope[p], dx, pdx[p])
            y[p] = fma(weight, dx, y[p])
            x[p] += dx
            log_x[p] += z[p]
    else:
        for p in range(len(z)):
            z[p] = fma(sd, z[p], mean)
            gain = expm1_near_zero(z[p]) if reach < 0.34 else exp(z[p]) - 1.0
            dx = x[p] * gain
            half = 0.5 * gamma[p]
            sampling[p] = fma(half, fma(gain, gain, -variance), sampling[p])
            pdx[p] = fma(slope[p], dx, pdx[p])
            y[p] = fma(weight, dx, y[p])
            x[p] += dx
            log_x[p] += z[p]
    if one_vol:
        excess = 0.5 * (variance - hedge_variance)
        for p in range(len(z)):
            gap[p] = fma(excess, gamma[p], gap[p])
    else:
        for p in range(len(z)):
            gap[p] += 0.5 * (variance * gamma[p] - step_s * hedge_gamma[p])


@device
def _count_residuals(size: Floats, bins: Ints) -> float:
    total = 0.0
    for p in range(len(size)):
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
    log_x, x, y = (
        np.empty((underlyings, TILE)),
        np.empty((underlyings, TILE)),
        np.empty((underlyings, TILE)),
    )
    state = np.empty((underlyings, 4, TILE), dtype=np.uint64)
    raw = np.empty(TILE, dtype=np.uint64)
    fresh = np.empty((underlyings, TILE))
    z = np.empty(TILE)
    slope, gamma = np.empty((underlyings, TILE)), np.empty((underlyings, TILE))
    hedge_gamma = np.empty((underlyings, TILE))
    target, price = np.empty((underlyings, TILE)), np.empty((underlyings, TILE))
    paid, delivered = np.empty((underlyings, TILE)), np.zeros((underlyings, TILE))
    scratch, scratch2, scratch3 = np.empty(TILE), np.empty(TILE), np.empty(TILE)
    hedge = np.empty((schedules, underlyings, TILE))
    wealth, before, book_value = np.empty(TILE), np.empty((schedules, TILE)), np.empty(TILE)

    for begin in range(0, count, TILE):
        n = min(TILE, count - begin)
        end = begin + n
        for u in range(underlyings):
            seed_streams(np.uint64(seed), np.uint64(u), first_path + begin, state[u, :, :n])
            log_x[u, :n] = diffusion.log_start[u]
            x[u, :n] = diffusion.start[u]
            y[u, :n] = 0.0
            paid[u, :n] = 0.0
            path_out[u, :, begin:end] = 0.0
            for s in range(schedules):
                hedge[s, u, :n] = hedging.initial[u]
                trade_out[s, u, :, begin:end] = 0.0
        if watch:
            day_out[:, 0:2, begin:end] = 0.0
            day_out[:, 2, begin:end] = np.inf

        for i in range(looks + 1):
            for u in range(underlyings):
                settles = book.payoff.first[u, i] >= 0
                if settles:
                    _settle(book.payoff, u, i, x[u, :n], paid[u, :n], delivered[u, :n])
                lookup(book.slope, u, i, log_x[u, :n], slope[u, :n], gamma[u, :n])
                factor = hedging.price_factor[u, i]
                unwind = -hedging.inverse_weight[u, i]
                for p in range(n):
                    gamma[u, p] *= x[u, p]
                    target[u, p] = unwind * slope[u, p]
                    price[u, p] = factor * x[u, p]
                for k in range(hedging.first[i], hedging.first[i + 1]):
                    s = hedging.who[k]
                    _trade(
                        target[u, :n],
                        delivered[u, :n],
                        y[u, :n],
                        price[u, :n],
                        hedging.discount[i],
                        hedging.count_units,
                        hedge[s, u, :n],
                        trade_out[s, u, :, begin:end],
                        scratch[:n],
                    )
                if settles:
                    delivered[u, :n] = 0.0

            if watch:
                if i < looks:
                    for s in range(schedules):
                        wealth[:n] = 0.0
                        for u in range(underlyings):
                            for p in range(n):
                                gap = abs(hedge[s, u, p] - target[u, p])
                                wealth[p] += gap * price[u, p] / hedging.discount[i]
                        residual_sum[s] += _count_residuals(wealth[:n], residual_bins[s])
                if i == 0 or book.valued[i]:
                    book_value[:n] = 0.0
                    for u in range(underlyings):
                        lookup(book.mark_slope, u, i, log_x[u, :n], scratch[:n], scratch3[:n])
                        lookup(book.mark_strike, u, i, log_x[u, :n], scratch2[:n], scratch3[:n])
                        for p in range(n):
                            book_value[p] += scratch[p] * x[u, p] - scratch2[p] + paid[u, p]
                    for s in range(schedules):
                        for p in range(n):
                            wealth[p] = book_value[p]
                        if i > 0:
                            for u in range(underlyings):
                                rows = trade_out[s, u, :, begin:end]
                                for p in range(n):
                                    wealth[p] += rows[0, p] + hedge[s, u, p] * y[u, p]
                                    wealth[p] -= day_costs.half_spread[u] * rows[1, p]
                                    wealth[p] -= day_costs.per_unit[u] * rows[2, p]
                                    wealth[p] -= day_costs.per_trade[u] * (day_costs.tickets[s, i] - rows[4, p])
                            for p in range(n):
                                day = wealth[p] - before[s, p]
                                day_out[s, 0, begin + p] += day
                                day_out[s, 1, begin + p] += day * day
                                day_out[s, 2, begin + p] = min(day_out[s, 2, begin + p], day)
                        for p in range(n):
                            before[s, p] = wealth[p]

            if i < looks:
                for u in range(underlyings):
                    draw_normals(state[u, :, :n], raw[:n], fresh[u, :n])
                for u in range(underlyings):
                    for p in range(n):
                        z[p] = diffusion.mixing[u, u] * fresh[u, p]
                    for v in range(u):
                        share = diffusion.mixing[u, v]
                        for p in range(n):
                            z[p] = fma(share, fresh[v, p], z[p])
                    if not diffusion.one_vol:
                        lookup(book.variance_slope, u, i, log_x[u, :n], scratch[:n], hedge_gamma[u, :n])
                        for p in range(n):
                            hedge_gamma[u, p] *= x[u, p]
                    _step(
                        diffusion.mean[u, i],
                        diffusion.sd[u, i],
                        diffusion.variance[u, i],
                        diffusion.hedge_variance[u, i],
                        diffusion.step_s[i],
                        hedging.weight[u, i],
                        diffusion.one_vol,
                        z[:n],
                        slope[u, :n],
                        gamma[u, :n],
                        hedge_gamma[u, :n],
                        log_x[u, :n],
                        x[u, :n],
                        y[u, :n],
                        path_out[u, :, begin:end],
                    )

        for u in range(underlyings):
            # What is still open at the last look is valued, at both vol sets; tables without cells give zero.
            lookup(book.slope, u, looks, log_x[u, :n], scratch[:n], scratch3[:n])
            lookup(book.hedge_strike, u, looks, log_x[u, :n], scratch2[:n], scratch3[:n])
            rows = path_out[u, :, begin:end]
            for p in range(n):
                rows[3, p] = scratch[p] * x[u, p] - scratch2[p]
            lookup(book.mark_slope, u, looks, log_x[u, :n], scratch[:n], scratch3[:n])
            lookup(book.mark_strike, u, looks, log_x[u, :n], scratch2[:n], scratch3[:n])
            vega_hedge = book.start_hedge[u] - book.start_mark[u]
            for p in range(n):
                marked = scratch[p] * x[u, p] - scratch2[p]
                rows[0, p] = marked - rows[3, p] + vega_hedge
                rows[5, p] = paid[u, p] + marked
                # Telescoped: the change of U^k less its delta and gamma terms.
                rows[3, p] += paid[u, p] - book.start_hedge[u] - rows[4, p] - rows[1, p] - rows[2, p]


class Accounts(NamedTuple):
    """Constants that turn kernel rows into ledger components.

    Attributes
    ----------
    premium_edge, premium_cash : (underlying,) premiums less model value, and the money received at the inception
    half_spread, per_unit, per_trade : (underlying,) cost terms
    trades, tickets : (schedule,) trading looks, and the sum of exp(-r t) over them
    moving : (underlying * component,) columns that vary from path to path
    """

    premium_edge: Floats
    premium_cash: Floats
    half_spread: Floats
    per_unit: Floats
    per_trade: Floats
    trades: Floats
    tickets: Floats
    moving: NDArray[np.bool_]


@kernel
def close_accounts(
    path_rows: Floats,
    trade_rows: Floats,
    accounts: Accounts,
    schedule: int,
    columns: Floats,
    totals: Floats,
    trades: Floats,
    turnover: Floats,
) -> None:
    """Components and totals of one schedule.

    Parameters
    ----------
    path_rows, trade_rows : `path_out` of `run_chunk`, and `trade_out` of the schedule, (underlying, row, path)
    columns : (underlying * component, path), overwritten: premium_edge, revaluation, vol_gap, sampling, lag,
        remainder, spread, commission, tickets
    totals, trades, turnover : (path,), overwritten; totals come from the cash account, not from the columns. `trades`
        counts looks at which anything was traded, added over underlyings
    """
    underlyings, _, n = path_rows.shape
    width = columns.shape[0] // underlyings
    totals[:] = 0.0
    trades[:] = 0.0
    turnover[:] = 0.0
    for u in range(underlyings):
        path, trade = path_rows[u], trade_rows[u]
        part = columns[u * width : (u + 1) * width]
        for p in range(n):
            part[0, p] = accounts.premium_edge[u]
            part[1, p] = path[0, p]
            part[2, p] = path[1, p]
            part[3, p] = path[2, p]
            part[4, p] = path[4, p] + trade[0, p]
            part[5, p] = path[3, p]
            part[6, p] = -accounts.half_spread[u] * trade[1, p]
            part[7, p] = -accounts.per_unit[u] * trade[2, p]
            part[8, p] = -accounts.per_trade[u] * (accounts.tickets[schedule] - trade[4, p])
            totals[p] += accounts.premium_cash[u] + path[5, p] + trade[0, p]
            totals[p] += part[6, p] + part[7, p] + part[8, p]
            trades[p] += accounts.trades[schedule] - trade[3, p]
            turnover[p] += trade[1, p]
