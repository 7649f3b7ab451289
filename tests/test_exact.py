"""The exact engine against published laws and known answers."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import integrate
from scipy.special import zeta
from simulate_cases import cut_short, one_option, random_experiment

from hedgesim.costs import CostTerms
from hedgesim.engine.exact import ExactUnavailable, exact
from hedgesim.engine.lattice import lay_schedule, level, read_inputs
from hedgesim.kernels.exact import MOMENT_ROWS, run_schedule
from hedgesim.market import frozen
from hedgesim.schedules import Schedule

# Hull, Options, Futures, and Other Derivatives, 11th ed., ch. 19: the option of the worked example.
HULL = {"spot": 49.0, "strike": 50.0, "years": 20 / 52, "rate": 0.05, "vol": 0.20}


def every(*looks):
    return tuple(Schedule(f"every {k} looks", "looks", k) for k in looks)


# Discounted standard deviation per option at N rebalances, drift = rate, no costs: the sum of variances of orthogonal
# martingale increments E[payoff*^2] - C0^2 + sum_i {E[D_i^2 x_i^2](e^{sigma^2 h} - 1) - 2 E[D_i x_i (C(x e^{sigma^2 h}) -
# C(x))]}, evaluated for Hull's option by Gauss-Legendre quadrature (derived; no published table gives these digits).
HULL_STD = {
    4: 0.9843049823, 5: 0.8878704949, 10: 0.6416585330, 20: 0.4610663186, 21: 0.4503821344, 40: 0.3298430559,
    80: 0.2351955216, 84: 0.2296399531, 252: 0.1337079424,
}  # fmt: skip


@pytest.mark.parametrize("n", HULL_STD)
def test_the_standard_deviation_of_the_worked_example(n):
    result = exact(**one_option(**HULL, looks=n, schedules=every(1)), tolerance=1e-9)
    assert result.figures.std[0] == pytest.approx(HULL_STD[n], abs=1e-8)
    assert result.figures.mean[0] == pytest.approx(0.0, abs=1e-8)
    assert result.error["std"][0] < 1e-9


def test_schedules_that_skip_looks_are_those_of_coarser_grids():
    result = exact(**one_option(**HULL, looks=80, schedules=every(20, 16, 8, 4, 2, 1)))
    assert result.figures.std == pytest.approx([HULL_STD[n] for n in (4, 5, 10, 20, 40, 80)], rel=1e-6)
    assert result.figures.removable == pytest.approx(np.square(result.figures.std), rel=1e-8)


def scaled_variance(n, **option):
    return n * exact(**one_option(looks=n, schedules=every(1), **option), tolerance=1e-9).figures.variance[0]


def limit_of(numbers, values, powers):
    """Limit of a series in 1/N with the given powers, from as many values as it has terms."""
    columns = [np.array(numbers, dtype=float) ** -p for p in (0.0, *powers)]
    return np.linalg.solve(np.stack(columns, axis=1), values)[0]


def test_the_two_term_law_and_the_order_of_its_remainder():
    # Kamal and Derman (1999), Risk 12(1): sd ~ sqrt(pi/4) vega sigma / sqrt(N), exact in the limit for mu = r, d2 = 0. With
    # the next term N Var = g^2 + zeta(-1/2)/sqrt(pi) sigma^2 k*^2 T phi(d2)/sqrt(N) + O(1/N) (derived, one option).
    vol, years, strike = 0.2, 0.5, 100.0
    option = {"spot": strike * np.exp(0.5 * vol**2 * years), "strike": strike, "years": years, "rate": 0.0, "vol": vol}
    g2 = np.pi / 4 * (strike / np.sqrt(2 * np.pi) * np.sqrt(years) * vol) ** 2
    zeta_half = -zeta(1.5) / (4 * np.pi)  # zeta(-1/2) by the functional equation
    second = zeta_half / np.sqrt(np.pi) * vol**2 * strike**2 * years / np.sqrt(2 * np.pi)
    looks = np.array([20, 80, 320])
    left = np.array([scaled_variance(n, **option) - g2 - second / np.sqrt(n) for n in looks])
    # Four times the looks, a quarter of the remainder.
    assert left[:-1] / left[1:] == pytest.approx(4.0, rel=0.1)
    assert abs(left[-1]) < 1e-3 * g2


def test_the_granularity_integral_away_from_the_forward():
    # Bertsimas, Kogan and Lo (2000), J. Financial Economics 55 (re-derived): sqrt(N) sd -> g, for a call under GBM
    # g^2 = (T sigma^2 k*^2 / 4 pi) int_0^1 (1-u^2)^(-1/2) exp{-[ln(S0/k*) - sigma^2 T/2 + (mu-r) T u]^2/(sigma^2 T (1+u))} du.
    vol, years, rate, drift, spot, strike = 0.25, 0.5, 0.03, 0.12, 100.0, 104.0
    discounted = strike * np.exp(-rate * years)

    def integrand(angle):
        u = np.sin(angle)  # takes the square-root singularity away
        top = (np.log(spot / discounted) - vol**2 * years / 2 + (drift - rate) * years * u) ** 2
        return np.exp(-top / (vol**2 * years * (1 + u)))

    g2 = years * vol**2 * discounted**2 / (4 * np.pi) * integrate.quad(integrand, 0, np.pi / 2)[0]
    option = {"spot": spot, "strike": strike, "years": years, "rate": rate, "vol": vol, "drift": drift}
    # N Var is a series in N^(-1/2): four frequencies give its limit.
    looks = (16, 64, 256, 1024)
    found = [scaled_variance(n, **option) for n in looks]
    assert limit_of(looks, found, (0.5, 1.0, 1.5)) == pytest.approx(g2, rel=1e-5)


def test_a_book_hedged_at_the_implied_vol_at_any_frequency():
    # Ahmad and Wilmott (2005), Wilmott magazine, drift = rate: mean V(actual) - V(implied) = 3.7806712139 for S = K = 100,
    # r = mu = 5 %, T = 1, actual 30 %, implied 20 %, long, at every number of rebalances; sd 1.7255736919 when hedged
    # continuously (both computed from the published integrals), which is that of the floor.
    option = {"spot": 100.0, "strike": 100.0, "years": 1.0, "rate": 0.05, "vol": 0.20, "realised": 0.30, "units": 1.0}
    floors = []
    numbers = (16, 64, 256, 1024)
    for looks in numbers:
        figures = exact(**one_option(looks=looks, schedules=every(looks, 8, 1), **option), tolerance=1e-7).figures
        assert figures.mean == pytest.approx(3.7806712139, abs=1e-7)
        floors.append(figures.variance_floor[0])
        if looks == 1024:
            # Removing the rest takes N^-1 with it: at 1,024 trades a thousandth of the variance at one trade is left.
            assert figures.removable[2] < 2e-3 * figures.removable[0]
    # The variance is a double sum over looks of the covariance of gammas, which is like 1/sqrt(time to expiry) near expiry:
    # it misses its integral by terms in 1/N (the left ends of the looks), N^(-3/2) (the singularity) and 1/N^2.
    assert np.sqrt(limit_of(numbers, floors, (1.0, 1.5, 2.0))) == pytest.approx(1.7255736919, rel=1e-7)


def test_one_step_of_a_long_option_is_chi_squared():
    # Boyle and Emanuel (1980), J. Financial Economics 8: 1/2 Gamma S^2 sigma^2 h (Z^2 - 1): skewness sqrt(8), excess kurtosis
    # 12 (from memory; verified) in the limit of a step short against the life.
    case = cut_short(one_option(spot=100.0, strike=100.0, years=1.0, rate=0.0, vol=0.2, looks=200_000, schedules=every(1), units=1.0), 1)  # fmt: skip
    figures = exact(**case).figures
    gamma = float(np.exp(-0.5 * 0.1**2) / np.sqrt(2 * np.pi) / (100 * 0.2))
    unit = 0.5 * gamma * 100**2 * 0.2**2 * case["grid"].t[1]
    assert figures.std[0] == pytest.approx(unit * np.sqrt(2), rel=1e-3)
    assert figures.skew[0] == pytest.approx(np.sqrt(8), rel=1e-3)
    assert figures.kurtosis[0] == pytest.approx(15.0, rel=1e-3)


def test_the_reported_error_covers_the_change_to_a_tighter_tolerance():
    case = random_experiment(21, underlyings=1)
    loose, tight = exact(**case, tolerance=1e-4), exact(**case, tolerance=2e-6)
    change = np.abs(loose.figures.std - tight.figures.std)
    assert (tight.error["std"] <= 2e-6 * tight.figures.std).all()
    assert (change <= 2.0 * loose.error["std"] + 2e-6 * tight.figures.std).all()
    assert (tight.nodes >= loose.nodes).all()
    assert (tight.refinements >= loose.refinements).all()


def test_smooth_figures_gain_digits_with_every_refinement():
    # Gross P&L without costs: what is left comes from the tails beyond the lattice, which each refinement moves out.
    case = one_option(**HULL, looks=12, schedules=every(1), realised=0.27, drift=0.3)
    inputs = read_inputs(**{k: v for k, v in case.items() if k != "compiled"}, tolerance=1e-12)
    variance = []
    for number in range(5):
        walk = lay_schedule(inputs, 0, case["compiled"].trades_at[0], level(number), "every look")
        out = np.empty(len(MOMENT_ROWS))
        run_schedule(
            0, walk.lattice, walk.steps, walk.trading, walk.strikes, inputs.slope, inputs.mark_slope,
            inputs.mark_strike, inputs.payoff, walk.break_room, out,
        )  # fmt: skip
        variance.append(out[2])
        # The variance by recursion is that by summing conditional variances under the known law of the price.
        assert out[2] == pytest.approx(out[MOMENT_ROWS.index("gross_gross")], rel=1e-8)
    change = np.abs(np.diff(variance)) / variance[-1]
    assert (change[1:] < change[:-1]).all()
    assert change[0] < 1e-7
    assert change[-1] < 1e-10


def test_the_result_is_the_same_for_any_threads():
    case = random_experiment(4, underlyings=1)
    one, two = (exact(**case, tolerance=1e-4, threads=n) for n in (1, 2))
    assert np.array_equal(one.figures.variance, two.figures.variance)
    assert np.array_equal(one.figures.covariance_gross_floor, two.figures.covariance_gross_floor)


def test_costs_without_risk_are_known_at_the_inception():
    # No options: what is held at the start is sold at once.
    case = one_option(**HULL, looks=6, schedules=every(2), units=0.0, costs=CostTerms(frozen([1e-3]), frozen([0.1]), frozen([2.0])))  # fmt: skip
    case["book"] = replace(case["book"], initial_units=np.array([30.0]))
    result = exact(**case)
    # One ticket: nothing is traded afterwards.
    assert result.figures.mean[0] == pytest.approx(-(30 * (49.0 * 1e-3 + 0.1) + 2.0), rel=1e-12)
    assert result.figures.variance[0] == pytest.approx(0.0, abs=1e-18)
    assert np.isnan(result.figures.skew[0])


def test_what_it_cannot_do_is_said_in_one_line():
    with pytest.raises(ExactUnavailable, match="uncorrelated underlyings"):
        exact(**random_experiment(0, underlyings=2))
    case = one_option(**HULL, looks=20, schedules=every(20))
    with pytest.raises(ExactUnavailable, match="every 20 looks: the tolerance"):
        exact(**case | {"costs": CostTerms(frozen([1e-3]), frozen([0.0]), frozen([0.0]))}, tolerance=1e-17)
    still = replace(case["grid"], s=np.concatenate([case["grid"].s[:-1], case["grid"].s[-2:-1]]))
    with pytest.raises(ExactUnavailable, match="stands still"):
        exact(**case | {"grid": still, "compiled": replace(case["compiled"], trades_at=np.ones((1, 21), bool))})
    # A year under a yield of 60 % between two trades: the gain given the ends is far from normal.
    market = replace(case["market"], yield_rate=np.array([0.6]))
    long = one_option(spot=49.0, strike=50.0, years=4.0, looks=20, rate=0.05, vol=0.5, schedules=every(20))
    with pytest.raises(ExactUnavailable, match=r"every 20 looks: .* yield"):
        exact(**long | {"market": market})
