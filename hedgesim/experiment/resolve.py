"""From a validated experiment to what the engines read: market, looks, book, schedules, costs. No heavy imports."""

import datetime as dt
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from hedgesim.book import Book, Expiry, Position, expiry_looks, exposure, gross_value, settle_terms
from hedgesim.costs import CostTerms
from hedgesim.errors import ExperimentError
from hedgesim.experiment import schema
from hedgesim.experiment.checks import correlation_matrix
from hedgesim.experiment.loader import Loaded
from hedgesim.experiment.schema import Experiment, GbmPaths, PricePaths, by_underlying
from hedgesim.experiment.values import Duration, RelativeStrike
from hedgesim.market import (
    DAYS_PER_WEEK,
    DAYS_PER_YEAR,
    Floats,
    Ints,
    LookGrid,
    Market,
    frozen,
    horizon_grid,
    session_grid,
)
from hedgesim.paths.gbm import Gbm
from hedgesim.schedules import Compiled, Schedule, ScheduleError, compile_schedules

if TYPE_CHECKING:
    from hedgesim.engine.inceptions import Laid

_LOOK_TOLERANCE = 1e-6
_Path = tuple[str | int, ...]


@dataclass(frozen=True)
class Simulation:
    """A simulated experiment, ready for the engine."""

    market: Market
    book: Book
    grid: LookGrid
    compiled: Compiled
    source: Gbm
    costs: CostTerms
    count: int
    notes: tuple[str, ...]


@dataclass(frozen=True)
class Replay:
    """A replayed experiment, ready for the engine."""

    laid: "Laid"
    costs: CostTerms
    price_file: Path
    seed: int
    notes: tuple[str, ...]


def resolve(loaded: Loaded) -> Simulation | Replay:
    """Prepare a loaded experiment for its engine.

    Raises
    ------
    ExperimentError
        with every problem that shows only once looks, prices and schedules are laid out
    """
    if isinstance(loaded.experiment.paths, GbmPaths):
        return _simulation(loaded, loaded.experiment.paths)
    return _replay(loaded, loaded.experiment.paths)


def _days(term: Duration, experiment: Experiment) -> float:
    """Trading days (calendar days under act-365) in a duration that is not counted in looks."""
    market = experiment.market
    hours = _session_hours(experiment)
    per_unit = {
        "min": 1.0 / (60.0 * hours),
        "h": 1.0 / hours,
        "d": 1.0,
        "w": float(DAYS_PER_WEEK[market.day_count]),
        "y": float(DAYS_PER_YEAR[market.day_count]),
    }
    return term.amount * per_unit[term.unit]


def _session_hours(experiment: Experiment) -> float:
    session = experiment.market.session
    return session.amount if session.unit == "h" else session.amount / 60.0


def _expiry(term: Duration | dt.date, experiment: Experiment) -> Expiry:
    if isinstance(term, dt.date):
        return Expiry(on=term)
    if term.unit == "y":
        return Expiry(years=term.amount)
    return Expiry(days=_days(term, experiment))


def _positions(experiment: Experiment) -> tuple[Position, ...]:
    rows = []
    for row in experiment.book:
        relative = isinstance(row.strike, RelativeStrike)
        rows.append(
            Position(
                underlying=experiment.names.index(row.underlying or experiment.names[0]),
                is_call=row.type == "call",
                strike=row.strike.fraction if isinstance(row.strike, RelativeStrike) else row.strike,
                strike_of_spot=relative,
                amount=(row.quantity or 0.0) * row.multiplier if row.notional is None else row.notional,
                is_notional=row.notional is not None,
                expiry=_expiry(row.expiry, experiment),
                mark_vol=row.mark_vol,
                hedge_vol=row.hedge_vol,
                premium=row.premium,
                physical=row.settlement == "physical",
            )
        )
    return tuple(rows)


def _schedules(experiment: Experiment) -> tuple[Schedule, ...]:
    rules = []
    for rule in experiment.schedules:
        match rule:
            case schema.Trades():
                rules.append(Schedule(rule.name, "trades", float(rule.trades)))
            case schema.At():
                rules.append(Schedule(rule.name, "sessions", edges=rule.at))
            case schema.Every(every="never"):
                rules.append(Schedule(rule.name, "never"))
            case schema.Every(every=Duration(unit="look") as every):
                rules.append(Schedule(rule.name, "looks", every.amount))
            case schema.Every(every=Duration() as every):
                rules.append(Schedule(rule.name, "days", _days(every, experiment)))
    return tuple(rules)


def _cost_terms(experiment: Experiment) -> CostTerms:
    terms = [experiment.costs.of(name) for name in experiment.names]
    return CostTerms(
        half_spread=frozen([t.half_spread for t in terms]),
        per_unit=frozen([t.per_unit for t in terms]),
        per_trade=frozen([t.per_trade for t in terms]),
    )


def _vols(values: Sequence[float | None]) -> Floats:
    return np.array([np.nan if v is None else v for v in values], dtype=np.float64)


def _hedge_vols(experiment: Experiment, realised: Floats | None) -> Floats:
    """Hedge vol by underlying, nan for the mark vol; an underlying's own goes before that of the hedge section."""
    rule = experiment.hedge.vol
    if rule == "mark":
        usual = np.full(len(experiment.names), np.nan)
    elif rule == "realised" and realised is not None:
        usual = realised
    else:
        usual = np.full(len(experiment.names), float(rule))
    own = _vols([u.hedge_vol for u in experiment.market.underlyings.values()])
    return np.where(np.isnan(own), usual, own)


def _named(experiment: Experiment, value: float | dict[str, float]) -> Floats:
    return np.array(list(by_underlying(value, experiment.names).values()), dtype=np.float64)


def _market(experiment: Experiment, spot: Sequence[float]) -> Market:
    market = experiment.market
    future = np.array([u.kind == "future" for u in market.underlyings.values()])
    paid = np.array([u.yield_ for u in market.underlyings.values()])
    return Market(
        names=experiment.names,
        rate=market.rate,
        spot=frozen(spot),
        yield_rate=frozen(np.where(future, market.rate, paid)),
        is_future=frozen(future, bool),
    )


def _simulation(loaded: Loaded, paths: GbmPaths) -> Simulation:
    experiment = loaded.experiment
    positions = _positions(experiment)
    per_year = DAYS_PER_YEAR[experiment.market.day_count]
    last = [_days_to(p.expiry, experiment, per_year) for p in positions]
    end = max(last)
    notes: list[str] = []
    if paths.horizon is not None:
        horizon = _days_to(_expiry(paths.horizon, experiment), experiment, per_year)
        if horizon > end + _LOOK_TOLERANCE:
            notes.append("the horizon lies after the last expiry: the study ends at the last expiry")
        end = min(end, horizon)
    grid = _grid(loaded, paths, end, per_year)
    looks = _expiry_looks(loaded, last, grid, per_year)
    realised = _named(experiment, paths.realised_vol)
    book = settle_terms(
        positions,
        spot=np.array([u.spot or np.nan for u in experiment.market.underlyings.values()]),
        mark_vol=_vols([u.mark_vol for u in experiment.market.underlyings.values()]),
        hedge_vol=_hedge_vols(experiment, realised),
        expiry_look=looks,
        expiry_t=np.array(last) / per_year,
        expiry_s=np.array(last) / per_year,
        initial_units=_named(experiment, experiment.hedge.initial),
    )
    if experiment.market.day_count == "business-252" and any(p.expiry.on for p in positions):
        notes.append("trading days to the expiry dates count Monday to Friday, without holidays")
    notes += _open_notes(experiment, grid)
    names = experiment.names
    return Simulation(
        market=_market(experiment, [u.spot or np.nan for u in experiment.market.underlyings.values()]),
        book=book,
        grid=grid,
        compiled=_compiled(loaded, grid, book),
        source=Gbm(
            realised_vol=frozen(realised),
            drift=frozen(_named(experiment, paths.drift)),
            correlation=frozen(correlation_matrix(names, experiment.market.correlation)),
            seed=paths.seed,
        ),
        costs=_cost_terms(experiment),
        count=paths.count,
        notes=tuple(notes),
    )


def _days_to(expiry: Expiry, experiment: Experiment, per_year: int) -> float:
    """Days of the clock from the inception; dates under business-252 count Monday to Friday."""
    if expiry.days is not None:
        return expiry.days
    if expiry.years is not None:
        return expiry.years * per_year
    start, end = experiment.market.date, expiry.on
    if experiment.market.day_count == "act-365":
        return float((end - start).days) if end and start else 0.0
    return float(np.busday_count(np.datetime64(start, "D"), np.datetime64(end, "D")))


def _grid(loaded: Loaded, paths: GbmPaths, days: float, per_year: int) -> LookGrid:
    experiment = loaded.experiment
    if paths.looks is not None:
        return horizon_grid(years=days / per_year, looks=paths.looks, day_count=experiment.market.day_count)
    looks = days * (paths.looks_per_day or 1)
    if round(looks) < 1 or abs(looks - round(looks)) > _LOOK_TOLERANCE * max(1.0, looks):
        path: _Path = ("paths", "looks_per_day")
        raise ExperimentError(
            [
                loaded.source.problem(
                    path,
                    f"the end, {days:.6g} days away, is not a whole number of looks: it is look {looks:.6g}",
                    "other looks_per_day, another horizon or expiry, or `looks` over the horizon",
                )
            ]
        )
    return session_grid(
        days=days,
        looks_per_day=paths.looks_per_day or 1,
        day_count=experiment.market.day_count,
        session_hours=_session_hours(experiment),
        overnight=paths.overnight,
    )


def _expiry_looks(loaded: Loaded, days: Sequence[float], grid: LookGrid, per_year: int) -> Ints:
    """Look of each expiry; one past the last look for positions that outlive the horizon."""
    found, problems = [], []
    clock = grid.clock
    tolerance = _LOOK_TOLERANCE * max(1.0, float(clock[-1]))
    for j, wanted in enumerate(days):
        if wanted > clock[-1] + tolerance:
            found.append(grid.looks + 1)
            continue
        look = int(np.searchsorted(clock, wanted - tolerance))
        found.append(look)
        if look == 0 or abs(clock[look] - wanted) > tolerance:
            below, above = clock[max(look - 1, 0)], clock[look]
            problems.append(
                loaded.source.problem(
                    ("book", j, "expiry"),
                    f"{wanted:.6g} days after the inception there is no look",
                    f"the nearest looks are at {below:.6g} and {above:.6g} days ({below / per_year:.6g} and "
                    f"{above / per_year:.6g} years)",
                )
            )
    if problems:
        raise ExperimentError(problems)
    return np.array(found, dtype=np.int64)


def _compiled(loaded: Loaded, grid: LookGrid, book: Book) -> Compiled:
    """Lay the schedules on the looks, collecting every one that does not fit."""
    rules = _schedules(loaded.experiment)
    problems = []
    for i, rule in enumerate(rules):
        try:
            compile_schedules([rule], grid, expiry_looks(book))
        except ScheduleError as error:
            problems.append(loaded.source.problem(("schedules", i), error.message, error.advice))
    if problems:
        raise ExperimentError(problems)
    return compile_schedules(rules, grid, expiry_looks(book))


def _replay(loaded: Loaded, paths: PricePaths) -> Replay:
    from hedgesim.engine.inceptions import InceptionError, Inceptions, lay_inceptions
    from hedgesim.paths.prices import SeriesColumns, read_prices

    experiment = loaded.experiment
    file = loaded.path.parent / paths.file
    history = read_prices(
        file,
        time=paths.time.column,
        time_unit_years=paths.time.unit,
        series={
            name: SeriesColumns(
                price=paths.series[name].price,
                mark_vol=vol.column if (vol := paths.series[name].mark_vol) else None,
                mark_vol_scale=0.01 if vol and vol.unit == "percent" else 1.0,
            )
            for name in experiment.names
        },
        day_count=experiment.market.day_count,
    )
    every = paths.inceptions
    if isinstance(every, str):
        inceptions = Inceptions("once")
    elif every.every.unit == "look":
        inceptions = Inceptions("looks", every.every.amount)
    else:
        inceptions = Inceptions("days", _days(every.every, experiment))
    market = _market(experiment, [np.nan] * len(experiment.names))
    try:
        laid = lay_inceptions(
            history,
            _positions(experiment),
            rate=market.rate,
            yield_rate=market.yield_rate,
            is_future=market.is_future,
            mark_vol=_vols([u.mark_vol for u in experiment.market.underlyings.values()]),
            hedge_vol=_hedge_vols(experiment, None),
            remark=experiment.hedge.remark,
            initial_units=_named(experiment, experiment.hedge.initial),
            schedules=_schedules(experiment),
            inceptions=inceptions,
            horizon=None if paths.horizon is None else _expiry(paths.horizon, experiment),
        )
    except InceptionError as error:
        raise ExperimentError([loaded.source.problem(f.path, f.message, f.advice) for f in error.faults]) from None
    except ScheduleError as error:
        problem = loaded.source.problem(("schedules", error.index), error.message, error.advice)
        raise ExperimentError([problem]) from None
    return Replay(
        laid=laid,
        costs=_cost_terms(experiment),
        price_file=file,
        seed=paths.seed,
        notes=(*laid.notes, *_open_notes(experiment, laid.inceptions[0].grid)),
    )


def _open_notes(experiment: Experiment, grid: LookGrid) -> list[str]:
    """Schedules that name the open where it is the same look as a close."""
    if not np.array_equal(grid.is_open, grid.is_close):
        return []
    same = [rule.name for rule in experiment.schedules if isinstance(rule, schema.At) and "open" in rule.at]
    if isinstance(experiment.paths, GbmPaths):
        told = "trades as `every: 1d` does: without overnight variance an open is the close before it"
    else:
        told = "trades at every price: each is both the open and the close of its day"
    return [f"'{name}' {told}" for name in same]


def describe(loaded: Loaded) -> list[str]:
    """What was understood: forwards, net greeks, looks, schedules; lines to print.

    Raises
    ------
    ExperimentError
        as `resolve`
    """
    plan = resolve(loaded)
    experiment = loaded.experiment
    lines = [experiment.title, ""]
    if isinstance(plan, Simulation):
        lines += market_lines(plan.market, plan.book, experiment.report.currency)
        lines += ["", *simulation_lines(plan)]
        compiled, grid = plan.compiled, plan.grid
    else:
        first = plan.laid.inceptions[0]
        lines += replay_lines(plan)
        lines += ["", f"at the first inception, {first.label}:"]
        lines += market_lines(first.market, first.book, experiment.report.currency)
        compiled, grid = first.compiled, first.grid
    shown = len(experiment.schedules)
    lines += ["", "schedule              intervals  trading looks"]
    for name, n, looks in zip(compiled.names[:shown], compiled.intervals, compiled.trades_at.sum(axis=1), strict=False):
        lines.append(f"  {name:<20}{n:>9}{looks:>15}")
    lines.append(f"  (of {grid.looks} looks after the inception; entry, expiries and unwinding are trading looks)")
    lines += [f"note: {note}" for note in plan.notes]
    return lines


def market_lines(market: Market, book: Book, currency: str) -> list[str]:
    """Forward, vols and net greeks of each underlying."""
    lines = []
    per_position = exposure(book, market)
    for u, name in enumerate(market.names):
        mine = book.underlying == u
        last = float(book.expiry_t[mine].max())
        forward = float(market.spot[u] * np.exp(market.growth[u] * last))
        spot = float(market.spot[u])
        kind = "future" if market.is_future[u] else "spot"
        size = int(mine.sum())
        net = {key: float(getattr(per_position, key)[mine].sum()) for key in ("value", "delta", "gamma", "vega")}
        lines += [
            f"{name}: {kind} {spot:,.6g}, forward {forward:,.6g} in {last:.4g} years, "
            f"{size} position{'s' * (size != 1)}",
            f"  value at mark {net['value']:,.2f} {currency}, initial hedge {book.initial_units[u]:,.6g} units",
            f"  net delta {net['delta']:,.1f} units ({net['delta'] * spot:,.0f} {currency})",
            f"  net gamma {net['gamma'] * spot * 0.01:,.1f} units for a 1% move of the price",
            f"  net vega {net['vega'] * 0.01:,.2f} {currency} a vol point",
        ]
    lines.append(f"gross option value {gross_value(book, market):,.2f} {currency}")
    return lines


def simulation_lines(plan: Simulation) -> list[str]:
    """What is simulated."""
    source = plan.source
    lines = [f"{plan.count:,} paths of {plan.grid.looks} looks over {plan.grid.t[-1]:.4g} years, seed {source.seed}"]
    for name, vol, drift in zip(plan.market.names, source.realised_vol, source.drift, strict=True):
        lines.append(f"  {name}: realised vol {100 * vol:.4g}%, drift {100 * drift:.4g}% a year")
    return lines


def replay_lines(plan: Replay) -> list[str]:
    """What is replayed."""
    history, lives = plan.laid.history, plan.laid.inceptions
    return [
        f"{history.rows:,} rows of prices from {history.label[0]} to {history.label[-1]} in {plan.price_file.name}",
        f"{len(lives):,} inception{'s' if len(lives) != 1 else ''} from {lives[0].label} to {lives[-1].label}, "
        f"{lives[0].grid.looks} looks and {lives[0].grid.t[-1]:.4g} years the first life",
    ]
