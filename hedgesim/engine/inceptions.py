"""Inceptions over a price history: which rows start a life, which rows end it, and the book fixed at each."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from hedgesim.book import Book, Expiry, Position, expiry_looks, settle_terms
from hedgesim.errors import Problem
from hedgesim.market import Flags, Floats, Ints, LookGrid, Market, frozen
from hedgesim.paths.prices import PriceHistory, raise_problems
from hedgesim.schedules import Compiled, Schedule, compile_schedules

# The schedule that the others are measured against when the integrated variance of a look is unknown.
EVERY_LOOK = Schedule(name="every look", kind="looks", amount=1)

_DAY_TOLERANCE = 1e-6


@dataclass(frozen=True)
class Inceptions:
    """Which rows of a history are inceptions.

    Attributes
    ----------
    kind : `once`: the first row. `days`: every `amount` trading days of the clock, at the close of a day.
        `looks`: every `amount` rows
    amount : see kind; unused for `once`
    """

    kind: Literal["once", "days", "looks"]
    amount: float = 1.0


@dataclass(frozen=True)
class Fault:
    """Something in the experiment that this history cannot carry out; `path` is the key, such as (book, 0, expiry)."""

    path: tuple[str | int, ...]
    message: str
    advice: str


class InceptionError(ValueError):
    """The experiment does not fit the history; every fault is in `faults`."""

    def __init__(self, faults: Sequence[Fault]) -> None:
        self.faults = tuple(faults)
        super().__init__("\n".join(f"{'.'.join(map(str, f.path))}: {f.message} - {f.advice}" for f in faults))


@dataclass(frozen=True)
class Inception:
    """One life over the history.

    Attributes
    ----------
    row : first row in the history
    label : text of the time column there
    market, grid, book, compiled : as for any engine; look 0 is the inception
    price : (underlying, look)
    """

    row: int
    label: str
    market: Market
    grid: LookGrid
    book: Book
    compiled: Compiled
    price: Floats


@dataclass(frozen=True)
class Laid:
    """All inceptions of a replay.

    Attributes
    ----------
    history : the prices
    inceptions : in order of time
    mark_follows, hedge_follows : by position: the vol is re-marked at each day close
    reference : index of the schedule that trades at every look
    reference_added : that schedule was added to those asked for, and is the last
    notes : what the reader should know, one sentence each
    """

    history: PriceHistory
    inceptions: tuple[Inception, ...]
    mark_follows: Flags
    hedge_follows: Flags
    reference: int
    reference_added: bool
    notes: tuple[str, ...]

    def vol_paths(self, index: int) -> tuple[Floats, Floats]:
        """Mark and hedge vols in force from each look on, (position, look) each, at inception `index`."""
        life = self.inceptions[index]
        shape = (life.book.size, life.grid.looks + 1)
        mark = np.broadcast_to(life.book.mark_vol[:, None], shape).copy()
        hedge = np.broadcast_to(life.book.hedge_vol[:, None], shape).copy()
        if self.history.mark_vol is not None:
            series = self.history.mark_vol[:, life.row : life.row + shape[1]]
            latest = np.where(life.grid.is_close, np.arange(shape[1]), 0)
            latest = np.maximum.accumulate(latest)
            remarked = np.where(latest > 0, series[life.book.underlying][:, latest], mark)
            mark = np.where(self.mark_follows[:, None], remarked, mark)
            hedge = np.where(self.hedge_follows[:, None], remarked, hedge)
        return frozen(mark), frozen(hedge)


def lay_inceptions(
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
    inceptions: Inceptions,
    horizon: Expiry | None = None,
) -> Laid:
    """Fix the book at every inception that the history can carry to its end, and lay the schedules on each life.

    Parameters
    ----------
    history : prices of the underlyings of `positions`, in the same order
    positions : as the experiment states them
    rate : continuously compounded
    yield_rate : by underlying; not used for futures
    is_future : by underlying
    mark_vol : by underlying, nan to take it from the history at each inception
    hedge_vol : by underlying, nan to hedge at the mark vol
    remark : daily: at each day close after the inception, vols that come from the history become that day's
    initial_units : by underlying
    schedules : as asked for; the one that trades at every look is added where it is missing
    inceptions : see there
    horizon : an end earlier than the last expiry; positions still open are then valued at mark

    Raises
    ------
    InceptionError
        when positions, horizon or market do not fit the history
    ExperimentError
        when a row lacks a mark vol that an inception or a re-marking needs
    ScheduleError
        when a schedule does not fit the looks
    """
    rolling = inceptions.kind != "once"
    mark_follows = np.array([p.mark_vol is None and bool(np.isnan(mark_vol[p.underlying])) for p in positions])
    _check_terms(history, positions, mark_follows, rolling, horizon)
    start = _start_rows(history, inceptions)
    row, exact = zip(*(_end_rows(history, start, p.expiry) for p in positions), strict=True)
    expiry_row, expiry_exact = np.array(row), np.array(exact)
    last, notes = expiry_row.max(axis=0), []
    if horizon is not None:
        horizon_row = _end_rows(history, start, horizon)[0]
        if (horizon_row > last).any():
            notes.append("the horizon lies after the last expiry: a life ends at its last expiry")
        last = np.minimum(last, horizon_row)
    inside = last < history.rows
    start, last = start[inside], last[inside]
    expiry_row, expiry_exact = expiry_row[:, inside], expiry_exact[:, inside]
    _check_lives(history, start, last, expiry_row)
    notes += _expiry_notes(history, start, last, expiry_row, expiry_exact)
    if rolling and not all(p.strike_of_spot for p in positions):
        notes.append("some strikes are prices: they stay where they are while the spot at inception moves")

    daily = remark == "daily"
    hedge_follows = mark_follows & np.array(
        [p.hedge_vol is None and np.isnan(hedge_vol[p.underlying]) for p in positions]
    )
    at = np.array([p.underlying for p in positions], dtype=np.int64)
    _check_marks(history, at, start, last, expiry_row, mark_follows, daily)

    yields = np.where(is_future, rate, yield_rate)
    asked = [*schedules, EVERY_LOOK]
    lives, known = [], {}
    for n, first in enumerate(start):
        grid = LookGrid(
            t=frozen(history.t[first : last[n] + 1] - history.t[first]),
            s=frozen(history.s[first : last[n] + 1] - history.s[first]),
            clock=frozen(history.clock[first : last[n] + 1] - history.clock[first]),
            is_open=history.is_open[first : last[n] + 1],
            is_close=history.is_close[first : last[n] + 1],
            regular=False,
        )
        spot = frozen(history.price[:, first])
        marks = (
            mark_vol if history.mark_vol is None else np.where(np.isnan(mark_vol), history.mark_vol[:, first], mark_vol)
        )
        book = settle_terms(
            positions,
            spot=spot,
            mark_vol=marks,
            hedge_vol=hedge_vol,
            expiry_look=expiry_row[:, n] - first,
            expiry_t=_years_to(history, first, expiry_row[:, n], positions, history.t),
            expiry_s=_years_to(history, first, expiry_row[:, n], positions, history.s),
            initial_units=initial_units,
        )
        ends = expiry_looks(book)
        key = b"".join(x.tobytes() for x in (np.round(grid.clock, 9), grid.is_open, grid.is_close, ends))
        if key not in known:
            known[key] = compile_schedules(asked, grid, ends)
        lives.append(
            Inception(
                row=int(first),
                label=history.label[first],
                market=Market(history.names, rate, spot, frozen(yields), frozen(is_future, bool)),
                grid=grid,
                book=book,
                compiled=known[key],
                price=history.price[:, first : last[n] + 1],
            )
        )
    every = np.all([life.compiled.trades_at.all(axis=1) for life in lives], axis=0)
    reference = int(np.argmax(every))
    if reference < len(schedules):
        asked_only = {id(c): _without_last(c) for c in known.values()}
        lives = [replace(life, compiled=asked_only[id(life.compiled)]) for life in lives]
    return Laid(
        history=history,
        inceptions=tuple(lives),
        mark_follows=frozen(mark_follows & daily, bool),
        hedge_follows=frozen(hedge_follows & daily, bool),
        reference=reference,
        reference_added=reference == len(schedules),
        notes=(*history.notes, *notes),
    )


def _without_last(compiled: Compiled) -> Compiled:
    return Compiled(
        names=compiled.names[:-1],
        trades_at=frozen(compiled.trades_at[:-1], bool),
        intervals=frozen(compiled.intervals[:-1], np.int64),
        interval_years=frozen(compiled.interval_years[:-1]),
        equal=frozen(compiled.equal[:-1], bool),
    )


def _check_terms(
    history: PriceHistory, positions: Sequence[Position], mark_follows: Flags, rolling: bool, horizon: Expiry | None
) -> None:
    """What is wrong whatever the rows: dates in rolling books, dates without a calendar, vols nobody gives."""
    faults = []
    for path, expiry in [
        *((("book", j, "expiry"), p.expiry) for j, p in enumerate(positions)),
        *([(("paths", "horizon"), horizon)] if horizon is not None else []),
    ]:
        if expiry.on is None:
            continue
        if rolling:
            faults.append(
                Fault(path, "a date cannot roll with the inceptions", "a duration such as 21d, or `inceptions: once`")
            )
        elif history.date is None:
            faults.append(Fault(path, "a date, but the prices are timed by numbers", "a duration such as 63d or 20/52"))
        elif not history.date[0] < expiry.on.toordinal() <= history.date[-1]:
            faults.append(
                Fault(
                    path,
                    f"{expiry.on} is not inside the prices, which run from {history.label[0]} to {history.label[-1]}",
                    "a date after the first and not after the last row of prices",
                )
            )
    for u in sorted({p.underlying for p, follows in zip(positions, mark_follows, strict=True) if follows}):
        if history.mark_vol_column[u] is None:
            path = ("market", "underlyings", history.names[u], "mark_vol")
            faults.append(Fault(path, "no mark vol", "a vol such as 22%, or a mark_vol column in paths.series"))
    if faults:
        raise InceptionError(faults)


def _start_rows(history: PriceHistory, inceptions: Inceptions) -> Ints:
    if inceptions.kind == "once":
        return np.zeros(1, dtype=np.int64)
    if inceptions.kind == "looks":
        return np.arange(0, history.rows, max(1, int(inceptions.amount)))
    close = np.flatnonzero(history.is_close)
    clock = history.clock[close]
    target = np.arange(clock[0], clock[-1] + _DAY_TOLERANCE, inceptions.amount)
    found = np.searchsorted(clock, target - _DAY_TOLERANCE)
    return close[np.unique(found[found < len(close)])]


def _end_rows(history: PriceHistory, start: Ints, expiry: Expiry) -> tuple[Ints, Flags]:
    """Row at or before the expiry for each start, `history.rows` where it lies outside; and whether it is met."""
    if expiry.on is not None:
        date = np.full(history.rows, 0) if history.date is None else history.date
        wanted = np.full(len(start), float(expiry.on.toordinal()))
        # The close of that date: any row of it would do for the search, the last one is taken.
        time, tolerance = date.astype(np.float64), 0.0
    elif expiry.days is not None:
        time, tolerance = history.clock, _DAY_TOLERANCE
        wanted = time[start] + expiry.days
    else:
        time, tolerance = history.t, _DAY_TOLERANCE / history.days_per_year
        wanted = time[start] + (expiry.years or 0.0)
    row = np.searchsorted(time, wanted + tolerance, side="right") - 1
    exact = np.abs(time[row] - wanted) <= tolerance
    return np.where(wanted <= time[-1] + tolerance, row, history.rows), exact


def _years_to(history: PriceHistory, first: int, row: Ints, positions: Sequence[Position], years: Floats) -> Floats:
    """Years from the inception to expiry: to the row, or as stated where the expiry lies after the last price."""
    stated = [
        p.expiry.years if p.expiry.years is not None else (p.expiry.days or 0.0) / history.days_per_year
        for p in positions
    ]
    return np.where(row < history.rows, years[np.minimum(row, history.rows - 1)] - years[first], stated)


def _check_lives(history: PriceHistory, start: Ints, last: Ints, expiry_row: Ints) -> None:
    if len(start) == 0:
        raise InceptionError(
            [
                Fault(
                    ("paths", "file"),
                    f"no life fits into {history.rows} rows of prices, from {history.label[0]} to {history.label[-1]}",
                    "a longer history, shorter expiries, or an earlier horizon",
                )
            ]
        )
    faults = []
    short = expiry_row <= start
    for j in np.flatnonzero(short.any(axis=1)):
        label = history.label[start[np.argmax(short[j])]]
        faults.append(
            Fault(
                ("book", int(j), "expiry"),
                f"it settles before the first price after {label}",
                "a later expiry, or more prices",
            )
        )
    if not faults and (last <= start).any():
        label = history.label[start[np.argmax(last <= start)]]
        faults.append(
            Fault(
                ("paths", "horizon"), f"it ends before the first price after {label}", "a later horizon, or more prices"
            )
        )
    if faults:
        raise InceptionError(faults)


def _expiry_notes(history: PriceHistory, start: Ints, last: Ints, expiry_row: Ints, exact: Flags) -> list[str]:
    """Expiries that fall between rows and are settled at the row before."""
    snapped = ~exact & (expiry_row <= last)
    if not snapped.any():
        return []
    n = int(np.argmax(snapped.any(axis=0)))
    row = int(expiry_row[np.argmax(snapped[:, n]), n])
    return [
        f"{int(snapped.sum())} of {snapped.size} expiries fall between rows of prices and settle at the row before "
        f"(first: inception {history.label[start[n]]}, settled {history.label[row]})"
    ]


def _check_marks(
    history: PriceHistory,
    underlying: Ints,
    start: Ints,
    last: Ints,
    expiry_row: Ints,
    mark_follows: Flags,
    daily: bool,
) -> None:
    """Rows that lack a mark vol that an inception, or a re-marking of positions still open, reads."""
    if history.mark_vol is None:
        return
    problems = []
    for u in np.unique(underlying[mark_follows]):
        empty = np.isnan(history.mark_vol[u])
        at_start = np.zeros(history.rows, dtype=bool)
        at_start[start] = True
        remarked = np.zeros(history.rows, dtype=bool)
        if daily:
            open_until = np.minimum(expiry_row[mark_follows & (underlying == u)].max(axis=0) - 1, last)
            for first, until in zip(start, open_until, strict=True):
                remarked[first + 1 : until + 1] = True
            remarked &= history.is_close
        for row in np.flatnonzero(empty & (at_start | remarked)):
            reason = "an inception falls on this row" if at_start[row] else "open positions are re-marked on this row"
            problems.append(
                Problem(
                    history.file,
                    int(history.line[row]),
                    None,
                    history.mark_vol_column[u] or "",
                    f"no mark vol, and {reason}",
                    "a vol, or leave the row out",
                )
            )
    raise_problems(problems)
