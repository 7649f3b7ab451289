"""Checks of the sections of an experiment against each other."""

import datetime as dt
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from itertools import combinations
from typing import TYPE_CHECKING, Any

from hedgesim.experiment.fields import Fault, nearest, unknown_name
from hedgesim.experiment.nodes import KeyPath
from hedgesim.experiment.values import as_percent

if TYPE_CHECKING:
    from hedgesim.experiment import policy, schema


@dataclass(frozen=True)
class Parts:
    """An experiment as read, and the sections of it that are valid by themselves; None where one is not."""

    data: Mapping[str, Any]
    names: tuple[str, ...]
    date: dt.date | None
    underlyings: "Mapping[str, schema.Underlying | None]"
    market: "schema.Market | None"
    book: "tuple[schema.Position | None, ...]"
    paths: "schema.GbmPaths | schema.PricePaths | None"
    hedge: "policy.Hedge | None"
    schedules: "tuple[policy.Schedule | None, ...]"

    @property
    def source(self) -> object:
        """Source of the paths as written."""
        return get(self.data, "paths", "source")


def get(data: Any, *keys: str) -> Any:
    """Look up a value in nested mappings or sections; None when any level is missing or something else."""
    for key in keys:
        data = data.get(key) if isinstance(data, Mapping) else getattr(data, key, None)
    return data


def names_in(data: Mapping[str, Any]) -> tuple[str, ...]:
    """Name the underlyings of an experiment that may have faults."""
    underlyings = get(data, "market", "underlyings")
    return tuple(underlyings) if isinstance(underlyings, Mapping) else ()


def across(parts: Parts) -> Iterator[Fault]:
    """Find everything that does not fit together."""
    yield from _names(parts)
    yield from _underlyings(parts)
    yield from _correlation(parts)
    yield from _dates(parts)
    yield from _hedge(parts)
    yield from _schedules(parts)


def _names(parts: Parts) -> Iterator[Fault]:
    rows = get(parts.data, "book")
    used: set[str | None] = set()
    for i, row in enumerate(rows if isinstance(rows, list | tuple) else ()):
        name = get(row, "underlying")
        if name is None and len(parts.names) > 1:
            yield Fault(("book", i, "underlying"), "missing", f"write one of {', '.join(parts.names)}")
        elif isinstance(name, str) and name not in parts.names:
            yield Fault(("book", i, "underlying"), *unknown_name(name, parts.names))
            name = nearest(name, parts.names)
        used.add(name if isinstance(name, str) else None)
    if used and None not in used:
        for name in parts.names:
            if name not in used:
                unused = ("market", "underlyings", name)
                yield Fault(unused, "no position is on it", "delete it, or add a position", on_key=True)
    for path, every in (
        (("paths", "realised_vol"), True),
        (("paths", "drift"), True),
        (("paths", "series"), True),
        (("hedge", "initial"), False),
        (("costs", "by_underlying"), False),
    ):
        yield from _named(path, get(parts.data, *path), parts.names, every=every)


def _named(path: tuple[str, ...], given: object, names: tuple[str, ...], *, every: bool) -> Iterator[Fault]:
    if not isinstance(given, Mapping):
        return
    meant = set()
    for name in given:
        if name not in names:
            yield Fault((*path, name), *unknown_name(name, names), on_key=True)
        meant.add(name if name in names else nearest(name, names))
    for name in names if every else ():
        if name not in meant:
            yield Fault(path, f"nothing for {name}", "give every underlying")


def _underlyings(parts: Parts) -> Iterator[Fault]:
    series = parts.paths.series if parts.paths is not None and parts.paths.source == "prices" else {}
    marked = {
        name if name in parts.names else nearest(name, parts.names)
        for name, columns in series.items()
        if columns.mark_vol is not None
    }
    for name, underlying in parts.underlyings.items():
        if underlying is None:
            continue
        path = ("market", "underlyings", name)
        if parts.source == "gbm" and underlying.spot is None:
            yield Fault((*path, "spot"), "missing", "price at inception, in currency")
        if parts.source == "prices" and underlying.spot is not None:
            yield Fault((*path, "spot"), "given with source prices", "delete it: the price file has the spot")
        if name in marked and underlying.mark_vol is not None:
            yield Fault((*path, "mark_vol"), f"given here and as paths.series.{name}.mark_vol", "keep one of the two")
        unmarked = any(p is not None and p.underlying == name and p.mark_vol is None for p in parts.book)
        if unmarked and underlying.mark_vol is None and name not in marked and parts.paths is not None:
            yield Fault((*path, "mark_vol"), "missing", "the vol that values its options; or give every position one")


def _correlation(parts: Parts) -> Iterator[Fault]:
    if parts.market is None:
        return
    names, given = tuple(parts.market.underlyings), parts.market.correlation
    if parts.source == "prices" and given:
        yield Fault(("market", "correlation"), "given with source prices", "delete it: the prices move as they did")
    if parts.source != "gbm":
        return
    known = {frozenset((a, b)) for a, row in given.items() for b in row}
    missing = [f"{a} and {b}" for a, b in combinations(names, 2) if frozenset((a, b)) not in known]
    for pair in missing:
        yield Fault(("market", "correlation"), f"nothing for {pair}", "give every pair of underlyings once")
    if missing:
        return
    impossible = _impossible(names, correlation_matrix(names, given))
    if impossible:
        together = f"{', '.join(impossible[:-1])} and {impossible[-1]}"
        yield Fault(
            ("market", "correlation"), f"{together} cannot be correlated so", _possible(impossible, names, given)
        )


def pairs(correlation: Mapping[str, Mapping[str, float]], names: tuple[str, ...]) -> Iterator[Fault]:
    """Find pairs with an unknown name, of a name with itself, or given twice."""
    seen = set()
    for a, row in correlation.items():
        if a not in names:
            yield Fault(("correlation", a), *unknown_name(a, names), on_key=True)
        for b in row:
            path = ("correlation", a, b)
            if b not in names:
                yield Fault(path, *unknown_name(b, names), on_key=True)
            elif a == b:
                yield Fault(path, f"{a} with itself", "delete it", on_key=True)
            elif frozenset((a, b)) in seen:
                yield Fault(path, f"{a} and {b} are given twice", "keep one of the two", on_key=True)
            seen.add(frozenset((a, b)))


def correlation_matrix(names: tuple[str, ...], correlation: Mapping[str, Mapping[str, float]]) -> list[list[float]]:
    """Write the pairs of `correlation` as a symmetric matrix in the order of `names`, ones on its diagonal."""
    matrix = [[float(i == j) for j in range(len(names))] for i in range(len(names))]
    for a, row in correlation.items():
        for b, value in row.items():
            i, j = names.index(a), names.index(b)
            matrix[i][j] = matrix[j][i] = value
    return matrix


def _positive_definite(matrix: list[list[float]]) -> bool:
    # Cholesky by rows; a pivot at rounding size is a singular matrix.
    root: list[list[float]] = []
    for i, row in enumerate(matrix):
        new: list[float] = []
        for j in range(i):
            new.append((row[j] - sum(x * y for x, y in zip(new, root[j], strict=False))) / root[j][j])
        pivot = row[i] - sum(x * x for x in new)
        if pivot <= 1e-12:
            return False
        root.append([*new, math.sqrt(pivot)])
    return True


def _impossible(names: tuple[str, ...], matrix: list[list[float]]) -> tuple[str, ...]:
    """Find a smallest set of names (by dropping one at a time) whose correlations cannot hold together."""

    def part(keep: list[int]) -> list[list[float]]:
        return [[matrix[i][j] for j in keep] for i in keep]

    keep = list(range(len(names)))
    if _positive_definite(matrix):
        return ()
    for i in range(len(names)):
        fewer = [k for k in keep if k != i]
        if not _positive_definite(part(fewer)):
            keep = fewer
    return tuple(names[i] for i in keep)


def _possible(names: tuple[str, ...], order: tuple[str, ...], given: Mapping[str, Mapping[str, float]]) -> str:
    if len(names) != 3:
        return "move them towards 0 until the matrix is positive definite"
    matrix = correlation_matrix(order, given)
    i, j, k = (order.index(name) for name in names)
    middle = matrix[i][j] * matrix[i][k]
    half = math.sqrt((1 - matrix[i][j] ** 2) * (1 - matrix[i][k] ** 2))
    low, high = (as_percent(round(x, 4)) for x in (middle - half, middle + half))
    return f"with the other two as they are, {names[1]} and {names[2]} may have {low} to {high}"


def _dates(parts: Parts) -> Iterator[Fault]:
    terms: list[tuple[KeyPath, object]] = [
        (("book", i, "expiry"), position.expiry) for i, position in enumerate(parts.book) if position is not None
    ]
    if parts.paths is not None:
        terms.append((("paths", "horizon"), parts.paths.horizon))
    for path, term in terms:
        if not isinstance(term, dt.date):
            continue
        if get(parts.data, "market", "date") is None:
            yield Fault(
                path, f"the date {term} needs the date of the inception", "give market.date, or write a duration"
            )
        elif parts.date is not None and term <= parts.date:
            yield Fault(path, f"{term} is not after the inception {parts.date}", "write a later date")


def _hedge(parts: Parts) -> Iterator[Fault]:
    if parts.hedge is None:
        return
    if parts.hedge.vol == "realised" and parts.source == "prices":
        yield Fault(("hedge", "vol"), "realised with source prices", "write mark or a vol: a history has no known vol")
    if parts.hedge.remark == "daily" and parts.source == "gbm":
        yield Fault(("hedge", "remark"), "daily with source gbm", "write inception: only a price file has daily vols")
    if parts.hedge.remark == "daily" and parts.paths is not None and parts.paths.source == "prices":
        without = [name for name, series in parts.paths.series.items() if series.mark_vol is None]
        if without:
            message = f"daily, but paths.series.{without[0]} has no mark_vol"
            yield Fault(("hedge", "remark"), message, "give the column of mark vols, or write inception")


def _schedules(parts: Parts) -> Iterator[Fault]:
    first: dict[str, int] = {}
    for i, schedule in enumerate(parts.schedules):
        if schedule is None:
            continue
        if schedule.name in first:
            advice = "delete one, or give each a name of its own"
            yield Fault(("schedules", i), f"{schedule.name!r} again, as schedules.{first[schedule.name]}", advice)
        first.setdefault(schedule.name, i)
        if hasattr(schedule, "at") and parts.paths is not None and parts.paths.source == "gbm" and parts.paths.looks:
            yield Fault(("schedules", i, "at"), "needs trading days", "give paths.looks_per_day instead of paths.looks")
