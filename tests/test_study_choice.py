"""The price of risk and the choice of a schedule."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ledger_builder import build_ledger

from hedgesim.study import Settings
from hedgesim.study.choice import annual_hurdle, choose, estimates
from hedgesim.study.distribution import distribution

# Mean cost and risk of six schedules. The fifth is dominated by the second, the sixth is efficient but best nowhere.
COST = np.array([10.0, 14.0, 22.0, 30.0, 20.0, 21.0])
RISK = np.array([100.0, 80.0, 70.0, 69.0, 85.0, 78.0])


def asked(**changes):
    base = {"mean": "costs", "risk": "std", "cost_of_risk": 0.5, "limit": None, "confidence": 0.95, "years": 0.25}
    return Settings(**{**base, **changes})


def standard(paths, seed=1):
    """Draws with mean exactly zero and standard deviation exactly one."""
    z = np.random.default_rng(seed).standard_normal(paths)
    return (z - z.mean()) / z.std(ddof=1)


def exact_ledger(cost=COST, risk=RISK, *, paths=4000, **options):
    z = standard(paths)
    lag = np.asarray(risk)[:, None] * z
    detail = np.stack([lag, np.broadcast_to(-np.asarray(cost)[:, None], lag.shape)], axis=1)[:, None]
    return build_ledger(detail, components=("lag", "costs.spread"), **options)


def chosen(ledger, want):
    rows = np.arange(len(ledger.schedules))
    return choose(ledger, rows, distribution(ledger, rows), want)


def test_worked_example():
    c = chosen(exact_ledger(), asked())
    np.testing.assert_allclose(c.mean_cost, COST, rtol=1e-12)
    np.testing.assert_allclose(c.risk, RISK, rtol=1e-12)
    np.testing.assert_allclose(c.objective, [60, 54, 57, 64.5, 62.5, 60], rtol=1e-12)
    assert c.chosen == 1
    np.testing.assert_allclose(c.difference, [6, 0, 3, 10.5, 8.5, 6], atol=1e-10)
    np.testing.assert_array_equal(c.efficient, [1, 1, 1, 1, 0, 1])
    np.testing.assert_array_equal(c.supported, [1, 1, 1, 1, 0, 0])
    np.testing.assert_allclose(c.best_from, [0, 0.2, 0.8, 8, np.nan, np.nan], rtol=1e-9)
    np.testing.assert_allclose(c.best_to, [0.2, 0.8, 8, np.inf, np.nan, np.nan], rtol=1e-9)
    np.testing.assert_array_equal(c.next_finer, [1, 5, 3, -1, -1, 2])
    np.testing.assert_allclose(c.price, [0.2, 3.5, 8, np.nan, np.nan, 0.125], rtol=1e-9)
    assert c.warnings == ()


def test_paired_errors_of_the_worked_example():
    # All risks are multiples of one estimate and costs are certain: errors scale, and differences scale with differences.
    ledger = exact_ledger()
    c = chosen(ledger, asked())
    one = c.risk_se[0] / 100
    np.testing.assert_allclose(c.risk_se, RISK * one, rtol=1e-9)
    np.testing.assert_allclose(c.objective_se, 0.5 * RISK * one, rtol=1e-9)
    np.testing.assert_allclose(c.difference_se, 0.5 * np.abs(RISK - 80) * one, rtol=1e-9, atol=1e-8)
    np.testing.assert_allclose(c.price_se[[0, 1, 2]], c.price[[0, 1, 2]] * one, rtol=1e-6)
    # 4,000 normal draws: std known to 1/sqrt(8000) = 1.1 %, itself known from 32 groups to 13 %; three of them.
    assert one == pytest.approx(1 / np.sqrt(8000), rel=0.4)


def test_variance_as_risk():
    c = chosen(exact_ledger(), asked(risk="variance", cost_of_risk=0.01))
    np.testing.assert_allclose(c.risk, RISK**2, rtol=1e-12)
    assert c.chosen == int(np.argmin(COST + 0.01 * RISK**2))


def test_shortfall_as_risk_over_independent_paths():
    ledger = exact_ledger()
    rows = np.arange(6)
    d = distribution(ledger, rows)
    c = chosen(ledger, asked(risk="es975"))
    np.testing.assert_allclose(c.risk, d.es975)
    np.testing.assert_allclose(c.risk_se, d.es975_se, rtol=1e-3)
    # One shape, scaled: the error of a difference is the difference of the errors.
    np.testing.assert_allclose(c.difference_se, 0.5 * np.abs(c.risk_se - c.risk_se[c.chosen]), rtol=1e-6, atol=1e-8)


def test_unknown_pairing_of_cost_and_shortfall_gives_an_upper_bound():
    rng = np.random.default_rng(2)
    z = rng.standard_normal((3, 3000))
    detail = np.stack([z, -1 - 0.2 * np.abs(z)], axis=1)[:, None]
    kept, bare = (build_ledger(detail, components=("lag", "costs.spread"), keep_detail=k) for k in (True, False))
    want = asked(risk="es975")
    known, bound = chosen(kept, want), chosen(bare, want)
    assert estimates(kept, np.arange(3), distribution(kept, np.arange(3)), want).joint
    assert not estimates(bare, np.arange(3), distribution(bare, np.arange(3)), want).joint
    np.testing.assert_allclose(bound.objective, known.objective, rtol=1e-12)
    np.testing.assert_allclose(bound.objective_se, bound.mean_cost_se + 0.5 * bound.risk_se, rtol=1e-9)
    assert (bound.objective_se > known.objective_se * 0.98).all()


def test_shortfall_over_a_price_history_uses_its_resamples():
    rng = np.random.default_rng(3)
    picks = rng.integers(0, 1500, (300, 1500))
    ledger = exact_ledger(paths=1500, resamples=picks)
    d = distribution(ledger, np.arange(6))
    c = chosen(ledger, asked(risk="es975"))
    np.testing.assert_allclose(c.risk_se, d.es975_se, rtol=1e-9)


def test_total_as_mean_counts_luck_and_says_so():
    ledger = exact_ledger()
    c = chosen(ledger, asked(mean="total"))
    np.testing.assert_allclose(c.mean_cost, -ledger.totals.mean(axis=1), rtol=1e-9)
    assert any("luck included" in w for w in c.warnings)


def test_funding_counts_as_cost():
    detail = np.stack([np.tile(standard(800), (2, 1)), -np.full((2, 800), 3.0), -np.full((2, 800), 4.0)], axis=1)
    ledger = build_ledger(detail[:, None], components=("lag", "costs.spread", "funding"))
    np.testing.assert_allclose(chosen(ledger, asked()).mean_cost, 7.0)


def test_limit_moves_the_choice():
    c = chosen(exact_ledger(), asked(limit=75.0))
    assert c.chosen == 2
    np.testing.assert_array_equal(c.within_limit, [0, 0, 1, 1, 0, 0])
    assert c.limit_met
    assert not c.tied[[0, 1, 4, 5]].any()


def test_unmet_limit_takes_the_least_risk_and_warns():
    c = chosen(exact_ledger(), asked(limit=50.0))
    assert c.chosen == 3
    assert not c.limit_met
    assert any("no schedule meets the risk limit of 50" in w for w in c.warnings)


def test_limit_within_the_error_of_a_risk_warns():
    assert any("uncertain" in w for w in chosen(exact_ledger(), asked(limit=70.1)).warnings)
    assert not any("uncertain" in w for w in chosen(exact_ledger(), asked(limit=90.0)).warnings)


def test_without_errors_nothing_is_told_apart():
    c = chosen(exact_ledger(groups=0), asked())
    assert c.tied.all()
    assert any("too few paths" in w for w in c.warnings)


def test_equal_schedules_are_tied_and_one_stands_for_both():
    c = chosen(exact_ledger(cost=[5.0, 5.0, 9.0], risk=[10.0, 10.0, 4.0]), asked(cost_of_risk=0.1))
    assert c.chosen == 0
    np.testing.assert_array_equal(c.tied, [1, 1, 0])
    np.testing.assert_array_equal(c.efficient, [1, 0, 1])


def test_one_schedule_is_its_own_choice():
    c = chosen(exact_ledger(cost=[5.0], risk=[10.0]), asked())
    assert c.chosen == 0
    assert c.best_from[0] == 0.0
    assert c.best_to[0] == np.inf
    assert c.tied.all()


@pytest.mark.parametrize("risk", ["std", "es975"])
def test_tied_set_holds_the_best_as_often_as_stated(risk):
    # Five schedules with one true objective, and a sixth far worse: the set must hold the first with 95 %.
    runs, n = 400, 1280
    held, sixth = 0, 0
    for seed in range(runs):
        rng = np.random.default_rng(seed)
        lag = 0.7 * rng.standard_normal(n) + 0.7 * rng.standard_normal((6, n))
        lag[5] *= 1.6
        detail = np.stack([lag, -1 + 0.05 * rng.standard_normal((6, n))], axis=1)[:, None]
        c = chosen(build_ledger(detail, components=("lag", "costs.spread")), asked(risk=risk))
        held += c.tied[0]
        sixth += c.tied[5]
    assert held >= 0.95 * runs - 4 * np.sqrt(runs * 0.95 * 0.05)
    assert sixth == 0


def test_price_error_matches_fresh_samples():
    prices, errors = [], []
    for seed in range(300):
        rng = np.random.default_rng(seed)
        z = rng.standard_normal((2, 1600)) * np.array([[3.0], [1.5]])
        detail = np.stack([z, np.array([[-1.0], [-2.0]]) + 0.3 * rng.standard_normal((2, 1600))], axis=1)[:, None]
        c = chosen(build_ledger(detail, components=("lag", "costs.spread")), asked())
        prices.append(c.price[0])
        errors.append(c.price_se[0])
    # 300 samples: 4.1 %, four of them.
    assert np.sqrt(np.mean(np.square(errors))) == pytest.approx(np.std(prices, ddof=1), rel=0.17)


def test_annual_hurdle_grows_back_with_the_root_of_the_years():
    # Earning 10 % a year at 20 % risk: over a quarter 2.5 % at 10 %, a ratio of 0.25 = 0.5 x sqrt(0.25).
    assert annual_hurdle(asked(cost_of_risk=0.25, years=0.25)) == pytest.approx(0.10 / 0.20)
    assert np.isnan(annual_hurdle(asked(risk="variance")))


@settings(max_examples=80, deadline=None)
@given(
    st.lists(st.tuples(st.integers(0, 50), st.integers(1, 50)), min_size=1, max_size=8),
    st.floats(0.0, 5.0),
)
def test_the_best_schedule_is_the_one_whose_range_holds_the_cost_of_risk(points, cost_of_risk):
    cost, risk = np.array(points, dtype=float).T
    c = chosen(exact_ledger(cost=cost, risk=risk, paths=64, groups=8), asked(cost_of_risk=cost_of_risk))
    holds = (c.best_from <= cost_of_risk * (1 + 1e-9) + 1e-9) & (cost_of_risk * (1 - 1e-9) - 1e-9 <= c.best_to)
    assert holds.any()
    np.testing.assert_allclose(c.objective[holds].min(), c.objective.min(), rtol=1e-7)
    # Ranges follow each other from zero to infinity without a gap.
    order = np.argsort(c.best_from[c.supported])
    low, high = c.best_from[c.supported][order], c.best_to[c.supported][order]
    assert low[0] == 0.0
    assert high[-1] == np.inf
    np.testing.assert_array_equal(low[1:], high[:-1])
    for i in np.flatnonzero(~c.efficient):
        assert ((c.mean_cost <= c.mean_cost[i] + 1e-9) & (c.risk <= c.risk[i] + 1e-9)).sum() > 1
