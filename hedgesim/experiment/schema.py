"""The experiment file as frozen models: every key, its unit, its default and its bounds."""

import datetime as dt
from collections.abc import Callable, Iterable, Mapping
from typing import Annotated, Any, Literal, Self, TypeVar

from pydantic import BeforeValidator, Field, ValidationError, WrapValidator

from hedgesim.experiment import checks
from hedgesim.experiment.fields import (
    DURATION_JSON,
    NAME,
    Fault,
    OrJson,
    Read,
    Section,
    nearest,
    number,
    per_underlying,
    raise_faults,
    text,
    unknown_key,
    unknown_value,
)
from hedgesim.experiment.policy import (
    At,
    Costs,
    CostTerms,
    Every,
    Hedge,
    Report,
    Schedule,
    Study,
    Trades,
    read_schedule,
)
from hedgesim.experiment.values import (
    BadValueError,
    Duration,
    RelativeStrike,
    parse_date,
    parse_duration,
    parse_strike,
    parse_term,
    parse_years,
    shown,
)

__all__ = [
    "At",
    "CostTerms",
    "Costs",
    "Every",
    "Experiment",
    "GbmPaths",
    "Hedge",
    "Inceptions",
    "Market",
    "Position",
    "PricePaths",
    "PriceSeries",
    "Report",
    "Schedule",
    "Study",
    "TimeColumn",
    "Trades",
    "Underlying",
    "VolColumn",
    "by_underlying",
    "json_schema",
]

_DATE_JSON: dict[str, Any] = {"type": "string", "format": "date"}
_TERM_JSON: dict[str, Any] = {"anyOf": [*DURATION_JSON["anyOf"], _DATE_JSON]}
_STRIKE_JSON: dict[str, Any] = {
    "anyOf": [{"type": "number", "exclusiveMinimum": 0}, {"type": "string", "pattern": r"^[0-9.]+\s*%$"}]
}
_COLUMN_JSON: dict[str, Any] = {"type": "string", "minLength": 1}


def _as_tuple(value: Any) -> Any:
    # min_length of the field counts the valid items only, so emptiness is told here.
    if value == [] or value == ():
        raise_faults("list", [Fault((), "an empty list", "give at least one item")])
    return tuple(value) if isinstance(value, list) else value


def _as_column(value: Any) -> Any:
    return {"column": value} if isinstance(value, str) else value


_Name = Annotated[str, NAME]
_Text = Annotated[str, text()]
_Vol = Annotated[float, number(above=0, most=5, percent=True)]
_Rate = Annotated[float, number(least=-1, most=1, percent=True, such_as="3%")]
_Term = Annotated[Duration | dt.date, Read(parse_term, _TERM_JSON)]
_Every = Annotated[Duration, Read(lambda value: parse_duration(value, looks=True), DURATION_JSON)]
_vols = per_underlying(number(above=0, most=5, percent=True))
_drifts = per_underlying(number(least=-1, most=1, percent=True, such_as="4%"))


def by_underlying(value: float | Mapping[str, float], names: Iterable[str]) -> dict[str, float]:
    """Spread one value over all underlyings; a name missing from a mapping gets zero."""
    return {name: value.get(name, 0.0) if isinstance(value, Mapping) else value for name in names}


class Underlying(Section):
    """What the options are on and what the hedge trades."""

    kind: Literal["spot", "future"] = Field(default="spot", description="spot or future; a future needs no financing")
    spot: Annotated[float, number(above=0)] | None = Field(
        default=None,
        description="price at inception, in currency; required with source gbm, read from the file with prices",
    )
    yield_: _Rate = Field(
        default=0.0,
        alias="yield",
        description="what holding it pays, a year, continuously compounded; none for a future",
    )
    mark_vol: _Vol | None = Field(default=None, description="vol that values its options, a year")
    hedge_vol: _Vol | None = Field(
        default=None, description="vol that its deltas are computed at, a year; default hedge.vol"
    )

    @classmethod
    def more_faults(cls, data: Mapping[str, Any], given: frozenset[str], section: Self | None) -> Iterable[Fault]:
        """Refuse a yield on a future."""
        if data.get("kind") == "future" and data.get("yield") not in (None, 0):
            yield Fault(("yield",), "a future has no yield", "delete the line, or write kind: spot")


class Market(Section):
    """Rates, calendars and underlyings, all in one currency."""

    date: Annotated[dt.date, Read(parse_date, _DATE_JSON)] | None = Field(
        default=None, description="date of the inception, year-month-day; needed when expiries are dates"
    )
    day_count: Literal["business-252", "act-365"] = Field(
        default="business-252", description="how days become years: business-252 (d is a trading day) or act-365"
    )
    rate: _Rate = Field(default=0.0, description="interest rate of the currency, a year, continuously compounded")
    session: Annotated[Duration, Read(parse_duration, DURATION_JSON)] = Field(
        default=Duration(8.0, "h"), description="length of a trading day, from open to close"
    )
    underlyings: dict[_Name, Underlying] = Field(
        min_length=1, description="a mapping of name to spot, yield, mark_vol, hedge_vol and kind"
    )
    correlation: dict[_Name, dict[_Name, Annotated[float, number(above=-1, below=1, percent=True, such_as="40%")]]] = (
        Field(
            default_factory=dict,
            description="correlation of returns for every pair of underlyings, once: {A: {B: 40%}}; source gbm only",
        )
    )

    @classmethod
    def more_faults(cls, data: Mapping[str, Any], given: frozenset[str], section: Self | None) -> Iterable[Fault]:
        """Refuse a session longer than a day, and pairs that are unknown or given twice."""
        if section is not None:
            if section.session.unit not in ("min", "h"):
                yield Fault(("session",), f"{section.session} is not a session", "write hours or minutes, such as 8h")
            elif section.session.amount * (60 if section.session.unit == "h" else 1) > 24 * 60:
                yield Fault(("session",), f"{section.session} is longer than a day", "write at most 24h")
            yield from checks.pairs(section.correlation, tuple(section.underlyings))


class Position(Section):
    """One option position."""

    underlying: _Name | None = Field(
        default=None, description="name under market.underlyings; optional when there is one"
    )
    type: Literal["call", "put"] = Field(description="call or put")
    strike: Annotated[float | RelativeStrike, Read(parse_strike, _STRIKE_JSON)] = Field(
        description="a price above 0, or a percentage of the spot at inception such as 105%"
    )
    expiry: _Term = Field(description="a duration such as 63d, years such as 0.25 or 20/52, or a date")
    quantity: Annotated[float, number(nonzero=True)] | None = Field(
        default=None, description="number of contracts, negative when short; or give notional"
    )
    notional: Annotated[float, number(nonzero=True)] | None = Field(
        default=None, description="currency amount, negative when short: units = notional / spot at inception"
    )
    multiplier: Annotated[float, number(above=0)] = Field(
        default=1.0, description="units of the underlying per contract"
    )
    mark_vol: _Vol | None = Field(
        default=None, description="vol that values the position, a year; default the underlying's"
    )
    hedge_vol: _Vol | None = Field(
        default=None, description="vol of the position's delta, a year; default the underlying's"
    )
    premium: Annotated[float, number(least=0)] | None = Field(
        default=None,
        description="price paid or received per unit of the underlying; default the model value at mark vol",
    )
    settlement: Literal["cash", "physical"] = Field(default="cash", description="cash or physical")

    @classmethod
    def more_faults(cls, data: Mapping[str, Any], given: frozenset[str], section: Self | None) -> Iterable[Fault]:
        """Require exactly one size."""
        if {"quantity", "notional"} <= given:
            yield Fault(("notional",), "given beside quantity", "keep one of the two")
        if not {"quantity", "notional"} & given:
            yield Fault(("quantity",), "missing", "number of contracts, negative when short; or give notional")
        if {"notional", "multiplier"} <= given:
            yield Fault(("multiplier",), "given beside notional", "delete it: units = notional / spot at inception")


class GbmPaths(Section):
    """Simulated prices: geometric Brownian motion."""

    source: Literal["gbm"] = Field(description="gbm or prices")
    realised_vol: Annotated[float | dict[str, float], _vols] = Field(
        description="vol that the price then has, a year; one value or a value for each underlying"
    )
    drift: Annotated[float | dict[str, float], _drifts] = Field(
        default=0.0, description="expected growth of the price, a year; one value or a value for each underlying"
    )
    count: Annotated[int, number(least=2, most=10**10, whole=True)] = Field(
        default=100_000, description="number of paths"
    )
    looks_per_day: Annotated[int, number(least=1, most=10**6, whole=True)] | None = Field(
        default=None, description="looks in each trading day; or give looks"
    )
    looks: Annotated[int, number(least=1, most=10**7, whole=True)] | None = Field(
        default=None, description="number of equal looks over the horizon; or give looks_per_day"
    )
    overnight: Annotated[float, number(least=0, below=1, percent=True, such_as="20%")] = Field(
        default=0.0, description="share of a day's variance between close and open; with looks_per_day only"
    )
    seed: Annotated[int, number(least=0, below=2**64, whole=True)] = Field(
        default=1, description="seed of the random numbers"
    )
    horizon: _Term | None = Field(
        default=None, description="end of the study: a duration, years or a date; default last expiry"
    )

    @classmethod
    def more_faults(cls, data: Mapping[str, Any], given: frozenset[str], section: Self | None) -> Iterable[Fault]:
        """Require exactly one grid of looks."""
        if {"looks", "looks_per_day"} <= given:
            yield Fault(("looks",), "given beside looks_per_day", "keep one of the two")
        if not {"looks", "looks_per_day"} & given:
            yield Fault(("looks_per_day",), "missing", "looks in each trading day; or give looks over the horizon")
        if {"looks", "overnight"} <= given and data.get("overnight") not in (0, "0%"):
            yield Fault(("overnight",), "needs trading days", "give looks_per_day instead of looks, or delete the line")


class TimeColumn(Section):
    """The column that says when a price was seen."""

    column: _Text = Field(description="name of the column with the times")
    unit: Annotated[float, Read(parse_years, DURATION_JSON)] | None = Field(
        default=None,
        description="years that one unit of a numeric column is worth, such as 1/52; none: dates or timestamps",
    )


class VolColumn(Section):
    """The column with mark vols."""

    column: _Text = Field(description="name of the column with the vols")
    unit: Literal["percent", "fraction"] = Field(
        default="fraction", description="percent when 22 means 22%, else fraction"
    )


class PriceSeries(Section):
    """The columns of one underlying in the price file."""

    price: _Text = Field(description="name of the column with the prices, in currency")
    mark_vol: Annotated[VolColumn, BeforeValidator(_as_column), OrJson(_COLUMN_JSON)] | None = Field(
        default=None, description="name of the column with the mark vols, or {column: iv, unit: percent}"
    )


class Inceptions(Section):
    """Rolling inceptions over a price history."""

    every: _Every = Field(description="time from one inception to the next, such as 1d or 4 looks")


def _read_inceptions(value: Any) -> Inceptions | str:
    if value == "once":
        return "once"
    if not isinstance(value, Mapping | Inceptions):
        raise_faults("inceptions", [Fault((), f"{shown(value)} is not accepted", "write once, or {every: 1d}")])
    return Inceptions.model_validate(value)


class PricePaths(Section):
    """Prices from a file."""

    source: Literal["prices"] = Field(description="gbm or prices")
    file: _Text = Field(description="CSV file of prices, relative to the experiment file")
    time: Annotated[TimeColumn, BeforeValidator(_as_column), OrJson(_COLUMN_JSON)] = Field(
        description="name of the column with dates or timestamps, or {column: week, unit: 1/52}"
    )
    series: dict[_Name, PriceSeries] = Field(
        min_length=1, description="the price column, and optionally the mark_vol column, of each underlying"
    )
    inceptions: Annotated[
        Inceptions | Literal["once"], WrapValidator(lambda value, handler: _read_inceptions(value))
    ] = Field(default="once", description="once, or {every: 1d} for rolling inceptions over the history")
    seed: Annotated[int, number(least=0, below=2**64, whole=True)] = Field(
        default=1, description="seed of the bootstrap behind the errors; the P&L itself holds no chance"
    )
    horizon: _Term | None = Field(
        default=None, description="end of the study: a duration, years or a date; default last expiry"
    )


_SOURCES: dict[str, type[GbmPaths] | type[PricePaths]] = {"gbm": GbmPaths, "prices": PricePaths}
_LATER = ("bootstrap", "jumps", "stochastic-vol")


def _read_paths(value: Any) -> GbmPaths | PricePaths:
    if isinstance(value, GbmPaths | PricePaths):
        return value
    if not isinstance(value, Mapping):
        return GbmPaths.model_validate(value)
    source = value.get("source")
    if source is None:
        mistyped = next((key for key in value if nearest(str(key), ["source"])), None)
        if mistyped is not None and mistyped != "source":
            raise_faults("paths", [Fault((mistyped,), *unknown_key(mistyped, ["source"]), on_key=True)])
        raise_faults("paths", [Fault(("source",), "missing", "write gbm or prices")])
    if source in _LATER:
        raise_faults("paths", [Fault(("source",), f"{source} is not available in this version", "use gbm or prices")])
    if not isinstance(source, str) or source not in _SOURCES:
        raise_faults("paths", [Fault(("source",), *unknown_value(source, list(_SOURCES)))])
    return _SOURCES[source].model_validate(value)


class Experiment(Section):
    """One experiment: market, book, paths, hedge, schedules, costs, study and report."""

    title: _Text = Field(description="what the experiment is about, one line")
    market: Market = Field(description="rates, calendars and underlyings")
    book: Annotated[
        tuple[Position, ...],
        BeforeValidator(_as_tuple),
        OrJson({"type": "string", "minLength": 1, "description": "CSV file with the same columns"}),
    ] = Field(description="option positions, or a CSV file with the same columns")
    paths: Annotated[GbmPaths | PricePaths, WrapValidator(lambda value, handler: _read_paths(value))] = Field(
        description="where prices come from: source gbm or prices"
    )
    hedge: Hedge = Field(default_factory=Hedge, description="the delta and the initial hedge")
    schedules: Annotated[
        tuple[Annotated[Schedule, WrapValidator(lambda value, handler: read_schedule(value))], ...],
        BeforeValidator(_as_tuple),
    ] = Field(description="rules that say when the hedge is rebalanced")
    costs: Costs = Field(default_factory=Costs, description="what a trade costs")
    study: Study = Field(default_factory=Study, description="how schedules are compared")
    report: Report = Field(default_factory=Report, description="how the report is written")

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the underlyings, in the order of the file."""
        return tuple(self.market.underlyings)

    @classmethod
    def prepared(cls, data: Mapping[str, Any]) -> Mapping[str, Any]:
        """Put the only underlying into positions that name none."""
        names, book = checks.names_in(data), data.get("book")
        if len(names) != 1 or not isinstance(book, list | tuple) or _valid(NAME.read, names[0]) is None:
            return data
        return {**data, "book": [_on(row, names[0]) for row in book]}

    @classmethod
    def more_faults(cls, data: Mapping[str, Any], given: frozenset[str], section: Self | None) -> Iterable[Fault]:
        """Check the sections against each other, those with faults of their own left out."""
        return checks.across(_parts(data, section))


def _on(row: Any, name: str) -> Any:
    if isinstance(row, Mapping) and row.get("underlying") is None:
        return {**row, "underlying": name}
    if isinstance(row, Position) and row.underlying is None:
        return row.model_copy(update={"underlying": name})
    return row


_T = TypeVar("_T")


def _valid(read: Callable[[Any], _T], value: Any) -> _T | None:
    try:
        return read(value)
    except (ValidationError, BadValueError):
        return None


def _parts(data: Mapping[str, Any], whole: Experiment | None) -> checks.Parts:
    """Collect the sections that are valid by themselves, so that they are checked even when others are not."""
    names = checks.names_in(data)
    if whole is not None:
        market, book, schedules = whole.market, whole.book, whole.schedules
        underlyings, date, paths, hedge = market.underlyings, market.date, whole.paths, whole.hedge
        return checks.Parts(data, names, date, underlyings, market, book, paths, hedge, schedules)
    listed = {key: value for key in ("book", "schedules") if isinstance(value := data.get(key), list | tuple)}
    raw = checks.get(data, "market", "underlyings")
    return checks.Parts(
        data=data,
        names=names,
        date=_valid(parse_date, checks.get(data, "market", "date")),
        underlyings={name: _valid(Underlying.model_validate, checks.get(raw, name)) for name in names},
        market=_valid(Market.model_validate, data.get("market")),
        book=tuple(_valid(Position.model_validate, row) for row in listed.get("book", ())),
        paths=_valid(_read_paths, data.get("paths")),
        hedge=_valid(Hedge.model_validate, data.get("hedge", {})),
        schedules=tuple(_valid(read_schedule, row) for row in listed.get("schedules", ())),
    )


def json_schema() -> dict[str, Any]:
    """Give the JSON Schema of the experiment file, for editors."""
    schema = Experiment.model_json_schema(by_alias=True, mode="validation")
    return {"$schema": "https://json-schema.org/draft/2020-12/schema", **schema, "title": "hedgesim experiment"}
