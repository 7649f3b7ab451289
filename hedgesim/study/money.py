"""Amounts of money as a desk reads them: 1.24m, 85.3k, 12.40."""

import math

_SCALES = ((1e9, "bn"), (1e6, "m"), (1e3, "k"))
_UNKNOWN = "n/a"
_ROUNDING = 1e-9


def money(value: float, *, currency: str = "") -> str:
    """`value` to three figures with its scale letter, a minus sign for what is paid, the currency in front.

    Amounts from 1 to 1,000 carry two decimals; smaller ones three figures.
    """
    if not math.isfinite(value):
        return _UNKNOWN
    scale, letter = _scale(value)
    size = abs(value) / scale
    if letter:
        decimals = max(0, 3 - len(str(int(float(f"{size:.3g}")))))
    elif size >= 1.0 or value == 0.0:
        decimals = 2
    else:
        decimals = min(12, 2 - math.floor(math.log10(size)))
    return _prefixed(currency, f"{_signed(value / scale, decimals)}{letter}")


def money_with_error(value: float, error: float, *, currency: str = "") -> str:
    """`value` with its standard error in the same scale, as in `85.3k (±0.3k)`.

    The value carries as many decimals as its error has up to the first figure; without an error see `money`. An error
    below 1e-9 of the value is the rounding of equal outcomes, and counts as none.
    """
    if not (math.isfinite(value) and math.isfinite(error)) or error <= _ROUNDING * abs(value):
        return money(value, currency=currency)
    scale, letter = _scale(value)
    leading = float(f"{error / scale:.0e}")
    decimals = min(12, max(0, -math.floor(math.log10(leading))))
    number = f"{_signed(value / scale, decimals)}{letter} (±{error / scale:.{decimals}f}{letter})"
    return _prefixed(currency, number)


def percent(fraction: float) -> str:
    """`fraction` in whole percent, one decimal below 10 %."""
    if not math.isfinite(fraction):
        return _UNKNOWN
    decimals = 0 if round(abs(fraction) * 100, 1) >= 10 else 1
    return f"{_signed(100 * fraction, decimals)} %"


def _scale(value: float) -> tuple[float, str]:
    # Three figures decide, so that 999.96k is 1.00m and not 1000k.
    rounded = abs(float(f"{value:.3g}"))
    return next(((size, letter) for size, letter in _SCALES if rounded >= size), (1.0, ""))


def _signed(number: float, decimals: int) -> str:
    text = f"{number:.{decimals}f}"
    return text.lstrip("-") if float(text) == 0.0 else text


def _prefixed(currency: str, number: str) -> str:
    return f"{currency} {number}" if currency else number
