"""Tables of a book against the closed forms they stand for."""

import numpy as np
import pytest
from simulate_cases import random_experiment

from hedgesim.kernels.jit import kernel
from hedgesim.kernels.tables import lookup
from hedgesim.pricing import greeks
from hedgesim.tables import TOLERANCE, payoff_knots, slope_table, strike_table, terms

_lookup = lookup


@kernel
def _read(table, underlying, look, y, value, slope):
    _lookup(table, underlying, look, y, np.empty(len(y), np.int32), np.empty(len(y)), value, slope)


def read(table, underlying, look, y):
    value, slope = np.empty_like(y), np.empty_like(y)
    _read(table, underlying, look, y, value, slope)
    return value, slope


@pytest.mark.parametrize("seed", range(8))
def test_tables_keep_their_certified_error_wherever_paths_go(seed):
    case = random_experiment(seed)
    market, book, grid = case["market"], case["book"], case["grid"]
    reach = case["source"].reach(market, grid)
    looks = np.arange(grid.looks + 1)
    slope = slope_table(book, market, grid, reach, vol=book.hedge_vol, looks=looks)
    strike = strike_table(book, market, grid, reach, vol=book.hedge_vol, looks=looks)
    constants = terms(book, market)
    random = np.random.default_rng(seed)
    for u in range(len(market.names)):
        for look in range(grid.looks):
            live = (book.underlying == u) & (book.expiry_look > look)
            if not live.any():
                continue
            y = reach.centre[u, look] + reach.half[u, look] * random.uniform(-1, 1, 512)
            x = np.exp(y)
            t, s = grid.t[look], grid.s[look]
            exact = greeks(
                x[:, None] * np.exp(market.growth[u] * t),
                book.strike[live],
                years=book.expiry_t[live] - t,
                variance_years=book.expiry_s[live] - s,
                vol=book.hedge_vol[live],
                rate=market.rate,
                growth=market.growth[u],
                is_call=book.is_call[live],
            )
            carry = np.exp((market.growth[u] - market.rate) * t)
            p, dp = read(slope, u, look, y)
            gross = np.abs(constants.slope[live]).sum()
            exact_p = carry * exact.delta @ book.units[live]
            assert np.abs(p - exact_p).max() <= TOLERANCE * gross
            price = x * np.exp(market.growth[u] * t)
            gamma = exact.gamma * (price**2)[:, None] * np.exp(-market.rate * t)
            root = book.hedge_vol[live] * np.sqrt(book.expiry_s[live] - s)
            near = np.linspace(constants.log_strike[live].min(), constants.log_strike[live].max(), 200)[:, None]
            density = np.exp(-0.5 * ((near - constants.log_strike[live]) / root) ** 2) / np.sqrt(2 * np.pi)
            peak = (density @ (np.abs(constants.slope[live]) / root)).max()
            assert np.abs(x * dp - gamma @ book.units[live]).max() <= 1.01 * TOLERANCE * peak * x.max()
            q, _ = read(strike, u, look, y)
            worth = np.exp(-market.rate * t) * exact.value @ book.units[live]
            scale = gross * x.max() + np.abs(constants.strike_leg[live]).sum()
            assert np.abs(x * p - q - worth).max() <= 2 * TOLERANCE * scale


def test_the_sixth_derivative_bound_behind_the_certificate_holds():
    # max |d^6 N / dx^6| = max |He_5(x)| phi(x).
    x = np.linspace(-8, 8, 400_001)
    he5 = x**5 - 10 * x**3 + 15 * x
    assert np.abs(he5 * np.exp(-x * x / 2) / np.sqrt(2 * np.pi)).max() < 2.308


@pytest.mark.parametrize("seed", range(5))
def test_payoff_lines_are_the_payoffs_and_deliveries_of_the_positions(seed):
    case = random_experiment(seed)
    market, book, grid = case["market"], case["book"], case["grid"]
    knots = payoff_knots(book, market, grid.looks)
    random = np.random.default_rng(seed)
    for u in range(len(market.names)):
        for look in np.unique(book.expiry_look[book.underlying == u]):
            j = np.flatnonzero((book.underlying == u) & (book.expiry_look == look))
            first, size = knots.first[u, look], knots.size[u, look]
            assert size == len(j)
            t = book.expiry_t[j][0]
            price = market.spot[u] * random.uniform(0.8, 1.2, 200)
            x = price * np.exp(-market.growth[u] * t)
            line = knots.line[first + np.searchsorted(knots.knot[first : first + size], x)]
            sign = np.where(book.is_call[j], 1.0, -1.0)
            inside = sign * (price[:, None] - book.strike[j]) > 0
            paid = (
                np.where(inside, sign * (price[:, None] - book.strike[j]), 0.0)
                @ book.units[j]
                * np.exp(-market.rate * t)
            )
            assert line[:, 0] + line[:, 1] * x == pytest.approx(paid, abs=1e-9 * np.abs(book.units).sum() * price.max())
            handed = (inside * sign * book.physical[j]) @ book.units[j]
            assert line[:, 2] == pytest.approx(handed, abs=1e-9)


def test_a_lookup_of_a_length_that_does_not_fill_the_lanes_is_refused():
    case = random_experiment(0)
    market, book, grid = case["market"], case["book"], case["grid"]
    table = slope_table(book, market, grid, case["source"].reach(market, grid), vol=book.hedge_vol, looks=np.arange(2))
    with pytest.raises(ValueError, match="multiple of LANES"):
        read(table, 0, 0, np.full(13, np.log(market.spot[0])))
