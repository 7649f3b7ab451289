"""The simulating engine: many paths of a simulated source, all schedules on the same paths, streamed into a ledger.

Paths are worked off in chunks whose size depends on the path count alone, and chunk results are merged in order: the
ledger is the same to the last bit for any number of threads and any block size.
"""

import math
import os
import threading
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from hedgesim.book import Book, exposure, premium_received
from hedgesim.costs import CostTerms
from hedgesim.engine.ledger import COST_COMPONENTS, Ledger, Moments, Replicates, Watch
from hedgesim.kernels.accounts import Accounts, close_chunk
from hedgesim.kernels.replay import SMALLEST_TRADE
from hedgesim.kernels.simulate import (
    DAY_ROWS,
    PATH_ROWS,
    RESIDUAL_BINS,
    TRADE_ROWS,
    BookTables,
    DayCosts,
    Diffusion,
    Hedging,
    run_chunk,
)
from hedgesim.kernels.tables import TILE
from hedgesim.market import Floats, Ints, LookGrid, Market
from hedgesim.paths.gbm import Gbm
from hedgesim.schedules import Compiled
from hedgesim.tables import payoff_knots, slope_table, strike_table

COMPONENTS = (
    "premium_edge",
    "revaluation",
    "vol_gap",
    "sampling",
    "lag",
    "remainder",
    *COST_COMPONENTS,
)
_BY_SCHEDULE = ("lag", *COST_COMPONENTS)
WATCHED_PATHS = 8192
_LARGEST_CHUNK = 4096
_CHUNKS_WANTED = 128
_LARGEST_GROUPS = 256


@dataclass(frozen=True)
class Setup:
    """Everything the kernel reads, made once for an experiment."""

    looks: int
    diffusion: Diffusion
    hedging: Hedging
    tables: BookTables
    day_costs: DayCosts
    accounts: Accounts


@dataclass
class _Chunk:
    """Results of one chunk of paths, (schedule, ...)."""

    paths: int
    totals: Floats
    mean: Floats
    products: Floats
    trades: Floats
    turnover: Floats
    residual_bins: Ints
    residual_sum: Floats
    days: Floats
    detail: tuple[Floats, Floats, Floats] | None


def prepare(
    *,
    market: Market,
    book: Book,
    grid: LookGrid,
    compiled: Compiled,
    source: Gbm,
    costs: CostTerms,
    threads: int = 1,
) -> Setup:
    """Tables and constants of an experiment for the kernel."""
    looks, names = grid.looks, market.names
    underlyings = len(names)
    of = [np.flatnonzero(book.underlying == u) for u in range(underlyings)]
    one_vol = all(len(np.unique(book.hedge_vol[j])) <= 1 for j in of)
    hedge_vol = np.array([book.hedge_vol[j[0]] if len(j) else 0.0 for j in of])
    reach = source.reach(market, grid)
    all_looks = np.arange(looks + 1)
    valued = grid.is_close | (all_looks == looks)
    valued_looks = np.flatnonzero(valued | (all_looks == 0))
    last = np.array([looks])

    slope = slope_table(book, market, grid, reach, vol=book.hedge_vol, looks=all_looks, threads=threads)
    same_vols = bool(np.array_equal(book.hedge_vol, book.mark_vol))
    if same_vols:
        mark_slope = slope
    else:
        mark_slope = slope_table(book, market, grid, reach, vol=book.mark_vol, looks=valued_looks, threads=threads)
    hedge_vol_squared = book.hedge_vol**2
    variance_slope = slope_table(
        book,
        market,
        grid,
        reach,
        vol=book.hedge_vol,
        looks=all_looks[:0] if one_vol else all_looks,
        weight=hedge_vol_squared,
        threads=threads,
    )
    at_hedge = exposure(book, market, vol=book.hedge_vol).value
    at_mark = exposure(book, market).value
    received = premium_received(book, market)
    tables = BookTables(
        slope=slope,
        variance_slope=variance_slope,
        mark_slope=mark_slope,
        mark_strike=strike_table(book, market, grid, reach, vol=book.mark_vol, looks=valued_looks, threads=threads),
        hedge_strike=strike_table(book, market, grid, reach, vol=book.hedge_vol, looks=last),
        payoff=payoff_knots(book, market, looks),
        start_hedge=np.array([at_hedge[j].sum() for j in of]),
        start_mark=np.array([at_mark[j].sum() for j in of]),
        valued=valued,
    )
    weight = market.hedge_weights(grid.t)
    inverse = np.concatenate([1.0 / weight, np.zeros((underlyings, 1))], axis=1)
    discount = np.exp(-market.rate * grid.t)
    first, who, slot, from_slot = _trade_list(compiled)
    hedging = Hedging(
        first=first,
        who=who,
        slot=slot,
        from_slot=from_slot,
        inverse_weight=inverse,
        weight=weight,
        price_factor=np.exp(np.outer(market.growth - market.rate, grid.t)),
        discount=discount,
        initial=np.asarray(book.initial_units, dtype=np.float64),
        smallest=SMALLEST_TRADE * (np.abs(book.initial_units) + [np.abs(book.units[j]).sum() for j in of]),
        schedules=len(compiled.names),
        count_units=bool((costs.per_unit != 0).any()),
    )
    tickets: Floats = np.cumsum(np.where(compiled.trades_at, discount, 0.0), axis=1)
    open_at_end = bool((book.expiry_look > looks).any())
    moving = np.array([False, open_at_end and not same_vols, True, True, True, True, True, True, True])
    accounts = Accounts(
        premium_edge=np.array([(at_mark + received)[j].sum() for j in of]),
        premium_cash=np.array([received[j].sum() for j in of]),
        half_spread=np.asarray(costs.half_spread, dtype=np.float64),
        per_unit=np.asarray(costs.per_unit, dtype=np.float64),
        per_trade=np.asarray(costs.per_trade, dtype=np.float64),
        trades=compiled.trades_at.sum(axis=1).astype(np.float64),
        tickets=tickets[:, -1].copy(),
        moving=np.concatenate(
            [
                moving & np.array([True] * 6 + [terms[u] != 0 for terms in _cost_arrays(costs)])
                for u in range(underlyings)
            ]
        ),
    )
    return Setup(
        looks=looks,
        diffusion=source.diffusion(market, grid, hedge_vol, one_vol),
        hedging=hedging,
        tables=tables,
        day_costs=DayCosts(accounts.half_spread, accounts.per_unit, accounts.per_trade, tickets),
        accounts=accounts,
    )


def _trade_list(compiled: Compiled) -> tuple[Ints, Ints, Ints, Ints]:
    """Trades look by look, and the slots in which the targets they leave behind are kept; see `Hedging`."""
    schedules, count = compiled.trades_at.shape
    holds = [0] * schedules
    first, who, slot, from_slot = [0], [], [], []
    for look in range(count):
        trading = np.flatnonzero(compiled.trades_at[:, look])
        who += list(trading)
        from_slot += [holds[s] for s in trading]
        resting = set(range(schedules)) - set(trading)
        # What is held before the trade is read at this look, so only slots that nobody holds even then are free.
        free = min(set(range(schedules + 2)) - {holds[s] for s in resting} - {holds[s] for s in trading})
        for s in trading:
            holds[s] = free
        slot.append(free if len(trading) else -1)
        first.append(len(who))
    arrays = (np.array(x, dtype=np.int64) for x in (first, who, slot, from_slot))
    return tuple(arrays)  # type: ignore[return-value]


def _cost_arrays(costs: CostTerms) -> tuple[Floats, Floats, Floats]:
    return costs.half_spread, costs.per_unit, costs.per_trade


def simulate(
    *,
    market: Market,
    book: Book,
    grid: LookGrid,
    compiled: Compiled,
    source: Gbm,
    costs: CostTerms,
    count: int,
    threads: int | None = None,
    detail: bool = False,
    chunks_per_block: int = 1,
    progress: Callable[[int], None] | None = None,
) -> Ledger:
    """Hedge the book under every schedule on `count` simulated paths.

    Parameters
    ----------
    market, book, grid, compiled, source, costs : the experiment, resolved
    count : number of paths, at least 2
    threads : worker threads, default one a core
    detail : keep every component of every path
    chunks_per_block : how much a worker takes at a time; without influence on the result
    progress : called with the number of paths done so far

    Returns
    -------
    Ledger with every standard error by jackknife over groups of paths
    """
    threads = threads or os.cpu_count() or 1
    setup = prepare(market=market, book=book, grid=grid, compiled=compiled, source=source, costs=costs, threads=threads)
    bounds = _chunk_bounds(count)
    groups = min(len(bounds), _LARGEST_GROUPS)
    merger = _Merger(setup, count, groups, len(bounds))
    done = 0
    for chunk in _in_order(setup, source.seed, bounds, threads, detail, chunks_per_block):
        merger.add(chunk)
        done += chunk.paths
        if progress is not None:
            progress(done)
    return merger.ledger(compiled, market)


def _chunk_bounds(count: int) -> list[tuple[int, int]]:
    wanted = -(-count // _CHUNKS_WANTED)
    unit = TILE if wanted >= TILE else 64
    size = min(-(-wanted // unit) * unit, _LARGEST_CHUNK)
    return [(a, min(a + size, count)) for a in range(0, count, size)]


def _in_order(
    setup: Setup, seed: int, bounds: list[tuple[int, int]], threads: int, detail: bool, chunks_per_block: int
) -> Iterator[_Chunk]:
    """Chunk results in path order, a few blocks ahead in flight, so that memory stays flat."""
    blocks = [bounds[k : k + chunks_per_block] for k in range(0, len(bounds), chunks_per_block)]

    def work(block: list[tuple[int, int]]) -> list[_Chunk]:
        return [_run(setup, seed, a, b, detail) for a, b in block]

    pool = ThreadPoolExecutor(max_workers=threads)
    try:
        flying: list[Future[list[_Chunk]]] = []
        for block in blocks:
            flying.append(pool.submit(work, block))
            if len(flying) > 2 * threads:
                yield from flying.pop(0).result()
        for future in flying:
            yield from future.result()
    finally:
        pool.shutdown(wait=True, cancel_futures=True)


_own = threading.local()


def _scratch(name: str, shape: tuple[int, ...]) -> Floats:
    """Room that a worker thread uses again for each of its chunks: fresh memory costs page faults every time."""
    size = math.prod(shape)
    space: Floats | None = getattr(_own, name, None)
    if space is None or len(space) < size:
        space = np.empty(size)
        setattr(_own, name, space)
    return space[:size].reshape(shape)


def _run(setup: Setup, seed: int, begin: int, end: int, detail: bool) -> _Chunk:
    n = end - begin
    schedules, underlyings = setup.hedging.schedules, len(setup.accounts.premium_cash)
    width = underlyings * len(COMPONENTS)
    path_rows = _scratch("path", (underlyings, len(PATH_ROWS), n))
    trade_rows = _scratch("trade", (schedules, underlyings, len(TRADE_ROWS), n))
    watch = begin < WATCHED_PATHS
    bins = np.zeros((schedules, RESIDUAL_BINS) if watch else (schedules, 0), dtype=np.int64)
    residual_sum = np.zeros(schedules)
    days = np.empty((schedules, len(DAY_ROWS), n if watch else 0))
    run_chunk(
        seed,
        begin,
        setup.looks,
        setup.diffusion,
        setup.hedging,
        setup.tables,
        setup.day_costs,
        watch,
        path_rows,
        trade_rows,
        bins,
        residual_sum,
        days,
    )
    totals, trades, turnover = np.empty((schedules, n)), np.empty((schedules, n)), np.empty((schedules, n))
    mean, products = np.empty((schedules, width)), np.empty((schedules, width, width))
    kept = np.empty((schedules if detail else 0, width, n))
    by_schedule = np.tile([name in _BY_SCHEDULE for name in COMPONENTS], underlyings)
    close_chunk(path_rows, trade_rows, setup.accounts, by_schedule, totals, trades, turnover, mean, products, kept)
    return _Chunk(
        paths=n,
        totals=totals,
        mean=mean,
        products=products,
        trades=trades.sum(axis=1),
        turnover=turnover.sum(axis=1),
        residual_bins=bins,
        residual_sum=residual_sum,
        days=days,
        detail=(kept.reshape(schedules, underlyings, -1, n), trades, turnover) if detail else None,
    )


class _Merger:
    """Adds chunk results in path order; merges moments by the pairwise update of Chan, Golub and LeVeque (1983)."""

    def __init__(self, setup: Setup, count: int, groups: int, chunks: int) -> None:
        schedules = setup.hedging.schedules
        width = len(setup.accounts.moving)
        self._setup, self._count, self._chunks, self._groups = setup, count, chunks, groups
        self._totals = np.empty((schedules, count))
        self._paths = np.zeros(groups)
        self._mean = np.zeros((groups, schedules, width))
        self._products = np.zeros((groups, schedules, width, width))
        self._trades, self._turnover = np.zeros(schedules), np.zeros(schedules)
        self._bins = np.zeros((schedules, RESIDUAL_BINS), dtype=np.int64)
        self._residual_sum = np.zeros(schedules)
        self._days: list[Floats] = []
        self._detail: list[tuple[Floats, Floats, Floats]] = []
        self._begin, self._number = 0, 0

    def add(self, chunk: _Chunk) -> None:
        self._totals[:, self._begin : self._begin + chunk.paths] = chunk.totals
        group = self._number * self._groups // self._chunks
        self._paths[group], self._mean[group], self._products[group] = _merge(
            (self._paths[group], self._mean[group], self._products[group]),
            (float(chunk.paths), chunk.mean, chunk.products),
        )
        self._trades += chunk.trades
        self._turnover += chunk.turnover
        if chunk.days.shape[2]:
            self._bins += chunk.residual_bins
            self._residual_sum += chunk.residual_sum
            self._days.append(chunk.days)
        if chunk.detail is not None:
            self._detail.append(chunk.detail)
        self._begin += chunk.paths
        self._number += 1

    def ledger(self, compiled: Compiled, market: Market) -> Ledger:
        whole = (0.0, np.zeros_like(self._mean[0]), np.zeros_like(self._products[0]))
        for g in range(self._groups):
            whole = _merge(whole, (self._paths[g], self._mean[g], self._products[g]))
        count, mean, products = whole
        every_look = compiled.trades_at.all(axis=1)
        details = [np.concatenate(part, axis=-1) for part in zip(*self._detail, strict=True)] if self._detail else None
        return Ledger(
            engine="simulate",
            schedules=compiled.names,
            underlyings=market.names,
            components=COMPONENTS,
            count=self._count,
            moments=Moments(mean, products / (count - 1)),
            replicates=self._jackknife(count, mean, products),
            totals=self._totals,
            trades=self._trades / count,
            turnover=self._turnover / count,
            reference=int(np.argmax(every_look)) if every_look.any() else -1,
            watch=self._watch(),
            detail=details[0] if details else None,
            trades_detail=details[1] if details else None,
            turnover_detail=details[2] if details else None,
        )

    def _jackknife(self, count: float, mean: Floats, products: Floats) -> Replicates:
        """Moments with one group of paths left out at a time."""
        groups = self._groups
        if groups < 2:
            return Replicates(mean[None][:0], products[None][:0], 1.0, "jackknife")
        rest = count - self._paths[:, None, None]
        rest_mean = (count * mean - self._paths[:, None, None] * self._mean) / rest
        shift = self._mean - rest_mean
        outer = shift[..., :, None] * shift[..., None, :]
        rest_products = products - self._products - (self._paths[:, None, None] * rest / count)[..., None] * outer
        return Replicates(rest_mean, rest_products / (rest[..., None] - 1), (groups - 1) / groups, "jackknife")

    def _watch(self) -> Watch:
        days = np.concatenate(self._days, axis=2)
        paths = days.shape[2]
        per_path = float(self._setup.tables.valued[1:].sum())
        n = per_path * paths
        mean = days[:, 0].sum(axis=1) / n
        variance = np.maximum(days[:, 1].sum(axis=1) / n - mean**2, 0.0) * n / max(n - 1, 1)
        return Watch(
            paths=paths,
            delta_mean=self._residual_sum / (paths * self._setup.looks),
            delta_p99=np.array([_histogram_quantile(b, 0.99) for b in self._bins]),
            day_std=np.sqrt(variance),
            day_worst=days[:, 2].mean(axis=1),
        )


def _merge(a: tuple[float, Floats, Floats], b: tuple[float, Floats, Floats]) -> tuple[float, Floats, Floats]:
    n = a[0] + b[0]
    if a[0] == 0.0:
        return b
    shift = b[1] - a[1]
    mean = a[1] + shift * (b[0] / n)
    return n, mean, a[2] + b[2] + shift[..., :, None] * shift[..., None, :] * (a[0] * b[0] / n)


def _histogram_quantile(bins: Ints, level: float) -> float:
    """Quantile from bins of 1/64 octave, linear inside the bin: within 1.1 % of the sample's quantile."""
    wanted = level * bins.sum()
    seen = np.cumsum(bins)
    k = int(np.searchsorted(seen, wanted))
    if k == 0:
        return 0.0
    inside = (wanted - seen[k - 1]) / bins[k]
    octave, part = divmod(k, 64)
    return float(2.0 ** (octave - 40) * (1.0 + (part + inside) / 64.0))
