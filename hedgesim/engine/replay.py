"""The replay engine: an option book hedged over user-supplied prices, at one inception or at many."""

import os
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from itertools import pairwise
from typing import Literal

import numpy as np

from hedgesim.book import Expiry, Position
from hedgesim.costs import CostTerms
from hedgesim.engine.inceptions import Inception, Inceptions, Laid, lay_inceptions
from hedgesim.engine.ledger import COST_COMPONENTS, Ledger, Moments, Replicates, Watch
from hedgesim.kernels.replay import COMPONENT_ROWS, Results, Terms, replay_inceptions
from hedgesim.market import Flags, Floats, Ints, frozen
from hedgesim.paths.prices import PriceHistory
from hedgesim.schedules import Schedule

COMPONENTS = ("premium_edge", "revaluation", "vol_gap_seen", "vol_mark", "lag", "remainder", *COST_COMPONENTS)

RESAMPLES = 999
# Keeps the bootstrap apart from any other use of the same seed.
_BOOTSTRAP_STREAM = 0x5B00757A
# The residual deltas of all looks are kept for their quantile: 160 MB of them at most.
_MOST_RESIDUALS = 20_000_000


def replay(
    history: PriceHistory,
    positions: Sequence[Position],
    *,
    rate: float,
    yield_rate: Floats,
    is_future: Flags,
    mark_vol: Floats,
    hedge_vol: Floats,
    remark: Literal["inception", "daily"] = "inception",
    initial_units: Floats,
    schedules: Sequence[Schedule],
    costs: CostTerms,
    inceptions: Inceptions,
    horizon: Expiry | None = None,
    seed: int = 1,
    threads: int | None = None,
) -> Ledger:
    """Hedge `positions` over `history` under every schedule, at every inception.

    Parameters are those of `lay_inceptions` and `replay_laid`, and so are the errors.

    Returns
    -------
    Ledger : the schedule that trades at every look is the last, named "every look", where none of `schedules` does
    """
    laid = lay_inceptions(
        history,
        positions,
        rate=rate,
        yield_rate=yield_rate,
        is_future=is_future,
        mark_vol=mark_vol,
        hedge_vol=hedge_vol,
        remark=remark,
        initial_units=initial_units,
        schedules=schedules,
        inceptions=inceptions,
        horizon=horizon,
    )
    return replay_laid(laid, costs=costs, seed=seed, threads=threads)


def replay_laid(laid: Laid, *, costs: CostTerms, seed: int = 1, threads: int | None = None) -> Ledger:
    """Replay inceptions that are already laid.

    Parameters
    ----------
    laid : inceptions and schedules
    costs : by underlying
    seed : of the bootstrap; the P&L itself holds no chance
    threads : worker threads, default all processors; the result does not depend on it

    Returns
    -------
    Ledger : with every component of every inception in `detail`. Standard errors come from a stationary bootstrap over
        inceptions; with one inception there are no resamples and variances are nan
    """
    lives = laid.inceptions
    terms = _terms(laid, costs)
    out = _empty_results(terms)
    _run(terms, out, len(lives), threads or os.cpu_count() or 1)

    schedules, underlyings, width, count = out.components.shape
    columns = out.components.reshape(schedules, underlyings * width, count)
    resamples, replicates = _bootstrap(columns, _expected_block(lives), seed)
    return Ledger(
        engine="replay",
        schedules=lives[0].compiled.names,
        underlyings=laid.history.names,
        components=COMPONENTS,
        count=count,
        moments=_moments(columns),
        replicates=replicates,
        totals=frozen(out.account.sum(axis=1)),
        trades=frozen(out.trades.mean(axis=1)),
        turnover=frozen(out.turnover.mean(axis=1)),
        reference=laid.reference,
        watch=_watch(terms, out),
        resamples=resamples,
        detail=frozen(out.components),
        trades_detail=frozen(out.trades),
        turnover_detail=frozen(out.turnover),
        below_look=float(out.below_look.mean()),
    )


def _terms(laid: Laid, costs: CostTerms) -> Terms:
    history, lives = laid.history, laid.inceptions
    first = lives[0]
    looks = np.array([life.grid.looks for life in lives])
    series = np.full(history.price.shape, np.nan) if history.mark_vol is None else history.mark_vol
    return Terms(
        t=frozen(history.t),
        s=frozen(history.s),
        is_close=frozen(history.is_close, bool),
        price=frozen(history.price),
        mark_series=frozen(series),
        start=frozen([life.row for life in lives], np.int64),
        looks=frozen(looks, np.int64),
        offset=frozen(np.concatenate([[0], np.cumsum(looks + 1)[:-1]]), np.int64),
        trades_at=frozen(np.concatenate([life.compiled.trades_at for life in lives], axis=1), bool),
        underlying=frozen(first.book.underlying, np.int64),
        is_call=frozen(first.book.is_call, bool),
        physical=frozen(first.book.physical, bool),
        premium=frozen(first.book.premium),
        mark_follows=frozen(laid.mark_follows, bool),
        hedge_follows=frozen(laid.hedge_follows, bool),
        strike=frozen([life.book.strike for life in lives]),
        units=frozen([life.book.units for life in lives]),
        expiry_look=frozen([life.book.expiry_look for life in lives], np.int64),
        expiry_t=frozen([life.book.expiry_t for life in lives]),
        expiry_s=frozen([life.book.expiry_s for life in lives]),
        mark_vol=frozen([life.book.mark_vol for life in lives]),
        hedge_vol=frozen([life.book.hedge_vol for life in lives]),
        rate=float(first.market.rate),
        yield_rate=frozen(first.market.yield_rate),
        is_future=frozen(first.market.is_future, bool),
        initial_units=frozen(first.book.initial_units),
        half_spread=frozen(costs.half_spread),
        per_unit=frozen(costs.per_unit),
        per_trade=frozen(costs.per_trade),
    )


def _empty_results(terms: Terms) -> Results:
    schedules, count, underlyings = len(terms.trades_at), len(terms.start), len(terms.price)
    ends = terms.offset + terms.looks + 1
    watched = max(1, int(np.searchsorted(ends, _MOST_RESIDUALS // schedules, side="right")))
    return Results(
        components=np.zeros((schedules, underlyings, COMPONENT_ROWS, count)),
        account=np.zeros((schedules, underlyings, count)),
        trades=np.zeros((schedules, count)),
        turnover=np.zeros((schedules, count)),
        residual=np.full((schedules, int(ends[min(watched, count) - 1])), np.nan),
        day_count=np.zeros((schedules, count)),
        day_sum=np.zeros((schedules, count)),
        day_square=np.zeros((schedules, count)),
        day_worst=np.zeros((schedules, count)),
        below_look=np.zeros(count),
    )


def _run(terms: Terms, out: Results, count: int, threads: int) -> None:
    """Fill `out`; each inception is computed alone, so that its bits do not depend on the split."""
    threads = max(1, min(threads, count))
    edges = np.linspace(0, count, threads + 1).astype(np.int64)
    if threads == 1:
        replay_inceptions(0, count, terms, out)
        return
    with ThreadPoolExecutor(threads) as pool:
        runs = [pool.submit(replay_inceptions, int(a), int(b), terms, out) for a, b in pairwise(edges)]
        for run in runs:
            run.result()


def _watch(terms: Terms, out: Results) -> Watch:
    ends = terms.offset + terms.looks + 1
    watched = int(np.searchsorted(ends, out.residual.shape[1], side="right"))
    # The last look of a life has no hedge left.
    shown = np.ones(out.residual.shape[1], dtype=bool)
    shown[ends[:watched] - 1] = False
    residual = out.residual[:, shown]
    days = out.day_count[:, :watched].sum(axis=1)
    total = out.day_sum[:, :watched].sum(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        variance = (out.day_square[:, :watched].sum(axis=1) - total * total / days) / (days - 1.0)
    return Watch(
        paths=watched,
        delta_mean=frozen(residual.mean(axis=1)),
        delta_p99=frozen(np.quantile(residual, 0.99, axis=1)),
        day_std=frozen(np.sqrt(np.maximum(variance, 0.0))),
        day_worst=frozen(out.day_worst[:, :watched].mean(axis=1)),
    )


def _moments(columns: Floats) -> Moments:
    """Mean and covariance of (schedule, column, inception); one inception has no covariance."""
    count = columns.shape[2]
    mean = columns.mean(axis=2)
    if count == 1:
        return Moments(frozen(mean), frozen(np.full((*mean.shape, mean.shape[1]), np.nan)))
    centred = columns - mean[:, :, None]
    return Moments(frozen(mean), frozen(centred @ centred.transpose(0, 2, 1) / (count - 1)))


def _expected_block(lives: Sequence[Inception]) -> float:
    """Inceptions in an expected block: those that share a life's prices, and at least n^(1/3), at most all."""
    count = len(lives)
    if count == 1:
        return 1.0
    life = float(np.mean([x.grid.looks for x in lives]))
    step = (lives[-1].row - lives[0].row) / (count - 1)
    return min(max(life / step, float(np.cbrt(count))), float(count))


def _bootstrap(columns: Floats, block: float, seed: int) -> tuple[Ints, Replicates]:
    """Moments in resamples of the inceptions, by the stationary bootstrap.

    Notes
    -----
    Politis and Romano (1994), JASA 89: blocks of geometric length, mean `block`, that start anywhere and wrap round.
    """
    schedules, width, count = columns.shape
    if count == 1:
        empty = Replicates(np.empty((0, schedules, width)), np.empty((0, schedules, width, width)), np.nan, "bootstrap")
        return np.empty((0, 1), dtype=np.int64), empty
    index = stationary_resamples(count, block, RESAMPLES, seed)
    times = np.zeros((RESAMPLES, count))
    np.add.at(times, (np.arange(RESAMPLES)[:, None], index), 1.0)
    mean = np.empty((RESAMPLES, schedules, width))
    cov = np.empty((RESAMPLES, schedules, width, width))
    upper = np.triu_indices(width)
    for k in range(schedules):
        # Centred at the sample first: the second moments then lose no digits.
        centre = columns[k].mean(axis=1)
        z = columns[k] - centre[:, None]
        shift = times @ z.T / count
        products = times @ (z[upper[0]] * z[upper[1]]).T
        second = (products - count * shift[:, upper[0]] * shift[:, upper[1]]) / (count - 1)
        mean[:, k] = centre + shift
        cov[:, k, upper[0], upper[1]] = second
        cov[:, k, upper[1], upper[0]] = second
    return frozen(index, np.int64), Replicates(frozen(mean), frozen(cov), 1.0 / (RESAMPLES - 1), "bootstrap")


def stationary_resamples(count: int, block: float, resamples: int, seed: int) -> Ints:
    """Indices of the stationary bootstrap, shape (resample, count); `block` is the expected block length."""
    random = np.random.default_rng([seed, _BOOTSTRAP_STREAM])
    fresh = random.integers(count, size=(resamples, count))
    restart = random.random((resamples, count)) < 1.0 / block
    place = np.arange(count)
    # The first place begins a block in any case: `began` is zero until the first restart.
    began = np.maximum.accumulate(np.where(restart, place, 0), axis=1)
    return (np.take_along_axis(fresh, began, axis=1) + place - began) % count
