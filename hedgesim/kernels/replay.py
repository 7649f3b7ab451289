"""The compiled loop of the replay engine: inceptions over user-supplied prices, closed forms at every look.

Two independent books are kept for each schedule: the components of the P&L, look by look, discounted; and a cash
account in money of the day that earns the rate. Neither is derived from the other.
"""

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from hedgesim.kernels.closed_form import option, payoff
from hedgesim.kernels.jit import device, kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]

# Rows of the component axis.
PREMIUM_EDGE, REVALUATION, VOL_GAP_SEEN, VOL_MARK, LAG, REMAINDER, SPREAD, COMMISSION, TICKETS = range(9)
COMPONENT_ROWS = 9

# A trade below this part of the units in the book needs no ticket and is not counted: a delivery that closes the hedge
# leaves rounding of this size, and so do deltas of options that are all but worthless.
SMALLEST_TRADE = 1e-9


class Terms(NamedTuple):
    """Prices, book, market and schedules of all inceptions; arrays are read only.

    Attributes
    ----------
    t, s : calendar and variance years, (row,)
    is_close : last row of a trading day, (row,)
    price : (underlying, row)
    mark_series : vol that positions are re-marked at, (underlying, row)
    start, looks : first row and number of looks after it, (inception,)
    offset : place of look 0 on the look axis of `trades_at` and `residual`, (inception,)
    trades_at : (schedule, all looks of all inceptions)
    underlying, is_call, physical, premium, mark_follows, hedge_follows : (position,); `premium` nan for the model
        value, `*_follows` when a vol is re-marked at day closes
    strike, units, expiry_look, expiry_t, expiry_s, mark_vol, hedge_vol : (inception, position)
    rate : per calendar year
    yield_rate, is_future, initial_units, half_spread, per_unit, per_trade : (underlying,)
    """

    t: Floats
    s: Floats
    is_close: Flags
    price: Floats
    mark_series: Floats
    start: Ints
    looks: Ints
    offset: Ints
    trades_at: Flags
    underlying: Ints
    is_call: Flags
    physical: Flags
    premium: Floats
    mark_follows: Flags
    hedge_follows: Flags
    strike: Floats
    units: Floats
    expiry_look: Ints
    expiry_t: Floats
    expiry_s: Floats
    mark_vol: Floats
    hedge_vol: Floats
    rate: float
    yield_rate: Floats
    is_future: Flags
    initial_units: Floats
    half_spread: Floats
    per_unit: Floats
    per_trade: Floats


class Results(NamedTuple):
    """What the kernel fills.

    Attributes
    ----------
    components : (schedule, underlying, component, inception), discounted
    account : final cash account plus open positions at mark, discounted, (schedule, underlying, inception)
    trades : number of trades, (schedule, inception)
    turnover : traded notional, discounted, (schedule, inception)
    residual : |hedge + reference delta| x price after any trade, (schedule, looks of the
        first inceptions, as many as there is room for)
    day_count, day_sum, day_square, day_worst : daily P&L of the book at mark, (schedule, inception)
    below_look : (1/6) sum g^2 R^4, (inception,)
    """

    components: Floats
    account: Floats
    trades: Floats
    turnover: Floats
    residual: Floats
    day_count: Floats
    day_sum: Floats
    day_square: Floats
    day_worst: Floats
    below_look: Floats


@device
def _value_book(
    terms: Terms,
    n: int,
    look: int,
    mark_now: Floats,
    hedge_now: Floats,
    book: Floats,
    settled: Floats,
    delivered: Floats,
    settlement: Floats,
) -> None:
    """The book at one look, by underlying, and the positions that settle there.

    Fills the rows of `book`: 0 value at mark, 1 value at the hedge vol before any re-marking at this look, 2 after it,
    3 dU/dX, 4 sum of g, 5 sum of g k^2, all discounted and of live positions only. Adds discounted payoffs to
    `settled`; sets `delivered` (units) and `settlement` (money at the look, delivered units paid at their price).
    """
    row = terms.start[n] + look
    t = terms.t[row] - terms.t[terms.start[n]]
    s = terms.s[row] - terms.s[terms.start[n]]
    discount = math.exp(-terms.rate * t)
    remark = look > 0 and terms.is_close[row]
    book[:] = 0.0
    delivered[:] = 0.0
    settlement[:] = 0.0
    for j in range(len(terms.underlying)):
        u = terms.underlying[j]
        spot = terms.price[u, row]
        strike = terms.strike[n, j]
        units = terms.units[n, j]
        if terms.expiry_look[n, j] < look:
            continue
        if terms.expiry_look[n, j] == look:
            worth = units * payoff(spot, strike, terms.is_call[j])
            settled[u] += discount * worth
            settlement[u] += worth
            if terms.physical[j] and worth != 0.0:
                delivered[u] += units if terms.is_call[j] else -units
            continue
        growth = terms.rate - terms.yield_rate[u]
        years = terms.expiry_t[n, j] - t
        variance_years = terms.expiry_s[n, j] - s
        before = hedge_now[j]
        if remark and terms.mark_follows[j]:
            mark_now[j] = terms.mark_series[u, row]
        if remark and terms.hedge_follows[j]:
            hedge_now[j] = terms.mark_series[u, row]
        after = hedge_now[j]
        value, delta, gamma = option(spot, strike, years, variance_years, after, terms.rate, growth, terms.is_call[j])
        at_mark = value
        if mark_now[j] != after:
            at_mark = option(spot, strike, years, variance_years, mark_now[j], terms.rate, growth, terms.is_call[j])[0]
        old = value
        if before != after:
            old = option(spot, strike, years, variance_years, before, terms.rate, growth, terms.is_call[j])[0]
        g = discount * units * spot * spot * gamma
        book[0, u] += discount * units * at_mark
        book[1, u] += discount * units * old
        book[2, u] += discount * units * value
        book[3, u] += discount * units * delta * math.exp(growth * t)
        book[4, u] += g
        book[5, u] += g * after * after


@device
def _premiums(terms: Terms, n: int, premium_edge: Floats, paid: Floats) -> None:
    """Premiums paid for the positions by underlying (negative: received), and their edge against the model value."""
    premium_edge[:] = 0.0
    paid[:] = 0.0
    for j in range(len(terms.underlying)):
        u = terms.underlying[j]
        units = terms.units[n, j]
        model = option(
            terms.price[u, terms.start[n]],
            terms.strike[n, j],
            terms.expiry_t[n, j],
            terms.expiry_s[n, j],
            terms.mark_vol[n, j],
            terms.rate,
            terms.rate - terms.yield_rate[u],
            terms.is_call[j],
        )[0]
        premium = model if math.isnan(terms.premium[j]) else terms.premium[j]
        premium_edge[u] += units * (model - premium)
        paid[u] += units * premium


@kernel
def replay_inceptions(first: int, last: int, terms: Terms, out: Results) -> None:
    """Replay inceptions `first` to `last` (exclusive) under all schedules, into `out`."""
    schedules = terms.trades_at.shape[0]
    underlyings = terms.price.shape[0]
    book = np.zeros((6, underlyings))
    previous = np.zeros((6, underlyings))
    settled = np.zeros(underlyings)
    delivered = np.zeros(underlyings)
    settlement = np.zeros(underlyings)
    premium_edge = np.zeros(underlyings)
    paid = np.zeros(underlyings)
    held = np.zeros((schedules, underlyings))
    account = np.zeros((schedules, underlyings))
    scale = np.zeros(underlyings)
    wealth = np.zeros(schedules)
    watched_looks = out.residual.shape[1]
    for n in range(first, last):
        start, looks, offset = terms.start[n], terms.looks[n], terms.offset[n]
        mark_now = terms.mark_vol[n].copy()
        hedge_now = terms.hedge_vol[n].copy()
        settled[:] = 0.0
        wealth[:] = 0.0
        _premiums(terms, n, premium_edge, paid)
        scale[:] = np.abs(terms.initial_units)
        for j in range(len(terms.underlying)):
            scale[terms.underlying[j]] += abs(terms.units[n, j])
        for k in range(schedules):
            out.components[k, :, :, n] = 0.0
            out.trades[k, n] = out.turnover[k, n] = 0.0
            out.day_count[k, n] = out.day_sum[k, n] = out.day_square[k, n] = 0.0
            out.day_worst[k, n] = np.inf
            for u in range(underlyings):
                out.components[k, u, PREMIUM_EDGE, n] = premium_edge[u]
                held[k, u] = terms.initial_units[u]
                account[k, u] = -paid[u]
                if not terms.is_future[u]:
                    account[k, u] -= terms.initial_units[u] * terms.price[u, start]
        out.below_look[n] = 0.0
        for look in range(looks + 1):
            row = start + look
            t = terms.t[row] - terms.t[start]
            discount = math.exp(-terms.rate * t)
            _value_book(terms, n, look, mark_now, hedge_now, book, settled, delivered, settlement)
            # From here on rows 0 to 2 hold what has settled as well.
            for u in range(underlyings):
                book[0, u] += settled[u]
                book[1, u] += settled[u]
                book[2, u] += settled[u]
            if look > 0:
                dt = terms.t[row] - terms.t[row - 1]
                ds = terms.s[row] - terms.s[row - 1]
                t0 = terms.t[row - 1] - terms.t[start]
                for u in range(underlyings):
                    growth = terms.rate - terms.yield_rate[u]
                    x0 = terms.price[u, row - 1] * math.exp(-growth * t0)
                    dx = terms.price[u, row] * math.exp(-growth * t) - x0
                    move = dx / x0
                    weight = discount if terms.is_future[u] else math.exp(-terms.yield_rate[u] * t0)
                    seen = 0.5 * (previous[4, u] * move * move - previous[5, u] * ds)
                    revalued = (book[0, u] - book[2, u]) - (previous[0, u] - previous[2, u])
                    remarked = book[2, u] - book[1, u]
                    rest = book[1, u] - previous[2, u] - previous[3, u] * dx - seen
                    out.below_look[n] += (previous[4, u] * move * move) ** 2 / 6.0
                    for k in range(schedules):
                        out.components[k, u, REVALUATION, n] += revalued
                        out.components[k, u, VOL_GAP_SEEN, n] += seen
                        out.components[k, u, VOL_MARK, n] += remarked
                        out.components[k, u, REMAINDER, n] += rest
                        out.components[k, u, LAG, n] += (weight * held[k, u] + previous[3, u]) * dx
                        account[k, u] *= math.exp(terms.rate * dt)
                        if terms.is_future[u]:
                            account[k, u] += held[k, u] * (terms.price[u, row] - terms.price[u, row - 1])
                        else:
                            account[k, u] += held[k, u] * terms.price[u, row] * math.expm1(terms.yield_rate[u] * dt)
            for k in range(schedules):
                gap = 0.0
                at_mark = 0.0
                for u in range(underlyings):
                    spot = terms.price[u, row]
                    account[k, u] += settlement[u]
                    held[k, u] += delivered[u]
                    if not terms.is_future[u]:
                        account[k, u] -= delivered[u] * spot
                    target = 0.0
                    if look < looks:
                        t1 = terms.t[row + 1] - terms.t[start]
                        weight = (
                            math.exp(-terms.rate * t1) if terms.is_future[u] else math.exp(-terms.yield_rate[u] * t)
                        )
                        target = -book[3, u] / weight
                    if terms.trades_at[k, offset + look]:
                        trade = target - held[k, u]
                        held[k, u] = target
                        size = abs(trade)
                        spread = terms.half_spread[u] * size * spot
                        commission = terms.per_unit[u] * size
                        account[k, u] -= spread + commission
                        if not terms.is_future[u]:
                            account[k, u] -= trade * spot
                        out.components[k, u, SPREAD, n] -= discount * spread
                        out.components[k, u, COMMISSION, n] -= discount * commission
                        out.turnover[k, n] += discount * size * spot
                        if size > SMALLEST_TRADE * scale[u]:
                            account[k, u] -= terms.per_trade[u]
                            out.components[k, u, TICKETS, n] -= discount * terms.per_trade[u]
                            out.trades[k, n] += 1.0
                    gap += abs(held[k, u] - target) * spot
                    at_mark += discount * account[k, u] + book[0, u] - settled[u]
                    if not terms.is_future[u]:
                        at_mark += discount * held[k, u] * spot
                if offset + looks < watched_looks and look < looks:
                    out.residual[k, offset + look] = gap
                if look > 0 and (terms.is_close[row] or look == looks):
                    day = at_mark - wealth[k]
                    wealth[k] = at_mark
                    out.day_count[k, n] += 1.0
                    out.day_sum[k, n] += day
                    out.day_square[k, n] += day * day
                    out.day_worst[k, n] = min(out.day_worst[k, n], day)
            for u in range(underlyings):
                if look == looks:
                    for k in range(schedules):
                        out.account[k, u, n] = discount * account[k, u] + book[0, u] - settled[u]
            previous[:] = book
