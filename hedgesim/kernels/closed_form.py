"""Compiled twins of `hedgesim.pricing`, one option at a time: the same formulas, accurate in the far tails."""

import math

from hedgesim.kernels.jit import device

_INV_SQRT_2PI = 0.3989422804014327
_SQRT_HALF = 0.7071067811865476


@device
def normal_cdf(x: float) -> float:
    """Normal distribution function, through erfc: relatively accurate in the lower tail too."""
    return 0.5 * math.erfc(-x * _SQRT_HALF)


@device
def normal_pdf(x: float) -> float:
    """Normal density."""
    return _INV_SQRT_2PI * math.exp(-0.5 * x * x)


@device
def payoff(spot: float, strike: float, is_call: bool) -> float:
    """What the holder of one option receives at expiry, per unit of the underlying."""
    return max(spot - strike, 0.0) if is_call else max(strike - spot, 0.0)


@device
def option(
    spot: float,
    strike: float,
    years: float,
    variance_years: float,
    vol: float,
    rate: float,
    growth: float,
    is_call: bool,
) -> tuple[float, float, float]:
    """Value, delta and gamma of a European option before its expiry; arguments as for `hedgesim.pricing.greeks`.

    `variance_years` and `vol` are positive: at expiry `payoff` applies.
    """
    root = vol * math.sqrt(variance_years)
    forward = spot * math.exp(growth * years)
    discount = math.exp(-rate * years)
    carry = math.exp((growth - rate) * years)
    sign = 1.0 if is_call else -1.0
    d1 = math.log(forward / strike) / root + 0.5 * root
    upper = normal_cdf(sign * d1)
    value = sign * discount * (forward * upper - strike * normal_cdf(sign * (d1 - root)))
    return value, sign * carry * upper, carry * normal_pdf(d1) / (spot * root)
