"""One path under one schedule, look by look: the explained examples, and the plain statement of the P&L identity.

Everything is written as arrays over (position, look) and sums of discounted flows, for reading rather than speed.
"""

from dataclasses import dataclass

import numpy as np

from hedgesim.book import Book, premium_received
from hedgesim.costs import CostTerms
from hedgesim.engine.ledger import COST_COMPONENTS, Story
from hedgesim.kernels.replay import SMALLEST_TRADE
from hedgesim.market import Flags, Floats, Ints, LookGrid, Market, frozen
from hedgesim.pricing import Greeks, greeks
from hedgesim.schedules import Compiled


@dataclass(frozen=True)
class LookByLook:
    """The P&L of one path under one schedule, discounted, by underlying.

    Attributes
    ----------
    components : name -> cumulative P&L, (underlying, look); `costs.*` by kind; `total` from the cash flows, with the
        hedge at its price and open positions at mark
    hedge : (underlying, look): units held after the look
    target : (underlying, look): the hedge that the reference delta asks for, minus the delta; zero at the last look
    trade : (underlying, look): units bought at the look
    ticket : (underlying, look): the trade is more than rounding, and counted
    """

    components: dict[str, Floats]
    hedge: Floats
    target: Floats
    trade: Floats
    ticket: Flags


def story(
    book: Book,
    market: Market,
    grid: LookGrid,
    compiled: Compiled,
    schedule_index: int,
    costs: CostTerms,
    price: Floats,
    *,
    label: str,
    path: int,
    variance: Floats | None = None,
    mark_path: Floats | None = None,
    hedge_path: Floats | None = None,
) -> Story:
    """Tell one path; parameters as for `look_by_look`, `label` and `path` as in `Story`."""
    told = look_by_look(
        book,
        market,
        grid,
        compiled,
        schedule_index,
        costs,
        price,
        variance=variance,
        mark_path=mark_path,
        hedge_path=hedge_path,
    )
    components = {name: rows.sum(axis=0) for name, rows in told.components.items()}
    kinds = [components.pop(kind) for kind in COST_COMPONENTS]
    total = components.pop("total")
    components |= {"costs": np.sum(kinds, axis=0), "total": total}
    return Story(
        label=label,
        path=path,
        schedule=compiled.names[schedule_index],
        t=frozen(grid.t),
        price=frozen(price),
        hedge=frozen(told.hedge),
        target=frozen(told.target),
        components={name: frozen(row) for name, row in components.items()},
    )


def look_by_look(
    book: Book,
    market: Market,
    grid: LookGrid,
    compiled: Compiled,
    schedule_index: int,
    costs: CostTerms,
    price: Floats,
    *,
    variance: Floats | None = None,
    mark_path: Floats | None = None,
    hedge_path: Floats | None = None,
) -> LookByLook:
    """Components of the P&L of one path under one schedule.

    Parameters
    ----------
    book, market, grid : one inception
    compiled, schedule_index : the schedule
    costs : by underlying
    price : (underlying, look)
    variance : integrated variance of each look under the path's own source, (underlying, look after the first); when
        given, `vol_gap` and `sampling` stand in the place of `vol_gap_seen`
    mark_path, hedge_path : vols in force from each look on, (position, look); default: those of the inception

    Returns
    -------
    LookByLook : at every look the components add to `total`
    """
    shape = (book.size, grid.looks + 1)
    look = np.arange(shape[1])
    mark = np.broadcast_to(book.mark_vol[:, None], shape) if mark_path is None else mark_path
    hedge = np.broadcast_to(book.hedge_vol[:, None], shape) if hedge_path is None else hedge_path
    before = np.concatenate([hedge[:, :1], hedge[:, :-1]], axis=1)
    ends = np.minimum(book.expiry_look, grid.looks)
    live = look < book.expiry_look[:, None]
    discount = np.exp(-market.rate * grid.t)
    at = price[book.underlying]
    scale = book.units[:, None] * discount

    sign = np.where(book.is_call, 1.0, -1.0)
    final = at[np.arange(book.size), ends]
    payoff = book.units * np.maximum(sign * (final - book.strike), 0.0) * discount[ends]
    settled = np.where(live, 0.0, payoff[:, None])
    with_mark = _greeks(book, market, grid, at, mark)
    with_old = _greeks(book, market, grid, at, before)
    with_hedge = _greeks(book, market, grid, at, hedge)
    at_mark, at_old, at_hedge = (
        _by_underlying(np.where(live, scale * g.value, settled), book, market)
        for g in (with_mark, with_old, with_hedge)
    )
    growth = np.exp(np.outer(market.growth, grid.t))
    slope = _by_underlying(np.where(live, scale * with_hedge.delta, 0.0), book, market) * growth
    g = np.where(live, scale * at * at * with_hedge.gamma, 0.0)

    X = price / growth
    dX, R2 = np.diff(X), np.square(np.diff(X) / X[:, :-1])
    ds = np.diff(grid.s)
    gamma_gain = 0.5 * _by_underlying(g, book, market)[:, :-1] * R2
    decay = 0.5 * _by_underlying(g * hedge * hedge, book, market)[:, :-1] * ds

    weight = market.hedge_weights(grid.t)
    target = np.zeros_like(price)
    target[:, :-1] = -slope[:, :-1] / weight
    delivered = _delivered(book, market, look, final)
    gross_units = np.abs(book.initial_units) + _by_underlying(np.abs(book.units)[:, None], book, market)[:, 0]
    held, trade = _hedge(target, delivered, compiled.trades_at[schedule_index], book.initial_units)
    ticket = np.abs(trade) > SMALLEST_TRADE * gross_units[:, None]

    model = -premium_received(book, market)
    fair = scale[:, 0] * with_mark.value[:, 0]
    edge = _by_underlying((fair - model)[:, None], book, market)
    parts = {
        "premium_edge": np.broadcast_to(edge, price.shape),
        "revaluation": (at_mark - at_hedge) - (at_mark - at_hedge)[:, :1],
    }
    if variance is None:
        parts["vol_gap_seen"] = _running(gamma_gain - decay)
    else:
        expected = 0.5 * _by_underlying(g, book, market)[:, :-1] * variance
        parts["vol_gap"] = _running(expected - decay)
        parts["sampling"] = _running(gamma_gain - expected)
    parts["vol_mark"] = np.cumsum(at_hedge - at_old, axis=1)
    parts["lag"] = _running((weight * held[:, :-1] + slope[:, :-1]) * dX)
    parts["remainder"] = _running(at_old[:, 1:] - at_hedge[:, :-1] - slope[:, :-1] * dX - gamma_gain + decay)
    size = np.abs(trade)
    kinds = (
        costs.half_spread[:, None] * size * price,
        costs.per_unit[:, None] * size,
        costs.per_trade[:, None] * ticket,
    )
    for name, kind in zip(COST_COMPONENTS, kinds, strict=True):
        parts[name] = -np.cumsum(discount * kind, axis=1)

    paid = _by_underlying(model[:, None], book, market)
    wealth = at_mark - paid + _cash_flows(market, grid, price, held, trade, delivered, book.initial_units)
    parts["total"] = wealth - np.cumsum(discount * np.sum(kinds, axis=0), axis=1)
    return LookByLook(components=parts, hedge=held, target=target, trade=trade, ticket=ticket)


def _by_underlying(rows: Floats, book: Book, market: Market) -> Floats:
    """Sums over the positions on each underlying."""
    out = np.zeros((len(market.names), rows.shape[1]))
    np.add.at(out, book.underlying, rows)
    return out


def _running(increments: Floats) -> Floats:
    """Cumulative sums that start at zero at look 0."""
    return np.concatenate([np.zeros((len(increments), 1)), np.cumsum(increments, axis=1)], axis=1)


def _greeks(book: Book, market: Market, grid: LookGrid, at: Floats, vol: Floats) -> Greeks:
    """Greeks of every position at every look; after its expiry they mean nothing and are masked by the caller."""
    return greeks(
        at,
        book.strike[:, None],
        years=np.maximum(book.expiry_t[:, None] - grid.t, 0.0),
        variance_years=np.maximum(book.expiry_s[:, None] - grid.s, 0.0),
        vol=vol,
        rate=market.rate,
        growth=market.growth[book.underlying][:, None],
        is_call=book.is_call[:, None],
    )


def _delivered(book: Book, market: Market, look: Ints, final: Floats) -> Floats:
    """Units received at each look from positions settled by delivery, (underlying, look)."""
    sign = np.where(book.is_call, 1.0, -1.0)
    exercised = book.physical & (sign * (final - book.strike) > 0.0)
    units = np.where(exercised, sign * book.units, 0.0)
    return _by_underlying(np.where(look == book.expiry_look[:, None], units[:, None], 0.0), book, market)


def _hedge(target: Floats, delivered: Floats, trades_at: Flags, initial: Floats) -> tuple[Floats, Floats]:
    """Units held after each look, and units bought at it."""
    held, trade = np.zeros_like(target), np.zeros_like(target)
    now = initial.astype(np.float64)
    for i, trades in enumerate(trades_at):
        now = now + delivered[:, i]
        if trades:
            trade[:, i] = target[:, i] - now
            now = target[:, i]
        held[:, i] = now
    return held, trade


def _cash_flows(
    market: Market, grid: LookGrid, price: Floats, held: Floats, trade: Floats, delivered: Floats, initial: Floats
) -> Floats:
    """Value of the hedge and the discounted cash it has earned, (underlying, look), before costs.

    A cash underlying is bought at its price and pays its yield at the end of each look; a future pays the change of
    its price. Units delivered are bought at their price here, since the payoff is counted with the options.
    """
    discount = np.exp(-market.rate * grid.t)
    bought = trade + delivered
    bought[:, 0] += initial
    received = held[:, :-1] * price[:, 1:] * np.expm1(np.outer(market.yield_rate, np.diff(grid.t)))
    spot = discount * held * price - np.cumsum(discount * bought * price, axis=1) + _running(discount[1:] * received)
    future = _running(discount[1:] * held[:, :-1] * np.diff(price))
    return np.where(market.is_future[:, None], future, spot)
