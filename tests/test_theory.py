"""Laws of discrete hedging: published values, identities between them, independent quadrature, and limits of simulated ledgers."""

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from scipy import integrate
from scipy.special import ndtr
from simulate_cases import cut_short, one_option, random_experiment

import hedgesim.study.humps as humps_module
from hedgesim.book import Expiry, Position, expiry_looks, settle_terms
from hedgesim.costs import CostTerms
from hedgesim.engine.ledger import DISCRETISATION, FLOOR
from hedgesim.engine.simulate import simulate
from hedgesim.market import Market, frozen, horizon_grid, session_grid
from hedgesim.paths.gbm import Gbm
from hedgesim.pricing import greeks
from hedgesim.schedules import Schedule, compile_schedules
from hedgesim.study.theory import (
    boyle_emanuel,
    continuous_hedging,
    granularity,
    kamal_derman,
    laws,
    leading_cost,
    misses,
    two_term,
)

# Hull, Options, Futures, and Other Derivatives, 11th ed., ch. 19: the option of the worked example.
HULL = {"spot": 49.0, "strike": 50.0, "years": 20 / 52, "rate": 0.05, "vol": 0.20}
ONE = (Schedule("every look", "looks", 1),)


def given(case, *, costs=False):
    names = ("market", "book", "grid", "source") + (("costs",) if costs else ())
    return {name: case[name] for name in names}


def hull(**changes):
    return one_option(**(HULL | {"looks": 20, "schedules": ONE} | changes))


def two_names(*, looks, correlation, rules=ONE, hedge_vol=(0.22, 0.27), overlap=False):
    """Two options on each of a share with a yield and a future, two expiries, hedge vols off; or both names alike."""
    market = Market(("A", "B"), 0.03, frozen([100.0, 50.0]), frozen([0.01, 0.03]), frozen([False, True], bool))
    vol, drift = frozen([0.25, 0.24]), frozen([0.10, -0.05])
    if overlap:
        market = replace(
            market, spot=frozen([100.0, 100.0]), yield_rate=frozen([0.01, 0.01]), is_future=frozen([0, 0], bool)
        )
        vol, drift = frozen([0.25, 0.25]), frozen([0.10, 0.10])
    grid = horizon_grid(years=0.25, looks=looks, day_count="business-252")
    early, scale = looks // 2, market.spot[1] / 100
    terms = [
        (0, True, 101.0, -100.0, 0.25),
        (0, False, 97.0, 60.0, 0.125),
        (1, True, 102.0 * scale, -150.0, 0.25),
        (1, False, 98.0 * scale, -120.0, 0.125),
    ]
    look = np.array([looks, early, looks, early])
    book = settle_terms(
        [Position(u, call, strike, False, units, False, Expiry(years=t)) for u, call, strike, units, t in terms],
        spot=market.spot,
        mark_vol=np.array([0.20, 0.30]),
        hedge_vol=np.array(hedge_vol),
        expiry_look=look,
        expiry_t=grid.t[look],
        expiry_s=grid.s[look],
        initial_units=np.array([5.0, -10.0]),
    )
    return {
        "market": market,
        "book": book,
        "grid": grid,
        "compiled": compile_schedules(rules, grid, expiry_looks(book)),
        "source": Gbm(vol, drift, np.array([[1.0, correlation], [correlation, 1.0]]), 3),
        "costs": CostTerms(frozen([1e-3, 5e-4]), frozen([0.01, 0.02]), frozen([0.5, 0.2])),
    }


def as_one_name(case):
    """The book of two names that are alike, all on the first."""
    return case | {
        "market": Market(
            ("A",),
            case["market"].rate,
            *(x[:1] for x in (case["market"].spot, case["market"].yield_rate, case["market"].is_future)),
        ),
        "book": replace(
            case["book"],
            underlying=np.zeros(case["book"].size, dtype=np.int64),
            initial_units=case["book"].initial_units[:1],
        ),
        "source": Gbm(case["source"].realised_vol[:1], case["source"].drift[:1], np.eye(1), 3),
    }


def with_units(case, units):
    return case | {"book": replace(case["book"], units=frozen(units))}


def gamma_nodes(case, s):
    """Log prices, X^2 U'' of a book on one name there from the closed-form gammas, and weights of the expectation; t = s."""
    market, book, source = case["market"], case["book"], case["source"]
    b, sd = market.growth[0], source.realised_vol[0] * np.sqrt(s)
    mean = np.log(market.spot[0]) + (source.drift[0] - b) * s - sd * sd / 2
    live = book.expiry_s > s
    # Panels of Gauss-Legendre nodes, narrow where a gamma is.
    width = book.hedge_vol[live] * np.sqrt(book.expiry_s[live] - s)
    near = np.log(book.strike[live]) - b * book.expiry_t[live] + np.multiply.outer(np.linspace(-9, 9, 37), width)
    edges = np.unique(np.concatenate([mean + sd * np.linspace(-9, 9, 37), near.ravel()]))
    edges = edges[np.abs(edges - mean) <= 9 * sd]
    x, weight = np.polynomial.legendre.leggauss(8)
    half = np.diff(edges) / 2
    y = (edges[:-1, None] + half[:, None] * (x + 1)).ravel()
    price = np.exp(y + b * s)[:, None]
    gamma = greeks(
        price, book.strike[live], years=book.expiry_t[live] - s, variance_years=book.expiry_s[live] - s,
        vol=book.hedge_vol[live], rate=market.rate, growth=b, is_call=book.is_call[live],
    ).gamma  # fmt: skip
    density = np.exp(-0.5 * ((y - mean) / sd) ** 2) / (np.sqrt(2 * np.pi) * sd)
    return y, np.exp(-market.rate * s) * (gamma * price**2) @ book.units[live], density * np.outer(half, weight).ravel()


def over_time(case, function, **options):
    """Integral of function(s) over the life, piece by piece between expiries, with the inverse root at each end taken away."""
    edges = np.unique(np.concatenate([[0.0], case["book"].expiry_s]))
    total = 0.0
    for start, end in pairwise(edges):
        total += integrate.quad(
            lambda q, a=start, e=end: 2 * q * (e - a) * function(e - (e - a) * q * q), 0, 1, limit=400, **options
        )[0]
    return total


def test_granularity_of_the_worked_example():
    # Bertsimas, Kogan and Lo (2000), J. Financial Economics 55; value of their integral for Hull's option at mu = r.
    assert np.sqrt(granularity(**given(hull()))) == pytest.approx(2.1475437619, rel=1e-8)


@pytest.mark.parametrize(("spot", "strike", "drift"), [(49.0, 50.0, 0.13), (100.0, 130.0, -0.4), (100.0, 60.0, 0.3)])
def test_granularity_of_one_option_is_the_closed_integral(spot, strike, drift):
    # For a call under GBM (re-derived): g^2 = (T sigma^2 k*^2 / 4 pi) int_0^1 (1-u^2)^(-1/2)
    # exp{-[ln(S0/k*) - sigma^2 T/2 + (mu-r) T u]^2 / (sigma^2 T (1+u))} du.
    vol, years, rate = 0.2, 20 / 52, 0.05
    discounted = strike * np.exp(-rate * years)

    def integrand(angle):
        u = np.sin(angle)
        top = (np.log(spot / discounted) - vol**2 * years / 2 + (drift - rate) * years * u) ** 2
        return np.exp(-top / (vol**2 * years * (1 + u)))

    g2 = years * vol**2 * discounted**2 / (4 * np.pi) * integrate.quad(integrand, 0, np.pi / 2, epsrel=1e-12)[0]
    case = hull(spot=spot, strike=strike, drift=drift, units=7.0)
    assert granularity(**given(case)) == pytest.approx(49 * g2, rel=1e-6)


@pytest.mark.parametrize("strikes", [(101.0, 97.0, 102.0, 98.0), (101.0, 97.0, 101.03, 96.99)])
def test_granularity_of_a_book_against_quadrature_over_prices(strikes):
    case = as_one_name(two_names(looks=64, correlation=0.5, overlap=True))
    case["book"] = replace(case["book"], strike=frozen(strikes), units=frozen([-100.0, 60.0, 90.0, -70.0]))

    def square(s):
        _, g, weight = gamma_nodes(case, s)
        return (g * g * weight).sum()

    expected = 0.5 * 0.25 * 0.25**4 * over_time(case, square, epsrel=1e-7)
    assert granularity(**given(case)) == pytest.approx(expected, rel=1e-6)


def test_perfectly_correlated_names_are_one():
    apart = two_names(looks=64, correlation=1.0, overlap=True)
    together = as_one_name(apart)
    assert granularity(**given(apart)) == pytest.approx(granularity(**given(together)), rel=1e-10)
    assert continuous_hedging(**given(apart)).variance == pytest.approx(
        continuous_hedging(**given(together)).variance, rel=1e-8
    )
    first, second = (boyle_emanuel(**given(x), trades=50) for x in (apart, together))
    assert (first.mean, first.sd, first.skewness) == pytest.approx((second.mean, second.sd, second.skewness), rel=1e-10)


def test_opposite_positions_leave_nothing():
    case = two_names(looks=64, correlation=0.5)
    book = case["book"]
    both = [
        replace(book, units=frozen(sign * book.units), is_call=frozen(side, bool))
        for sign, side in ((1, book.is_call), (-1, ~book.is_call))
    ]
    fields = {
        name: frozen(np.concatenate([getattr(b, name) for b in both]), getattr(book, name).dtype)
        for name in book.__dataclass_fields__
        if name != "initial_units"
    }
    case["book"] = replace(book, **fields)
    assert granularity(**given(case)) == 0.0
    assert continuous_hedging(**given(case)).variance == 0.0
    cost = leading_cost(**given(case, costs=True))
    # Puts and calls of one strike are forwards: no rehedging, but a hedge at either end.
    assert cost.rehedging(100) == 0.0
    assert cost.ends_spread > 0.0


def test_overnight_variance_leaves_what_depends_on_variance_time_alone():
    case = two_names(looks=63 * 4, correlation=0.6)
    case["source"] = replace(case["source"], drift=case["market"].growth)
    days = np.array([63, 31, 63, 31])  # expiries at closes, where both clocks stand alike
    case["book"] = replace(case["book"], expiry_t=days / 252, expiry_s=days / 252)
    results = []
    for overnight in (0.0, 0.3):
        grid = session_grid(days=63, looks_per_day=4, day_count="business-252", session_hours=8.0, overnight=overnight)
        look = np.array([int(np.searchsorted(grid.clock, d - 1e-9)) for d in days])
        changed = case | {"grid": grid, "book": replace(case["book"], expiry_look=look)}
        results.append([granularity(**given(changed)), continuous_hedging(**given(changed)).variance])
    assert results[1] == pytest.approx(results[0], rel=1e-9)


def richardson(ledger, cells, coarse, fine):
    """a of N Var = a + b / sqrt(N) from schedules of N = 64 (`coarse`) and 256, and its standard error."""

    def statistic(moments):
        return np.array(2 * 256 * moments.cov[fine][cells].sum() - 64 * moments.cov[coarse][cells].sum())

    return float(statistic(ledger.moments)), float(ledger.replicates.standard_error(statistic))


def test_granularity_of_correlated_names_is_the_limit_of_simulated_ledgers():
    rules = (Schedule("256", "looks", 1), Schedule("64", "looks", 4))
    case = two_names(looks=256, correlation=0.8, rules=rules)
    ledger = simulate(**case, count=100_000)
    whole = granularity(**given(case))
    own = [
        granularity(**given(with_units(case, np.where(case["book"].underlying == u, case["book"].units, 0.0))))
        for u in (0, 1)
    ]
    at = [ledger.columns(DISCRETISATION, u) for u in (0, 1)]
    for cells, expected in (
        (np.ix_(at[0], at[0]), own[0]),
        (np.ix_(at[1], at[1]), own[1]),
        (np.ix_(at[0], at[1]), (whole - sum(own)) / 2),
    ):
        found, error = richardson(ledger, cells, coarse=1, fine=0)
        # Beyond two terms the law misses by the order of 1/N, of which 2/256 - 1/64 cancels to the next order.
        assert abs(found / expected - 1) < 4 * error / expected + 1 / 64


def test_square_root_law_is_the_granularity_at_the_forward():
    # Kamal and Derman (1999), Risk 12(1): exact in the limit for mu = r and d2 = 0.
    vol, years = 0.2, 0.5
    case = hull(spot=50.0 * np.exp(vol**2 * years / 2), years=years, rate=0.0, vol=vol)
    root, reason = kamal_derman(**given(case))
    assert reason == ""
    assert root**2 == pytest.approx(granularity(**given(case)), rel=1e-7)
    vega = 50.0 * np.sqrt(years / (2 * np.pi))
    assert root == pytest.approx(np.sqrt(np.pi / 4) * vega * vol, rel=1e-12)


def test_two_terms_leave_a_remainder_of_order_one_over_trades():
    # Exact standard deviation per option, discounted, drift = rate, no costs: sum of variances of orthogonal martingale
    # increments, evaluated for Hull's option (derived and evaluated for this check; no published table gives these digits).
    exact = {
        20: 0.4610663186,
        21: 0.4503821344,
        40: 0.3298430559,
        80: 0.2351955216,
        84: 0.2296399531,
        252: 0.1337079424,
    }
    (first, second), _ = two_term(**given(hull()))
    n = np.array(list(exact), dtype=float)
    remainder = n * (n * np.array(list(exact.values())) ** 2 - first - second / np.sqrt(n))
    assert np.abs(remainder).max() < first
    one_term = n * (n * np.array(list(exact.values())) ** 2 - first)
    assert np.abs(one_term).min() > 2 * np.abs(remainder).max()
    # n^1/2 of the first miss tends to the second term, from 20 to 252 trades ever closer.
    assert np.all(np.diff(np.abs(one_term / np.sqrt(n) - second)) < 0)


def test_one_interval_is_chi_squared():
    # Boyle and Emanuel (1980), J. Financial Economics 8: variance 1/2 (Gamma S^2 sigma^2 h)^2, skewness sqrt(8), excess
    # kurtosis 12 (from memory; verified). Gamma of Hull's option .066 per share.
    told = boyle_emanuel(**given(hull()), trades=20)
    assert told.sd == pytest.approx(0.066 * 49**2 * 0.2**2 * (1 / 52) / np.sqrt(2), rel=0.01)
    assert (told.mean, told.skewness, told.excess_kurtosis) == pytest.approx((0.0, -np.sqrt(8), 12.0), rel=1e-12)


def test_one_interval_of_correlated_names_has_the_moments_of_the_quadratic_form():
    correlation, trades = -0.7, 40
    case = two_names(looks=64, correlation=correlation)
    told = boyle_emanuel(**given(case), trades=trades)
    book, market, vol = case["book"], case["market"], case["source"].realised_vol
    u = book.underlying
    gamma = (
        book.units
        * greeks(
            market.spot[u],
            book.strike,
            years=book.expiry_t,
            variance_years=book.expiry_s,
            vol=book.hedge_vol,
            rate=market.rate,
            growth=market.growth[u],
            is_call=book.is_call,
        ).gamma
    )
    half = 0.5 * gamma * market.spot[u] ** 2 * 0.25 / trades
    # Gauss-Hermite with 12 nodes is exact for polynomials of the eighth degree in each normal.
    x, w = np.polynomial.hermite_e.hermegauss(12)
    a, b = np.meshgrid(x, x, indexing="ij")
    weight = np.multiply.outer(w, w) / (2 * np.pi)
    normals = (a, correlation * a + np.sqrt(1 - correlation**2) * b)
    pnl = sum(half[j] * (vol[u[j]] ** 2 * normals[u[j]] ** 2 - book.hedge_vol[j] ** 2) for j in range(book.size))
    mean = (weight * pnl).sum()
    second, third, fourth = ((weight * (pnl - mean) ** k).sum() for k in (2, 3, 4))
    expected = (mean, np.sqrt(second), third / second**1.5, fourth / second**2 - 3)
    assert (told.mean, told.sd, told.skewness, told.excess_kurtosis) == pytest.approx(expected, rel=1e-9)


def test_rehedging_one_option_costs_vega_over_the_root_of_the_life():
    # lambda vega sqrt(2 N / (pi T)) for drift = rate (same order as Leland 1985, J. Finance 40; derived).
    case = hull(costs=CostTerms(frozen([1e-3]), frozen([0.0]), frozen([0.0])), units=-1000.0)
    vega = greeks(49.0, 50.0, years=20 / 52, variance_years=20 / 52, vol=0.2, rate=0.05, growth=0.05, is_call=True).vega
    cost = leading_cost(**given(case, costs=True))
    assert cost.rehedging(80) == pytest.approx(1e-3 * 1000 * vega * np.sqrt(2 * 80 / (np.pi * 20 / 52)), rel=1e-8)
    assert (cost.commission, cost.tickets, cost.ends_commission, cost.ends_tickets) == (0.0, 0.0, 0.0, 0.0)


@pytest.mark.parametrize("physical", [False, True])
def test_the_ends_of_one_option_cost_the_first_and_the_last_hedge(physical):
    rate, years, vol, drift = 0.05, 20 / 52, 0.2, 0.13
    case = hull(costs=CostTerms(frozen([1e-3]), frozen([0.02]), frozen([0.5])), drift=drift)
    case["book"] = replace(case["book"], physical=frozen([physical], bool), initial_units=frozen([0.1]))
    cost = leading_cost(**given(case, costs=True))
    delta = ndtr((np.log(49 / 50) + (rate + vol**2 / 2) * years) / (vol * np.sqrt(years)))
    d1 = (np.log(49 / 50) + (drift + vol**2 / 2) * years) / (vol * np.sqrt(years))
    # The hedge of a short call is +delta, 0.1 of it held already; what pays in cash is sold, E[S 1(S > K)] discounted.
    sold = 0.0 if physical else 49 * np.exp((drift - rate) * years) * ndtr(d1)
    units_sold = 0.0 if physical else np.exp(-rate * years) * ndtr(d1 - vol * np.sqrt(years))
    assert cost.ends_spread == pytest.approx(1e-3 * ((delta - 0.1) * 49 + sold), rel=1e-8)
    assert cost.ends_commission == pytest.approx(0.02 * (delta - 0.1 + units_sold), rel=1e-8)
    # N + 1 tickets, the integral of the discount factor by the trapezoid rule over a fine year.
    discount = np.exp(-rate * years * np.arange(1001) / 1000)
    assert cost.tickets * 1000 + cost.ends_tickets == pytest.approx(0.5 * discount.sum(), rel=1e-6)


def test_rehedging_a_book_of_both_signs_against_quadrature_over_prices():
    case = as_one_name(two_names(looks=64, correlation=0.5, overlap=True))
    case = with_units(case, [-100.0, 60.0, 90.0, -70.0])
    case["costs"] = CostTerms(frozen([1e-3]), frozen([0.02]), frozen([0.0]))
    growth = case["market"].growth[0]

    def size(s, tilt):
        y, g, weight = gamma_nodes(case, s)
        return (np.abs(g) * weight * np.exp(tilt * (y + growth * s))).sum()

    scale = 0.25 * np.sqrt(2 / (np.pi * 0.25))
    cost = leading_cost(**given(case, costs=True))
    # The kinks of |g| between the nodes leave 1e-4.
    assert cost.spread == pytest.approx(1e-3 * scale * over_time(case, lambda s: size(s, 0), epsrel=1e-5), rel=3e-4)
    assert cost.commission == pytest.approx(
        0.02 * scale * over_time(case, lambda s: size(s, -1), epsrel=1e-5), rel=3e-4
    )


def test_mean_cost_is_the_limit_of_simulated_ledgers():
    rules = tuple(Schedule(str(k), "looks", k) for k in (1, 4, 16))
    case = two_names(looks=256, correlation=0.8, rules=rules)
    ledger = simulate(**case, count=50_000)
    cost = leading_cost(**given(case, costs=True))
    for s, n in enumerate((256, 64, 16)):
        for kind, root, linear, ends in (
            ("costs.spread", cost.spread, 0.0, cost.ends_spread),
            ("costs.commission", cost.commission, 0.0, cost.ends_commission),
            ("costs.tickets", 0.0, cost.tickets, cost.ends_tickets),
        ):

            def mean(moments, s=s, kind=kind):
                return np.array(-moments.mean[s][ledger.columns((kind,))].sum())

            told = root * np.sqrt(n) + linear * n + ends
            # A sum of N - 1 trades for an integral: off by a few of its N terms of order 1/sqrt(N). A few in a hundred
            # tickets are not needed, far from all strikes near expiry; and a ticket is due at the early expiry at most.
            allowance = 2 * root / np.sqrt(n) + 0.03 * linear * n
            assert (
                abs(float(mean(ledger.moments)) - told) < 4 * float(ledger.replicates.standard_error(mean)) + allowance
            )


def test_continuous_hedging_at_the_implied_vol():
    # Ahmad and Wilmott (2005), Wilmott magazine: S = K = 100, r = mu = 5 %, T 1, actual 30 %, implied 20 %, long option:
    # mean 3.7806712139, sd 1.7255736919, discounted (computed from the published integrals).
    case = hull(spot=100.0, strike=100.0, years=1.0, vol=0.20, realised=0.30, units=1.0)
    floor = continuous_hedging(**given(case))
    assert floor.mean == pytest.approx(3.7806712139, abs=1e-9)
    assert np.sqrt(floor.variance) == pytest.approx(1.7255736919, abs=1e-9)


def test_continuous_hedging_at_the_realised_vol_is_certain():
    # Ahmad and Wilmott (2005): V(actual) - V(implied), whatever the drift.
    case = hull(spot=100.0, strike=100.0, years=1.0, vol=0.20, hedge_vol=0.30, realised=0.30, units=1.0, drift=0.4)
    values = [
        greeks(100.0, 100.0, years=1, variance_years=1, vol=v, rate=0.05, growth=0.05, is_call=True).value
        for v in (0.2, 0.3)
    ]
    floor = continuous_hedging(**given(case))
    assert floor.mean == pytest.approx(values[1] - values[0], rel=1e-12)
    assert floor.variance == 0.0


@pytest.mark.parametrize("seed", [1, 4, 6])
def test_the_mean_is_the_value_at_the_realised_vol_when_the_drift_is_the_growth(seed):
    # In general form: E = U(realised vol) + cash received, at any hedge vols, all positions settled.
    case = random_experiment(seed)
    case["source"] = replace(case["source"], drift=case["market"].growth)
    book, market = case["book"], case["market"]
    u = book.underlying
    true = greeks(
        market.spot[u],
        book.strike,
        years=book.expiry_t,
        variance_years=book.expiry_s,
        vol=case["source"].realised_vol[u],
        rate=market.rate,
        growth=market.growth[u],
        is_call=book.is_call,
    ).value
    mark = greeks(
        market.spot[u],
        book.strike,
        years=book.expiry_t,
        variance_years=book.expiry_s,
        vol=book.mark_vol,
        rate=market.rate,
        growth=market.growth[u],
        is_call=book.is_call,
    ).value
    paid = np.where(np.isnan(book.premium), mark, book.premium)
    gross = np.abs(book.units * true).sum()
    assert continuous_hedging(**given(case)).mean == pytest.approx((book.units * (true - paid)).sum(), abs=1e-9 * gross)


def test_the_floor_of_correlated_names_is_that_of_simulated_ledgers():
    looks = 256
    case = two_names(looks=looks, correlation=0.8)
    _against_floor(case, 0.5 / np.sqrt(looks))  # left-point sums miss the end of an expiring gamma by this order


def test_the_floor_of_a_book_still_open_is_that_of_simulated_ledgers():
    looks = 250
    case = cut_short(two_names(looks=looks, correlation=-0.6), 100)
    told = continuous_hedging(**given(case))
    _against_floor(case, 1 / 100)  # left-point sums of smooth functions miss by the order of a look
    # What is open is valued at mark: without that term the variance would be another.
    unmarked = case | {"book": replace(case["book"], mark_vol=case["book"].hedge_vol)}
    assert abs(continuous_hedging(**given(unmarked)).variance / told.variance - 1) > 0.1


def _against_floor(case, bias):
    ledger = simulate(**case, count=50_000)
    told = continuous_hedging(**given(case))
    at = ledger.columns(FLOOR)

    def variance(moments):
        return np.array(moments.cov[0][np.ix_(at, at)].sum())

    def mean(moments):
        return np.array(moments.mean[0][at].sum())

    sd = np.sqrt(told.variance)
    error = float(ledger.replicates.standard_error(variance))
    assert abs(float(variance(ledger.moments)) - told.variance) < 4 * error + bias * told.variance
    assert abs(float(mean(ledger.moments)) - told.mean) < 4 * float(ledger.replicates.standard_error(mean)) + bias * sd


def test_dense_strikes_may_be_lumped(monkeypatch):
    case = two_names(looks=64, correlation=0.5)
    n = 600
    pick = np.arange(n) % 4
    book = case["book"]
    fields = {name: getattr(book, name)[pick] for name in book.__dataclass_fields__ if name != "initial_units"}
    random = np.random.default_rng(5)
    fields |= {
        "strike": frozen(case["market"].spot[fields["underlying"]] * random.uniform(0.8, 1.2, n)),
        "units": frozen(random.normal(-0.3, 1.0, n)),
    }
    case["book"] = replace(book, **fields)
    lumped = granularity(**given(case)), leading_cost(**given(case, costs=True)).spread
    assert continuous_hedging(**given(case)).variance > 0.0
    monkeypatch.setattr(humps_module, "LARGE_BOOK", 10**6)
    whole = granularity(**given(case)), leading_cost(**given(case, costs=True)).spread
    assert humps_module.options(case["book"], case["market"], case["grid"]).size == n
    assert lumped == pytest.approx(whole, rel=2e-3)


def test_laws_state_where_they_hold():
    book = {law.name: law for law in laws(**given(two_names(looks=64, correlation=0.3), costs=True))}
    assert book["granularity"].holds
    assert book["leading-order cost"].holds
    for name in ("square-root law", "two-term law"):
        assert book[name].curve is None
        assert book[name].reason == "the book has 4 different options, the law is for one"
    single = {law.name: law for law in laws(**given(hull(), costs=True))}
    assert all(law.holds for name, law in single.items() if name != "gamma of the inception")
    drifting = {law.name: law for law in laws(**given(hull(drift=0.5), costs=True))}
    assert drifting["two-term law"].reason == "the drift is not the growth of the forward"
    assert not drifting["square-root law"].holds
    assert drifting["square-root law"].curve is not None
    off = {law.name: law for law in laws(**given(hull(hedge_vol=0.25), costs=True))}
    assert off["square-root law"].reason == "the hedge vol is not the realised vol"
    early = {law.name: law for law in laws(**given(cut_short(hull(), 10), costs=True))}
    assert early["square-root law"].reason == "the option does not expire at the horizon"
    for law in (*book.values(), *single.values(), *early.values()):
        assert law.assumptions
        assert law.holds == (law.reason == "")


def test_a_law_misses_by_a_ratio():
    by_name = {law.name: law for law in laws(**given(hull(), costs=True))}
    # Exact deviation at 20 trades .4610663186: the square-root law is high by about 4 %, two terms by a tenth of that.
    exact = 0.4610663186**2
    assert np.sqrt(misses(by_name["square-root law"], 20, exact)) == pytest.approx(1.04, abs=0.005)
    assert np.sqrt(misses(by_name["two-term law"], 20, exact)) == pytest.approx(1.0, abs=0.005)
    several = misses(by_name["granularity"], np.array([20, 80]), np.array([exact, 0.2351955216**2]))
    assert several == pytest.approx(2.1475437619**2 / np.array([20 * exact, 80 * 0.2351955216**2]), rel=1e-7)
    assert np.isnan(misses(by_name["granularity"], 20, 0.0))
    nothing = {law.name: law for law in laws(**given(hull(hedge_vol=0.25), costs=True))}["two-term law"]
    assert np.isnan(misses(nothing, np.array([20, 80]), np.array([1.0, 2.0]))).all()
