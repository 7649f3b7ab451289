"""Malformed price files: every message, word for word."""

import pytest

from hedgesim.errors import ExperimentError
from hedgesim.paths.prices import SeriesColumns, read_prices

PRICE = "a price greater than zero, or leave the row out"
DAY1, DAY2, DAY3 = "2024-01-04", "2024-01-05", "2024-01-08"


def problems(tmp_path, content: str | bytes, *, vol: str | None = None, scale: float = 1.0, unit=None, **options):
    file = tmp_path / "prices.csv"
    file.write_bytes(content if isinstance(content, bytes) else content.encode())
    with pytest.raises(ExperimentError) as caught:
        read_prices(
            file,
            time=options.get("time", "date"),
            time_unit_years=unit,
            series={"A": SeriesColumns("close", vol, scale)},
            day_count=options.get("day_count", "business-252"),
        )
    return [str(p).removeprefix(f"{tmp_path}/") for p in caught.value.problems]


HEAD = "date,close,iv\n"

ONE_PROBLEM = {
    "empty file": ("", "prices.csv: the file is empty - a header line and rows of prices"),
    "blank lines only": ("\n\n", "prices.csv: the file is empty - a header line and rows of prices"),
    "header only": (HEAD, "prices.csv:1: there is a header but no row of prices - rows of prices"),
    "one row": (HEAD + f"{DAY1},100,\n", "prices.csv:2: there is one row of prices - at least two rows"),
    "semicolons": ("date;close\n2024-01-04;1\n", "prices.csv:1: the header is separated by semicolons - separate columns by commas"),
    "tabs": ("date\tclose\n2024-01-04\t1\n", "prices.csv:1: the header is separated by tabs - separate columns by commas"),
    "near column": (
        "date,closes\n2024-01-04,1\n",
        "prices.csv:1: close: the file has no column 'close' - did you mean 'closes'?",
    ),
    "unknown column": (
        "date,last\n2024-01-04,1\n",
        "prices.csv:1: close: the file has no column 'close' - one of 'date', 'last'",
    ),
    "column twice": (
        "date,close,close\n2024-01-04,1,2\n",
        "prices.csv:1: close: two columns have this name - give each column its own name",
    ),
    "short row": (
        HEAD + f"{DAY1},100,\n{DAY2},101\n{DAY3},102,\n",
        "prices.csv:3: the row has 2 cells, the header has 3 - one cell for each column",
    ),
    "long row": (
        HEAD + f"{DAY1},100,\n{DAY2},1,5,\n{DAY3},102,\n",
        "prices.csv:3: the row has 4 cells, the header has 3 - one cell for each column; quote a cell that holds a comma",
    ),
    "unsorted": (
        HEAD + f"{DAY1},100,\n{DAY3},101,\n{DAY2},102,\n",
        "prices.csv:4: date: '2024-01-05' is earlier than '2024-01-08' above it - rows in order of time, the oldest first",
    ),
    "duplicate time": (
        HEAD + f"{DAY1},100,\n{DAY1},101,\n{DAY2},102,\n",
        "prices.csv:3: date: '2024-01-04' stands twice - one row for each time",
    ),
    "no time": (
        HEAD + f"{DAY1},100,\n,101,\n{DAY3},102,\n",
        "prices.csv:3: date: no time - a date such as 2027-03-01",
    ),
    "foreign date": (
        HEAD + f"{DAY1},100,\n05/01/2024,101,\n{DAY3},102,\n",
        "prices.csv:3: date: '05/01/2024' is not a date - a date such as 2027-03-01",
    ),
    "no such day": (
        HEAD + f"{DAY1},100,\n2024-02-30,101,\n2024-03-01,102,\n",
        "prices.csv:3: date: '2024-02-30' is not in the calendar - a date such as 2027-03-01",
    ),
    "timestamp among dates": (
        HEAD + f"{DAY1},100,\n2024-01-05T10:00,101,\n{DAY3},102,\n",
        "prices.csv:3: date: '2024-01-05T10:00' is not a date - a date such as 2027-03-01",
    ),
    "date among timestamps": (
        HEAD + f"2024-01-04T10:00,100,\n{DAY2},101,\n2024-01-08T10:00,102,\n",
        "prices.csv:3: date: '2024-01-05' is not a date and time - a date and time such as 2027-03-01T15:30",
    ),
    "zone changes": (
        HEAD + "2024-03-08T10:00-05:00,100,\n2024-03-11T10:00-04:00,101,\n",
        "prices.csv:3: date: the zone changes from -05:00 to -04:00 - "
        "one zone for the whole file, or local times without a zone",
    ),
    "zone is lost": (
        HEAD + "2024-03-08T10:00Z,100,\n2024-03-11T10:00,101,\n",
        "prices.csv:3: date: the zone changes from Z to none - one zone for the whole file, or local times without a zone",
    ),
    "number without a unit": (
        HEAD + "0,100,\n1,101,\n",
        "prices.csv:2: date: '0' is a number and the time column has no unit - "
        "dates such as 2027-03-01, or give the unit of the column, such as unit: 1/52 for weeks",
    ),
    "compact date is a number": (
        HEAD + "20240104,100,\n20240105,101,\n",
        "prices.csv:2: date: '20240104' is a number and the time column has no unit - "
        "dates such as 2027-03-01, or give the unit of the column, such as unit: 1/52 for weeks",
    ),
    "weekly dates on trading days": (
        HEAD + "2024-01-05,100,\n2024-01-12,101,\n2024-01-19,101,\n",
        "prices.csv: date: the dates are 7 days apart, but under business-252 each date is one trading day - "
        "day_count: act-365, or a time column of numbers with a unit such as 1/52",
    ),
    "no price": (HEAD + f"{DAY1},100,\n{DAY2},,\n", f"prices.csv:3: close: no price - {PRICE}"),
    "zero price": (HEAD + f"{DAY1},100,\n{DAY2},0.00,\n", f"prices.csv:3: close: the price is 0.00 - {PRICE}"),
    "negative price": (HEAD + f"{DAY1},100,\n{DAY2},-37.63,\n", f"prices.csv:3: close: the price is -37.63 - {PRICE}"),
    "not a number": (HEAD + f"{DAY1},100,\n{DAY2},n/a,\n", f"prices.csv:3: close: 'n/a' is not a number - {PRICE}"),
    "nan": (HEAD + f"{DAY1},100,\n{DAY2},NaN,\n", f"prices.csv:3: close: 'NaN' is not finite - {PRICE}"),
    "infinite": (HEAD + f"{DAY1},100,\n{DAY2},inf,\n", f"prices.csv:3: close: 'inf' is not finite - {PRICE}"),
    "too large": (HEAD + f"{DAY1},100,\n{DAY2},1e999,\n", f"prices.csv:3: close: 1e999 is not finite - {PRICE}"),
    "decimal comma": (
        HEAD + f'{DAY1},100,\n{DAY2},"101,5",\n',
        "prices.csv:3: close: '101,5' is not a number - a decimal point: 101.5",
    ),
    "thousands": (
        HEAD + f'{DAY1},100,\n{DAY2},"1,234.50",\n',
        "prices.csv:3: close: '1,234.50' is not a number - no separators: 1234.50",
    ),
    "underscore": (HEAD + f"{DAY1},100,\n{DAY2},1_000,\n", f"prices.csv:3: close: '1_000' is not a number - {PRICE}"),
    "not UTF-8": (b"date,close\n2024-01-04,1\n2024-01-05,1\xa0\n", "prices.csv:3: this is not UTF-8 - save the file as UTF-8"),
    "quote left open": (
        HEAD + f'{DAY1},"100,\n' + f"{DAY2},101,\n" * 20_000,
        "prices.csv:2: not a row of CSV (field larger than field limit (131072)) - cells separated by commas, quotes closed",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", ONE_PROBLEM)
def test_message(tmp_path, case):
    content, message = ONE_PROBLEM[case]
    assert problems(tmp_path, content) == [message]


VOL_PROBLEMS = {
    "zero": ("0", 1.0, "the mark vol is 0 - a vol such as 0.22"),
    "negative": ("-0.2", 1.0, "the mark vol is -0.2 - a vol such as 0.22"),
    "percentage": ("22", 1.0, "22 looks like a percentage - a fraction such as 0.22, or unit: percent for the column"),
    "written percentage": ("22%", 0.01, "'22%' is not a number - a vol in per cent such as 22"),
    "percent too large": ("2200", 0.01, "the mark vol is 2200 per cent - a vol of at most 500%"),
    "words": ("closed", 0.01, "'closed' is not a number - a vol in per cent such as 22"),
    "nan": ("nan", 1.0, "'nan' is not finite - a vol such as 0.22"),
}


@pytest.mark.parametrize("case", VOL_PROBLEMS)
def test_mark_vol_message(tmp_path, case):
    cell, scale, message = VOL_PROBLEMS[case]
    content = HEAD + f"{DAY1},100,{22 if scale < 1 else 0.22}\n{DAY2},101,{cell}\n"
    assert problems(tmp_path, content, vol="iv", scale=scale) == [f"prices.csv:3: iv: {message}"]


def test_numbers_in_a_numeric_time_column(tmp_path):
    found = problems(tmp_path, HEAD + "0,1,\n1/2,1,\ninf,1,\n2,1,\n1,1,\n", unit=1 / 52)
    assert found == [
        "prices.csv:3: date: '1/2' is not a number - a number",
        "prices.csv:4: date: 'inf' is not finite - a number",
        "prices.csv:6: date: '1' is earlier than '2' above it - rows in order of time, the oldest first",
    ]


def test_missing_file(tmp_path):
    with pytest.raises(ExperimentError) as caught:
        read_prices(
            tmp_path / "none.csv",
            time="date",
            time_unit_years=None,
            series={"A": SeriesColumns("close")},
            day_count="act-365",
        )
    assert str(caught.value) == f"{tmp_path}/none.csv: there is no such file - the path of a CSV file of prices"


def test_a_folder_is_no_file(tmp_path):
    with pytest.raises(
        ExperimentError, match=r"it cannot be read \(Is a directory\) - the path of a CSV file of prices"
    ):
        read_prices(
            tmp_path, time="date", time_unit_years=None, series={"A": SeriesColumns("close")}, day_count="act-365"
        )


def test_all_bad_rows_are_reported_at_once_in_the_order_of_lines(tmp_path):
    content = HEAD + f"{DAY1},0,-1\n2024-01-05,x,\n2024-01-03,1\n{DAY3},,0.2\n"
    assert problems(tmp_path, content, vol="iv") == [
        f"prices.csv:2: close: the price is 0 - {PRICE}",
        "prices.csv:2: iv: the mark vol is -1 - a vol such as 0.22",
        f"prices.csv:3: close: 'x' is not a number - {PRICE}",
        "prices.csv:4: the row has 2 cells, the header has 3 - one cell for each column",
        f"prices.csv:5: close: no price - {PRICE}",
    ]


def test_twenty_problems_are_shown_and_the_rest_are_counted(tmp_path):
    rows = "".join(f"2024-01-{day:02d},0,\n" for day in range(1, 28))
    found = problems(tmp_path, HEAD + rows)
    assert len(found) == 21
    assert found[19] == f"prices.csv:21: close: the price is 0 - {PRICE}"
    assert found[20] == "prices.csv: and 7 more problems"


def test_every_missing_column_is_named(tmp_path):
    assert problems(tmp_path, "day,price\n2024-01-04,1\n", vol="iv") == [
        "prices.csv:1: date: the file has no column 'date' - one of 'day', 'price'",
        "prices.csv:1: close: the file has no column 'close' - one of 'day', 'price'",
        "prices.csv:1: iv: the file has no column 'iv' - one of 'day', 'price'",
    ]


def test_line_numbers_count_blank_lines_and_lines_within_quotes(tmp_path):
    content = 'date,close,"iv\nnoted"\n\n2024-01-04,100,"a\nb"\n2024-01-05,bad,\n'
    assert problems(tmp_path, content) == [f"prices.csv:6: close: 'bad' is not a number - {PRICE}"]
