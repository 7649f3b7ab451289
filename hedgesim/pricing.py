"""Closed forms for European options on a lognormal forward.

One formula serves shares with a yield, currencies and futures: Black (1976), J. Financial Economics 3, written on the
forward F = S exp(b (T - t)), where b is the rate less the yield (Merton 1973, Bell J. Economics 4, for a dividend
yield; Garman and Kohlhagen 1983, J. International Money and Finance 2, for currencies; b = 0 for a future).

Two clocks enter: calendar years discount and carry, variance years scale the volatility. All functions broadcast.
The compiled twins of these functions are in `hedgesim.kernels.closed_form`.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Greeks:
    """Value and sensitivities per unit of the underlying, for the holder of the option.

    Attributes
    ----------
    value : present value, in the market's currency
    delta : dV/dS, in units of the underlying
    gamma : d2V/dS2, per currency unit of price
    vega : dV/dvol, per unit of volatility (divide by 100 for a vol point)
    """

    value: Floats
    delta: Floats
    gamma: Floats
    vega: Floats


def greeks(
    spot: ArrayLike,
    strike: ArrayLike,
    *,
    years: ArrayLike,
    variance_years: ArrayLike,
    vol: ArrayLike,
    rate: ArrayLike,
    growth: ArrayLike,
    is_call: ArrayLike,
) -> Greeks:
    """Value, delta, gamma and vega of European calls and puts.

    Parameters
    ----------
    spot, strike : prices, positive
    years : calendar years to expiry (carry and discount)
    variance_years : variance years to expiry; zero gives the payoff, with delta the mean of its one-sided slopes
    vol : annual volatility, 0.2 for 20 %
    rate : continuously compounded rate
    growth : b, continuously compounded growth of the forward: rate less yield; 0 for a future
    is_call : true for a call, false for a put

    Returns
    -------
    Greeks, each of the broadcast shape
    """
    from scipy.special import ndtr

    s, k, tau, w, sd, r, b = (
        np.asarray(x, dtype=np.float64) for x in (spot, strike, years, variance_years, vol, rate, growth)
    )
    sign = np.where(np.asarray(is_call, dtype=bool), 1.0, -1.0)
    root = sd * np.sqrt(w)
    forward = s * np.exp(b * tau)
    discount = np.exp(-r * tau)
    with np.errstate(divide="ignore", invalid="ignore"):
        d1 = np.log(forward / k) / root + 0.5 * root
    settled = root <= 0
    edge = np.where(forward > k, np.inf, np.where(forward < k, -np.inf, 0.0))
    d1 = np.where(settled, edge, d1)
    d2 = d1 - root
    value = sign * discount * (forward * ndtr(sign * d1) - k * ndtr(sign * d2))
    carry = np.exp((b - r) * tau)
    delta = sign * carry * ndtr(sign * d1)
    density = np.exp(-0.5 * d1 * d1) / np.sqrt(2 * np.pi)
    with np.errstate(divide="ignore", invalid="ignore"):
        gamma = np.where(settled, 0.0, carry * density / (s * root))
    vega = s * carry * density * np.sqrt(w)
    shape = np.broadcast_shapes(value.shape, gamma.shape, vega.shape)
    return Greeks(*(np.broadcast_to(x, shape).astype(np.float64) for x in (value, delta, gamma, vega)))


def value(spot: ArrayLike, strike: ArrayLike, **terms: Any) -> Floats:
    """Present value of European calls and puts; arguments as for `greeks`."""
    return greeks(spot, strike, **terms).value
