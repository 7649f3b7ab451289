"""User-supplied prices: a CSV file read strictly into the arrays that the replay engine runs over."""

import csv
import difflib
import io
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Literal

import numpy as np

from hedgesim.errors import ExperimentError, Problem
from hedgesim.market import DAYS_PER_YEAR, DayCount, Flags, Floats, Ints, frozen

TimeKind = Literal["date", "timestamp", "number"]

_MOST_PROBLEMS = 20
_LARGEST_VOL = 5.0
_LONG_GAP_DAYS = 5.0
_GAP_OVER_MEDIAN = 3.0
# Steps of a numeric time column are decimal fractions: this is far above their rounding, far below a step.
_DAY_TOLERANCE = 1e-6

_NUMBER = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?")
_NOT_FINITE = re.compile(r"[+-]?(nan|inf|infinity)", re.IGNORECASE)
_DATE = re.compile(r"\d{4}-\d{2}-\d{2}")
_TIMESTAMP = re.compile(r"\d{4}-\d{2}-\d{2}[T ]\d{2}:\d{2}(:\d{2}(\.\d{1,6})?)?(Z|[+-]\d{2}:\d{2})?")


@dataclass(frozen=True)
class SeriesColumns:
    """Columns of the file that belong to one underlying.

    Attributes
    ----------
    price : column of prices
    mark_vol : column of mark vols, None when the file has none
    mark_vol_scale : 1 when the column holds fractions, 0.01 when it holds percentages
    """

    price: str
    mark_vol: str | None = None
    mark_vol_scale: float = 1.0


@dataclass(frozen=True)
class PriceHistory:
    """Prices of one file; arrays are by row of the file.

    Attributes
    ----------
    file : name of the file, for messages
    names : underlyings
    label : text of the time column
    line : line of the file
    date : ordinal of the calendar date, None when the time column holds numbers
    t, s : calendar and variance years since the first row (equal: the file gives no second clock)
    clock : trading days since the first row (calendar days under act-365)
    is_open, is_close : first and last row of a day
    price : (underlying, row)
    mark_vol : (underlying, row), nan where the file gives none; None when no underlying has a mark vol column
    mark_vol_column : by underlying, the column it came from, or None
    days_per_year : days of the clock in a year
    notes : what the reader should know about the data, one sentence each
    """

    file: str
    names: tuple[str, ...]
    label: tuple[str, ...]
    line: Ints
    date: Ints | None
    t: Floats
    s: Floats
    clock: Floats
    is_open: Flags
    is_close: Flags
    price: Floats
    mark_vol: Floats | None
    mark_vol_column: tuple[str | None, ...]
    days_per_year: int
    notes: tuple[str, ...]

    @property
    def rows(self) -> int:
        """Number of rows of prices."""
        return len(self.t)


@dataclass(frozen=True)
class _Cells:
    """The cells that are read, as text; rows of a wrong length are left out and reported."""

    columns: Mapping[str, list[str]]
    lines: list[int]


def read_prices(
    path: Path | str,
    *,
    time: str,
    time_unit_years: float | None,
    series: Mapping[str, SeriesColumns],
    day_count: DayCount,
) -> PriceHistory:
    """Read a CSV file of prices.

    Parameters
    ----------
    path : a comma-separated file in UTF-8 with a header line
    time : name of the time column: ISO dates, ISO timestamps (without zone or all at one offset), or numbers
    time_unit_years : years in one unit of a numeric time column, 1/52 for weeks; None for dates and timestamps
    series : by underlying, in the order of the result
    day_count : business-252: every date in the file is one trading day; the last row of a day stands at a whole
        number of days, its rows divide the day equally, and the first row of the file is at zero. act-365: elapsed
        calendar time. Numbers are elapsed units under both

    Returns
    -------
    PriceHistory

    Raises
    ------
    ExperimentError
        with every bad cell, up to 20; an empty mark vol is no error here, since no inception may need it
    """
    file = str(path)
    problems: list[Problem] = []
    cells = _read_cells(Path(path), file, time, series, problems)
    lines = cells.lines
    kind, moments = _read_times(file, time, cells.columns[time], lines, time_unit_years, problems)
    price = np.array([_read_prices(file, c.price, cells.columns[c.price], lines, problems) for c in series.values()])
    vols = [
        np.full(len(lines), np.nan)
        if c.mark_vol is None
        else _read_vols(file, c.mark_vol, cells.columns[c.mark_vol], lines, c.mark_vol_scale, problems)
        for c in series.values()
    ]
    if not problems and len(lines) < 2:
        problems.append(Problem(file, lines[0], None, "", "there is one row of prices", "at least two rows"))
    if not problems and kind == "date" and day_count == "business-252":
        _check_daily(file, time, moments, problems)
    raise_problems(problems)

    t, clock, day = _clocks(kind, moments, time_unit_years or 1.0, day_count)
    edge = np.flatnonzero(np.diff(day)) + 1
    is_open, is_close = np.zeros(len(day), bool), np.zeros(len(day), bool)
    is_open[np.concatenate([[0], edge])] = True
    is_close[np.concatenate([edge - 1, [len(day) - 1]])] = True
    labels = tuple(cells.columns[time])
    return PriceHistory(
        file=file,
        names=tuple(series),
        label=labels,
        line=frozen(lines, np.int64),
        date=None if kind == "number" else frozen(day, np.int64),
        t=frozen(t),
        s=frozen(t),
        clock=frozen(clock),
        is_open=frozen(is_open, bool),
        is_close=frozen(is_close, bool),
        price=frozen(price),
        mark_vol=frozen(vols) if any(c.mark_vol is not None for c in series.values()) else None,
        mark_vol_column=tuple(c.mark_vol for c in series.values()),
        days_per_year=DAYS_PER_YEAR[day_count],
        notes=(*_gap_notes(kind, moments, day, labels), *_vol_notes(series, vols)),
    )


def raise_problems(problems: Sequence[Problem]) -> None:
    """Raise the problems of one file in the order of its lines, the first 20 and a count of the rest."""
    if not problems:
        return
    ordered = sorted(problems, key=lambda p: p.line or 0)
    shown = ordered[:_MOST_PROBLEMS]
    if len(ordered) > len(shown):
        more = len(ordered) - len(shown)
        shown.append(Problem(ordered[0].file, None, None, "", f"and {more} more problem{'s' if more > 1 else ''}"))
    raise ExperimentError(shown)


def _read_cells(
    path: Path, file: str, time: str, series: Mapping[str, SeriesColumns], problems: list[Problem]
) -> _Cells:
    """The wanted columns as text; raises at once when the file or its header cannot be read."""
    wanted = list(dict.fromkeys([time, *(c for s in series.values() for c in (s.price, s.mark_vol) if c is not None)]))
    rows = _read_rows(path, file)
    if not rows:
        raise ExperimentError([Problem(file, None, None, "", "the file is empty", "a header line and rows of prices")])
    line, header = rows[0][0], [name.strip() for name in rows[0][1]]
    missing = _header_problems(file, line, header, wanted)
    if missing:
        raise ExperimentError(missing)
    if len(rows) == 1:
        raise ExperimentError(
            [Problem(file, line, None, "", "there is a header but no row of prices", "rows of prices")]
        )
    place = {name: header.index(name) for name in wanted}
    columns: dict[str, list[str]] = {name: [] for name in wanted}
    lines = []
    for line, row in rows[1:]:
        if len(row) != len(header):
            problems.append(
                Problem(
                    file,
                    line,
                    None,
                    "",
                    f"the row has {len(row)} cells, the header has {len(header)}",
                    "one cell for each column"
                    + ("; quote a cell that holds a comma" if len(row) > len(header) else ""),
                )
            )
            continue
        lines.append(line)
        for name in wanted:
            columns[name].append(row[place[name]].strip())
    if not lines:
        raise_problems(problems)
    return _Cells(columns, lines)


def _read_rows(path: Path, file: str) -> list[tuple[int, list[str]]]:
    """Rows that are not blank, with the line each starts on."""
    try:
        content = path.read_bytes()
    except OSError as error:
        missing = isinstance(error, FileNotFoundError)
        reason = "there is no such file" if missing else f"it cannot be read ({error.strerror})"
        raise ExperimentError([Problem(file, None, None, "", reason, "the path of a CSV file of prices")]) from error
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise ExperimentError([Problem(file, line, None, "", "this is not UTF-8", "save the file as UTF-8")]) from error
    reader = csv.reader(io.StringIO(text, newline=""))
    rows, line = [], 1
    try:
        for row in reader:
            if any(cell.strip() for cell in row):
                rows.append((line, row))
            line = reader.line_num + 1
    except csv.Error as error:
        raise ExperimentError(
            [Problem(file, line, None, "", f"not a row of CSV ({error})", "cells separated by commas, quotes closed")]
        ) from error
    return rows


def _header_problems(file: str, line: int, header: list[str], wanted: Sequence[str]) -> list[Problem]:
    for mark, name in ((";", "semicolons"), ("\t", "tabs")):
        if len(header) == 1 and mark in header[0]:
            return [Problem(file, line, None, "", f"the header is separated by {name}", "separate columns by commas")]
    found = []
    for name in wanted:
        if header.count(name) > 1:
            found.append(Problem(file, line, None, name, "two columns have this name", "give each column its own name"))
        if name in header:
            continue
        near = difflib.get_close_matches(name, header, n=1)
        advice = f"did you mean '{near[0]}'?" if near else "one of " + ", ".join(f"'{h}'" for h in header)
        found.append(Problem(file, line, None, name, f"the file has no column '{name}'", advice))
    return found


def _time_kind(text: str) -> TimeKind | None:
    kinds: tuple[tuple[TimeKind, re.Pattern[str]], ...] = (
        ("date", _DATE),
        ("timestamp", _TIMESTAMP),
        ("number", _NUMBER),
    )
    return next((kind for kind, pattern in kinds if pattern.fullmatch(text)), None)


_TIME_ADVICE: dict[TimeKind, str] = {
    "date": "a date such as 2027-03-01",
    "timestamp": "a date and time such as 2027-03-01T15:30",
    "number": "a number",
}


def _read_times(
    file: str, column: str, cells: list[str], lines: list[int], unit: float | None, problems: list[Problem]
) -> tuple[TimeKind, Floats]:
    """Kind of the time column, and the moments: days (dates and timestamps, local time) or units."""
    kind: TimeKind = "number"
    if unit is None:
        kind = next((k for k in map(_time_kind, cells) if k is not None), "date")
        if kind == "number":
            text = next(c for c in cells if _time_kind(c) is not None)
            problems.append(
                Problem(
                    file,
                    lines[cells.index(text)],
                    None,
                    column,
                    f"'{text}' is a number and the time column has no unit",
                    "dates such as 2027-03-01, or give the unit of the column, such as unit: 1/52 for weeks",
                )
            )
            return kind, np.full(len(cells), np.nan)
    moments = np.full(len(cells), np.nan)
    offsets: list[str] = []
    for row, (text, line) in enumerate(zip(cells, lines, strict=True)):
        message, advice = "", _TIME_ADVICE[kind]
        if not text:
            message = "no time"
        elif kind == "number" and _NOT_FINITE.fullmatch(text):
            message = f"'{text}' is not finite"
        elif _time_kind(text) != kind:
            message = f"'{text}' is not {_TIME_ADVICE[kind].split(' such')[0]}"
        elif kind == "number":
            moments[row] = float(text)
        else:
            try:
                moments[row], offset = _days(text)
            except ValueError:
                message = f"'{text}' is not in the calendar"
            else:
                offsets.append(offset)
                if offset != offsets[0]:
                    message = f"the zone changes from {offsets[0] or 'none'} to {offset or 'none'}"
                    advice = "one zone for the whole file, or local times without a zone"
        if message:
            problems.append(Problem(file, line, None, column, message, advice))
    for row in range(1, len(cells)):
        if moments[row] == moments[row - 1]:
            text = f"'{cells[row]}' stands twice"
            problems.append(Problem(file, lines[row], None, column, text, "one row for each time"))
        elif moments[row] < moments[row - 1]:
            text = f"'{cells[row]}' is earlier than '{cells[row - 1]}' above it"
            problems.append(Problem(file, lines[row], None, column, text, "rows in order of time, the oldest first"))
    return kind, moments


def _days(text: str) -> tuple[float, str]:
    """Days since year 1 in the local time of the text, and the text of its zone."""
    moment = datetime.fromisoformat(text)
    found = re.search(r"(Z|[+-]\d{2}:\d{2})$", text[10:])
    part = (moment.hour * 3600 + moment.minute * 60 + moment.second + 1e-6 * moment.microsecond) / 86400.0
    return moment.toordinal() + part, found.group() if found else ""


def _read_numbers(
    file: str,
    column: str,
    cells: list[str],
    lines: list[int],
    problems: list[Problem],
    *,
    what: str,
    fault: Callable[[float, str], tuple[str, str] | None],
) -> Floats:
    """Numbers of one column; `fault(number, text)` says what is wrong with one and what would be right."""
    out = np.full(len(cells), np.nan)
    for row, text in enumerate(cells):
        if not text:
            continue
        found: tuple[str, str] | None
        if _NUMBER.fullmatch(text):
            out[row] = float(text)
            found = fault(float(out[row]), text) if np.isfinite(out[row]) else (f"{text} is not finite", what)
        elif _NOT_FINITE.fullmatch(text):
            found = f"'{text}' is not finite", what
        elif re.fullmatch(r"[+-]?\d+,\d+", text):
            found = f"'{text}' is not a number", f"a decimal point: {text.replace(',', '.')}"
        elif _NUMBER.fullmatch(text.replace(",", "")):
            found = f"'{text}' is not a number", f"no separators: {text.replace(',', '')}"
        else:
            found = f"'{text}' is not a number", what
        if found:
            problems.append(Problem(file, lines[row], None, column, *found))
    return out


def _read_prices(file: str, column: str, cells: list[str], lines: list[int], problems: list[Problem]) -> Floats:
    what = "a price greater than zero, or leave the row out"

    def fault(number: float, text: str) -> tuple[str, str] | None:
        return None if number > 0.0 else (f"the price is {text}", what)

    problems.extend(
        Problem(file, line, None, column, "no price", what) for line, text in zip(lines, cells, strict=True) if not text
    )
    return _read_numbers(file, column, cells, lines, problems, what=what, fault=fault)


def _read_vols(
    file: str, column: str, cells: list[str], lines: list[int], scale: float, problems: list[Problem]
) -> Floats:
    percent = scale != 1.0
    what = "a vol in per cent such as 22" if percent else "a vol such as 0.22"

    def fault(number: float, text: str) -> tuple[str, str] | None:
        if number <= 0.0:
            return f"the mark vol is {text}", what
        if number * scale <= _LARGEST_VOL:
            return None
        if percent:
            return f"the mark vol is {text} per cent", f"a vol of at most {_LARGEST_VOL:.0%}"
        return f"{text} looks like a percentage", "a fraction such as 0.22, or unit: percent for the column"

    return scale * _read_numbers(file, column, cells, lines, problems, what=what, fault=fault)


def _check_daily(file: str, column: str, moments: Floats, problems: list[Problem]) -> None:
    gap = float(np.median(np.diff(moments)))
    if gap >= _LONG_GAP_DAYS:
        problems.append(
            Problem(
                file,
                None,
                None,
                column,
                f"the dates are {gap:.0f} days apart, but under business-252 each date is one trading day",
                "day_count: act-365, or a time column of numbers with a unit such as 1/52",
            )
        )


def _clocks(kind: TimeKind, moments: Floats, unit: float, day_count: DayCount) -> tuple[Floats, Floats, Ints]:
    """Calendar years, trading days, and the day that each row belongs to (a date ordinal, or a count)."""
    year = DAYS_PER_YEAR[day_count]
    if kind == "number":
        t = (moments - moments[0]) * unit
        clock = t * year
        return t, clock, np.ceil(clock - _DAY_TOLERANCE).astype(np.int64)
    day = np.floor(moments).astype(np.int64)
    if day_count == "act-365":
        clock = moments - moments[0]
        return clock / year, clock, day
    _, first, session, rows = np.unique(day, return_index=True, return_inverse=True, return_counts=True)
    place = np.arange(len(day)) - first[session]
    if rows[0] == 1:
        clock = session - 1 + (place + 1) / rows[session]
    else:
        # The first row of the file starts the clock: the later rows of its day divide a whole day among them.
        steps = np.where(session == 0, rows[0] - 1, rows[session])
        clock = session + (place + (session > 0)) / steps
    return clock / year, clock, day


def _gap_notes(kind: TimeKind, moments: Floats, day: Ints, labels: tuple[str, ...]) -> tuple[str, ...]:
    """Intervals much longer than usual: between dates, between numbers, and within the days of timestamps."""
    notes = []
    if kind == "number":
        notes.append(_gap_note(np.diff(moments), np.arange(1, len(labels)), labels, 0.0, "units"))
    else:
        new = np.flatnonzero(np.diff(day)) + 1
        notes.append(_gap_note(np.diff(day)[new - 1].astype(np.float64), new, labels, _LONG_GAP_DAYS, "calendar days"))
    if kind == "timestamp":
        inside = np.flatnonzero(np.diff(day) == 0) + 1
        notes.append(_gap_note(np.diff(moments)[inside - 1] * 1440.0, inside, labels, 0.0, "minutes within a day"))
    return tuple(n for n in notes if n)


def _gap_note(gap: Floats, row: Ints, labels: tuple[str, ...], least: float, unit: str) -> str:
    if len(gap) == 0:
        return ""
    limit = max(least, _GAP_OVER_MEDIAN * float(np.median(gap)))
    long = gap > limit * (1.0 + 1e-9)
    if not long.any():
        return ""
    worst = int(row[np.argmax(gap)])
    count = int(long.sum())
    return (
        f"{count} interval{'s are' if count > 1 else ' is'} longer than {limit:.6g} {unit}; "
        f"the longest is {gap.max():.6g}, from {labels[worst - 1]} to {labels[worst]}"
    )


def _vol_notes(series: Mapping[str, SeriesColumns], vols: Sequence[Floats]) -> tuple[str, ...]:
    """A column of percentages that looks like fractions (an exchange rate in a band may truly be so calm)."""
    notes = []
    for columns, vol in zip(series.values(), vols, strict=True):
        given = vol[~np.isnan(vol)]
        if columns.mark_vol is not None and columns.mark_vol_scale != 1.0 and len(given) and given.max() < 0.02:
            notes.append(f"column '{columns.mark_vol}' is read in per cent, and no vol exceeds {given.max():.2%}")
    return tuple(notes)
