"""Scalars of the experiment file: numbers, percentages, basis points, durations, dates."""

import datetime as dt
import math
import re
from dataclasses import dataclass
from decimal import Decimal

Scalar = None | bool | int | float | str

_INT = re.compile(r"[-+]?[0-9]+(?:_[0-9]+)*")
_BASED = re.compile(r"0o[0-7]+|0x[0-9a-fA-F]+")
_FLOAT = re.compile(r"[-+]?(?:\.[0-9]+|[0-9]+(?:_[0-9]+)*(?:\.[0-9]*)?)(?:[eE][-+]?[0-9]+)?")
_INFINITE = re.compile(r"([-+]?)\.(?:inf|Inf|INF)")
_NAN = re.compile(r"\.(?:nan|NaN|NAN)")
_NUMBER = r"[0-9]+(?:\.[0-9]+)?(?:[eE][-+]?[0-9]+)?"
_HUNDREDTHS = re.compile(r"([-+]?(?:\.[0-9]+|[0-9]+(?:_[0-9]+)*(?:\.[0-9]*)?)(?:[eE][-+]?[0-9]+)?)\s*(%|bp)")
_RATIO = re.compile(rf"({_NUMBER})\s*/\s*({_NUMBER})")
_DURATION = re.compile(rf"({_NUMBER})\s*([A-Za-z]+)")
_DATE = re.compile(r"[0-9]{4}-[0-9]{2}-[0-9]{2}")

_UNIT_WORDS = {
    "m": "min", "mins": "min", "minute": "min", "minutes": "min", "hr": "h", "hrs": "h", "hour": "h", "hours": "h",
    "day": "d", "days": "d", "week": "w", "weeks": "w", "wk": "w", "year": "y", "years": "y", "yr": "y",
}  # fmt: skip
_DURATION_ADVICE = "write a number with min, h, d, w or y, such as 30min or 5d; a bare number or 20/52 is years"
MOST_YEARS = 50.0


class BadValueError(ValueError):
    """A scalar that cannot be read; `message` says what is wrong and `advice` what would be right."""

    def __init__(self, message: str, advice: str = "") -> None:
        super().__init__(f"{message} - {advice}" if advice else message)
        self.message = message
        self.advice = advice


def parse_scalar(text: str) -> Scalar:
    """Read an unquoted scalar by the YAML 1.2 core rules, with underscores allowed between digits.

    Parameters
    ----------
    text : str
        The scalar as written.

    Returns
    -------
    None, bool, int, float or str
        ``null``, ``~`` and nothing are None; ``true`` and ``false`` are the only truth values; ``1e-4`` is a float,
        ``0123`` the integer 123, ``9:30`` and ``no`` are text.

    Raises
    ------
    BadValueError
        A whole number with more digits than can be read.
    """
    if text in ("", "~", "null"):
        return None
    if text in ("true", "false"):
        return text == "true"
    if _INT.fullmatch(text):
        if len(text) > 400:
            raise BadValueError(
                f"a number of {len(text)} digits cannot be read", "write it as 1e6 or with fewer digits"
            )
        return int(text)
    if _BASED.fullmatch(text):
        return int(text, 0)
    if _FLOAT.fullmatch(text):
        return float(text)
    if match := _INFINITE.fullmatch(text):
        return -math.inf if match[1] == "-" else math.inf
    return math.nan if _NAN.fullmatch(text) else text


def shown(value: object) -> str:
    """Name a value in a message: text in quotes, numbers as written, containers by kind."""
    match value:
        case None:
            return "an empty value"
        case bool():
            return "true" if value else "false"
        case str():
            return repr(value if len(value) <= 60 else value[:57] + "...")
        case float():
            return shortest(value)
        case dict():
            return "a mapping"
        case list() | tuple():
            return "a list"
    text = str(value)
    return text if len(text) <= 60 else text[:57] + "..."


def shortest(number: float) -> str:
    """Write a number so that reading it gives the same number, without a trailing ``.0``."""
    text = repr(float(number))
    return text.removesuffix(".0")


def parse_number(value: object) -> float:
    """Read a plain number.

    Raises
    ------
    BadValueError
        For text, percentages included, for truth values, and for numbers that are not finite.
    """
    if value is None:
        raise BadValueError("empty", "give a number or delete the line")
    if isinstance(value, str):
        if _HUNDREDTHS.fullmatch(value):
            raise BadValueError(f"{shown(value)} is not accepted here", "write a plain number, without % or bp")
        if isinstance(parse_scalar(value), int | float):
            raise BadValueError(f"{shown(value)} is text", "remove the quotes")
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise BadValueError(f"{shown(value)} is not a number", "write a plain number")
    try:
        number = float(value)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        raise BadValueError("not a finite number", "write a number below 1e308 in size")
    return number + 0.0  # no negative zero: it would be written as 0 and read back as another number


def parse_fraction(value: object) -> float:
    """Read a number, a percentage (``22%``) or basis points (``2bp``) as a fraction.

    Returns
    -------
    float
        The nearest double to the fraction written: ``22.1%`` is exactly the number ``0.221``.

    Raises
    ------
    BadValueError
        When the value is none of the three.
    """
    if isinstance(value, str) and (match := _HUNDREDTHS.fullmatch(value)):
        try:
            fraction = Decimal(match[1].replace("_", "")).scaleb(-2 if match[2] == "%" else -4)
        except ArithmeticError:
            raise BadValueError("not a finite number", "write a number below 1e308 in size") from None
        return parse_number(float(fraction))
    if isinstance(value, str) and not isinstance(parse_scalar(value), int | float):
        raise BadValueError(f"{shown(value)} is not a number", "write a fraction or a percentage, such as 0.22 or 22%")
    return parse_number(value)


def as_percent(fraction: float) -> str:
    """Write a fraction as a percentage that reads back to the same double."""
    scaled = Decimal(repr(float(fraction))).scaleb(2)
    return f"{scaled.normalize():f}%"


def parse_whole(value: object) -> int:
    """Read a whole number; ``1e5`` is one.

    Raises
    ------
    BadValueError
        When the value is not a number or has a fractional part.
    """
    number = parse_number(value)
    if not number.is_integer():
        raise BadValueError(
            f"{shown(value)} is not a whole number", f"write {math.floor(number)} or {math.ceil(number)}"
        )
    return int(value) if isinstance(value, int) else int(number)


@dataclass(frozen=True)
class Duration:
    """A length of time as written; how long it is in years depends on the day count of the market.

    Attributes
    ----------
    amount : float
        How many, above zero; a whole number of looks.
    unit : str
        ``look``, ``min``, ``h``, ``d`` (trading days under business-252), ``w`` or ``y`` (years).
    """

    amount: float
    unit: str

    def __post_init__(self) -> None:
        if self.unit not in ("look", "min", "h", "d", "w", "y"):
            raise BadValueError(f"unknown unit {self.unit!r}", _DURATION_ADVICE)
        if not (math.isfinite(self.amount) and self.amount > 0):
            raise BadValueError(f"{shortest(self.amount)} is not a length of time", "write an amount above 0")
        if self.unit == "look" and not float(self.amount).is_integer():
            raise BadValueError(
                f"{shortest(self.amount)} looks is not a whole number of looks", "write 1 look, 2 looks"
            )

    def __str__(self) -> str:
        """Write the duration as the experiment file has it: ``30min``, ``1 look``, ``4 looks``, ``0.5y``."""
        amount = shortest(self.amount)
        return f"{amount} look{'' if self.amount == 1 else 's'}" if self.unit == "look" else f"{amount}{self.unit}"


def parse_duration(value: object, *, looks: bool = False) -> Duration:
    """Read ``30min``, ``2h``, ``5d``, ``12w``, ``1y``, ``4 looks``; a bare number and ``20/52`` are years.

    Parameters
    ----------
    value : object
        A scalar of the experiment file, or a Duration.
    looks : bool
        Whether a number of looks is accepted.

    Raises
    ------
    BadValueError
        When the value is no duration, is not above zero, or counts looks where it must not.
    """
    duration = value if isinstance(value, Duration) else _read_duration(value)
    if duration.unit == "look" and not looks:
        raise BadValueError("a number of looks is not accepted here", "write a time, such as 2h, 5d or 0.25y")
    if duration.unit == "y" and duration.amount > MOST_YEARS:
        amount = shortest(duration.amount)
        raise BadValueError(f"{amount} means {amount} years", f"write {amount}d for days; at most {MOST_YEARS:g} years")
    return duration


def _read_duration(value: object) -> Duration:
    if value is None:
        raise BadValueError("empty", _DURATION_ADVICE)
    if isinstance(value, int | float) and not isinstance(value, bool):
        return Duration(parse_number(value), "y")
    if not isinstance(value, str):
        raise BadValueError(f"{shown(value)} is not a duration", _DURATION_ADVICE)
    if match := _RATIO.fullmatch(value):
        if float(match[2]) == 0:
            raise BadValueError(f"{shown(value)} divides by zero", "write a ratio in years, such as 20/52")
        return Duration(float(match[1]) / float(match[2]), "y")
    match = _DURATION.fullmatch(value)
    if match is None:
        raise BadValueError(f"{shown(value)} is not a duration", _DURATION_ADVICE)
    amount, unit = match.groups()
    if unit in ("look", "looks"):
        return Duration(float(amount), "look")
    if unit in ("min", "h", "d", "w", "y"):
        return Duration(float(amount), unit)
    if known := _UNIT_WORDS.get(unit.lower()):
        raise BadValueError(f"unknown unit {unit!r} in {shown(value)}", f"write {amount}{known}")
    raise BadValueError(f"unknown unit {unit!r} in {shown(value)}", _DURATION_ADVICE)


def parse_years(value: object) -> float:
    """Read a year fraction above zero: a number, a ratio such as ``1/52``, or ``0.5y``.

    Raises
    ------
    BadValueError
        When the value is in other units or is not above zero.
    """
    duration = parse_duration(value)
    if duration.unit != "y":
        raise BadValueError(f"{shown(value)} is not in years", "write a number or a ratio in years, such as 1/52")
    return duration.amount


def parse_date(value: object) -> dt.date:
    """Read an ISO date, ``2027-03-01``.

    Raises
    ------
    BadValueError
        When the value has another form or no such day exists.
    """
    if isinstance(value, dt.date) and not isinstance(value, dt.datetime):
        return value
    if not (isinstance(value, str) and _DATE.fullmatch(value)):
        raise BadValueError(f"{shown(value)} is not a date", "write year-month-day, such as 2027-03-01")
    try:
        return dt.date.fromisoformat(value)
    except ValueError:
        raise BadValueError(f"there is no day {value}", "write year-month-day, such as 2027-03-01") from None


def parse_term(value: object) -> Duration | dt.date:
    """Read a point in time after the inception: a date, a duration, or years.

    Raises
    ------
    BadValueError
        When the value is none of them.
    """
    if isinstance(value, dt.date) or (isinstance(value, str) and _DATE.fullmatch(value)):
        return parse_date(value)
    if value is not None and not isinstance(value, int | float | str | Duration):
        raise BadValueError(f"{shown(value)} is not a time", "write a duration, a date or years: 63d, 2027-06-01, 0.25")
    return parse_duration(value)


@dataclass(frozen=True)
class RelativeStrike:
    """A strike written as a percentage of the spot at inception.

    Attributes
    ----------
    fraction : float
        Strike / spot at inception, above zero.
    """

    fraction: float

    def __post_init__(self) -> None:
        if not (math.isfinite(self.fraction) and self.fraction > 0):
            raise BadValueError(f"{as_percent(self.fraction)} is not a strike", "write a percentage above 0%, as 105%")

    def __str__(self) -> str:
        """Write the strike as a percentage that reads back to the same double."""
        return as_percent(self.fraction)


def parse_strike(value: object) -> float | RelativeStrike:
    """Read a strike: a price above zero, or ``105%`` of the spot at inception.

    Raises
    ------
    BadValueError
        When the value is neither, or not above zero.
    """
    if isinstance(value, RelativeStrike):
        return value
    if isinstance(value, str) and (match := _HUNDREDTHS.fullmatch(value)) and match[2] == "%":
        return RelativeStrike(parse_fraction(value))
    if isinstance(value, str) and not isinstance(parse_scalar(value), int | float):
        raise BadValueError(
            f"{shown(value)} is not a strike", "write a price, or a percentage of the spot: 105 or 105%"
        )
    price = parse_number(value)
    if price <= 0:
        raise BadValueError(
            f"{shown(value)} is not a strike", "write a price above 0, or a percentage of the spot: 105%"
        )
    return price
