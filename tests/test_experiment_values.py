"""Scalars: YAML 1.2 core values, percentages, durations, dates, strikes."""

import datetime as dt
import math
from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from hedgesim.experiment.values import (
    BadValueError,
    Duration,
    RelativeStrike,
    as_percent,
    parse_date,
    parse_duration,
    parse_fraction,
    parse_number,
    parse_scalar,
    parse_strike,
    parse_term,
    parse_whole,
    parse_years,
    shortest,
)

positive = st.floats(min_value=1e-9, max_value=1e9)
finite = st.floats(allow_nan=False, allow_infinity=False)


# YAML 1.2.2 specification (2021), section 10.3.2, core schema tag resolution. Narrower here: only lower-case
# null, true and false; wider: underscores between digits.
@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("", None), ("~", None), ("null", None), ("Null", "Null"),
        ("true", True), ("false", False), ("True", "True"), ("yes", "yes"), ("no", "no"), ("on", "on"),
        ("0", 0), ("-12", -12), ("+7", 7), ("0123", 123), ("0o17", 15), ("0x1F", 31), ("200_000", 200_000),
        ("1e-4", 1e-4), ("1.5", 1.5), (".5", 0.5), ("1.", 1.0), ("1e6", 1e6), ("-1.5E+3", -1500.0), ("1_000.5", 1000.5),
        ("9:30", "9:30"), ("1_", "1_"), ("_1", "_1"), ("1__0", "1__0"), ("22%", "22%"), ("2027-03-01", "2027-03-01"),
        ("-.inf", -math.inf), (".inf", math.inf), ("inf", "inf"), ("1e", "1e"), (".", "."), ("-", "-"), ("0b1", "0b1"),
    ],
)  # fmt: skip
def test_plain_scalars_follow_the_core_schema(text: str, value: object) -> None:
    read = parse_scalar(text)
    assert read == value
    assert type(read) is type(value)


def test_a_number_that_is_not_a_number_is_read_as_such() -> None:
    assert math.isnan(parse_scalar(".nan"))  # type: ignore[arg-type]


def test_a_number_of_thousands_of_digits_is_refused() -> None:
    with pytest.raises(BadValueError, match="a number of 5000 digits cannot be read"):
        parse_scalar("9" * 5000)


@given(finite)
def test_the_shortest_form_of_a_number_reads_back_to_the_same_number(number: float) -> None:
    read = parse_scalar(shortest(number))
    assert isinstance(read, int | float)
    assert float(read) == number


@given(st.integers(min_value=-(10**12), max_value=10**12), st.integers(min_value=0, max_value=8))
def test_a_percentage_is_the_double_nearest_to_the_decimal_fraction(digits: int, places: int) -> None:
    written = Decimal(digits).scaleb(-places)
    assert parse_fraction(f"{written:f}%") == float(written / 100)
    assert parse_fraction(f"{written:f} bp") == float(written / 10_000)


@given(finite)
def test_a_fraction_written_as_a_percentage_reads_back_to_the_same_double(fraction: float) -> None:
    assert parse_fraction(as_percent(fraction)) == fraction


@pytest.mark.parametrize(
    "text", ["22 percent", "%", "22%%", "1e999%", "1e9999999%", "twenty", "22 %bp", True, None, [1]]
)
def test_what_is_no_fraction_is_refused(text: object) -> None:
    with pytest.raises(BadValueError):
        parse_fraction(text)


@given(positive, st.sampled_from(["min", "h", "d", "w"]))
def test_a_duration_reads_back_from_its_text(amount: float, unit: str) -> None:
    duration = Duration(amount, unit)
    assert parse_duration(str(duration)) == duration


@given(st.floats(min_value=1e-9, max_value=50.0))
def test_a_bare_number_is_years(years: float) -> None:
    assert parse_duration(years) == Duration(years, "y") == parse_duration(f"{shortest(years)}y")


@given(st.integers(min_value=1, max_value=10**6))
def test_looks_read_back_from_their_text(count: int) -> None:
    duration = Duration(count, "look")
    assert parse_duration(str(duration), looks=True) == duration
    with pytest.raises(BadValueError, match="a number of looks is not accepted here"):
        parse_duration(str(duration))


@given(st.integers(min_value=1, max_value=400), st.integers(min_value=8, max_value=400))
def test_a_ratio_is_years(weeks: int, per_year: int) -> None:
    assert parse_duration(f"{weeks}/{per_year}") == Duration(weeks / per_year, "y")
    assert parse_years(f"{weeks} / {per_year}") == weeks / per_year


@pytest.mark.parametrize(
    ("text", "written"),
    [
        ("1 look", "1 look"),
        ("1look", "1 look"),
        ("4 looks", "4 looks"),
        ("30min", "30min"),
        ("2.0h", "2h"),
        ("1.5 d", "1.5d"),
    ],
)
def test_durations_are_written_in_one_way(text: str, written: str) -> None:
    assert str(parse_duration(text, looks=True)) == written


@pytest.mark.parametrize(
    ("text", "advice"),
    [
        ("30m", "write 30min"),
        ("2 hours", "write 2h"),
        ("5 days", "write 5d"),
        ("12 Weeks", "write 12w"),
        ("1yr", "write 1y"),
    ],
)
def test_a_unit_in_other_words_is_told_the_unit_to_write(text: str, advice: str) -> None:
    with pytest.raises(BadValueError) as caught:
        parse_duration(text)
    assert caught.value.advice == advice


@pytest.mark.parametrize(
    "value", [0, -1, "0d", "-1d", "1e999d", "d", "1 d 2 h", True, None, [], "0/52", "1/0", "51y", math.inf]
)
def test_what_is_no_duration_is_refused(value: object) -> None:
    with pytest.raises(BadValueError):
        parse_duration(value)


@given(st.dates(min_value=dt.date(1000, 1, 1)))
def test_dates_read_back(date: dt.date) -> None:
    assert parse_date(date.isoformat()) == date == parse_term(date.isoformat())


@pytest.mark.parametrize(
    "value", ["20270301", 20270301, "2027-3-1", "2027-W09-1", "2027-02-29", None, dt.datetime(2027, 3, 1)]
)
def test_what_is_no_date_is_refused(value: object) -> None:
    with pytest.raises(BadValueError):
        parse_date(value)


@given(st.floats(min_value=1e-6, max_value=1e6))
def test_strikes_read_back(level: float) -> None:
    assert parse_strike(level) == level
    assert parse_strike(str(RelativeStrike(level))) == RelativeStrike(level)


@given(st.integers(min_value=0, max_value=2**64 - 1))
def test_whole_numbers_keep_every_digit(number: int) -> None:
    assert parse_whole(number) == number
    assert type(parse_whole(number)) is int


def test_a_whole_number_may_be_written_with_an_exponent() -> None:
    assert parse_whole(1e5) == 100_000
    with pytest.raises(BadValueError, match=r"10\.5 is not a whole number - write 10 or 11"):
        parse_whole(10.5)


@pytest.mark.parametrize("value", ["22%", "2bp", "1", True, None, math.nan, math.inf, 10**400, "x"])
def test_what_is_no_plain_number_is_refused(value: object) -> None:
    with pytest.raises(BadValueError):
        parse_number(value)
