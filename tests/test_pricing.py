"""Closed forms against handbook prices, mpmath and finite differences."""

import mpmath
import numpy as np
import pytest

from hedgesim.pricing import greeks, value

# Sources: Haug, The Complete Guide to Option Pricing Formulas, 2nd ed. (from memory); Hull, Options, Futures, and Other
# Derivatives (from memory). Terms: spot, strike, years, rate, growth of the forward, vol, call?, price, digits given.
PRICES = [
    ("Haug call", 60, 65, 0.25, 0.08, 0.08, 0.30, True, 2.1334, 4),
    ("Haug Merton put with yield", 100, 95, 0.5, 0.10, 0.05, 0.20, False, 2.4648, 4),
    ("Haug Black-76 call", 19, 19, 0.75, 0.10, 0.0, 0.28, True, 1.7011, 4),
    ("Haug Garman-Kohlhagen call", 1.56, 1.60, 0.5, 0.06, 0.06 - 0.08, 0.12, True, 0.0291, 4),
    ("Hull call", 42, 40, 0.5, 0.10, 0.10, 0.20, True, 4.76, 2),
    ("Hull put", 42, 40, 0.5, 0.10, 0.10, 0.20, False, 0.81, 2),
    ("Hull index call", 930, 900, 2 / 12, 0.08, 0.08 - 0.03, 0.20, True, 51.83, 2),
    ("Hull Black put", 20, 20, 4 / 12, 0.09, 0.0, 0.25, False, 1.12, 2),
    ("Hull ch. 19 call", 49, 50, 20 / 52, 0.05, 0.05, 0.20, True, 2.4005273233, 10),
]


@pytest.mark.parametrize(("name", "s", "k", "t", "r", "b", "vol", "call", "price", "digits"), PRICES)
def test_handbook_prices(name, s, k, t, r, b, vol, call, price, digits):
    ours = value(s, k, years=t, variance_years=t, vol=vol, rate=r, growth=b, is_call=call)
    assert round(float(ours), digits) == price


def test_handbook_greeks():
    # Haug, 2nd ed. (from memory): futures option deltas, gamma. Hull ch. 19, 11th ed.: delta .522, gamma .066, vega 12.1.
    future = {"years": 0.5, "variance_years": 0.5, "vol": 0.36, "rate": 0.10, "growth": 0.0}
    assert float(greeks(105, 100, is_call=True, **future).delta) == pytest.approx(0.5946, abs=5e-5)
    assert float(greeks(105, 100, is_call=False, **future).delta) == pytest.approx(-0.3566, abs=5e-5)
    gamma = greeks(55, 60, years=0.75, variance_years=0.75, vol=0.30, rate=0.10, growth=0.10, is_call=True).gamma
    assert float(gamma) == pytest.approx(0.0278, abs=5e-5)
    hull = greeks(49, 50, years=20 / 52, variance_years=20 / 52, vol=0.2, rate=0.05, growth=0.05, is_call=True)
    assert float(hull.delta) == pytest.approx(0.522, abs=5e-4)
    assert float(hull.gamma) == pytest.approx(0.066, abs=5e-4)
    assert float(hull.vega) == pytest.approx(12.1, abs=5e-2)


def test_prices_match_mpmath_over_a_grid():
    for s, k, t, vol, r, b in [
        (100, 80, 2.0, 0.5, 0.03, -0.02),
        (100, 130, 0.01, 0.1, 0.0, 0.0),
        (1e-3, 2e-3, 5, 1.2, 0.1, 0.1),
    ]:
        with mpmath.workdps(40):
            forward, root = mpmath.mpf(s) * mpmath.exp(mpmath.mpf(b) * t), mpmath.mpf(vol) * mpmath.sqrt(t)
            d1 = mpmath.log(forward / k) / root + root / 2
            call = mpmath.exp(-mpmath.mpf(r) * t) * (forward * mpmath.ncdf(d1) - k * mpmath.ncdf(d1 - root))
            put = call - mpmath.exp(-mpmath.mpf(r) * t) * (forward - k)
        terms = {"years": t, "variance_years": t, "vol": vol, "rate": r, "growth": b}
        assert float(value(s, k, is_call=True, **terms)) == pytest.approx(float(call), rel=1e-12, abs=1e-15 * s)
        assert float(value(s, k, is_call=False, **terms)) == pytest.approx(float(put), rel=1e-12, abs=1e-15 * s)


def test_greeks_are_the_derivatives_of_the_value():
    terms = {"years": 0.7, "variance_years": 0.6, "rate": 0.04, "growth": 0.01, "is_call": np.array([True, False])}
    step = 1e-4
    centre = greeks(100, 105, vol=0.25, **terms)
    up, down = (value(100 + e, 105, vol=0.25, **terms) for e in (step, -step))
    # Central differences: truncation of order step^2 times the third derivative, rounding of order 1e-14 / step^2.
    assert centre.delta == pytest.approx((up - down) / (2 * step), abs=1e-9)
    assert centre.gamma == pytest.approx((up - 2 * centre.value + down) / step**2, abs=1e-5)
    high, low = (value(100, 105, vol=0.25 + e, **terms) for e in (step, -step))
    assert centre.vega == pytest.approx((high - low) / (2 * step), rel=1e-6)


def test_a_settled_option_is_its_payoff_with_one_sided_delta():
    terms = {"years": 0.0, "variance_years": 0.0, "vol": 0.2, "rate": 0.05, "growth": 0.05}
    g = greeks([90.0, 100.0, 110.0], 100.0, is_call=True, **terms)
    assert g.value == pytest.approx([0, 0, 10])
    assert g.delta == pytest.approx([0, 0.5, 1])
    assert g.gamma == pytest.approx([0, 0, 0])
