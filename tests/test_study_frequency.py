"""The frequency law and the growth of costs."""

from functools import cache

import numpy as np
import pytest
from ledger_builder import HEDGED, build_ledger, compiled, hedge_calls

from hedgesim.study import Settings
from hedgesim.study.breakdown import variances
from hedgesim.study.frequency import frequency
from hedgesim.study.law import Points, fit_power_law

TRADES = (4, 8, 16, 32, 64, 128)
SETTINGS = Settings(mean="costs", risk="std", cost_of_risk=0.5, limit=None, confidence=0.95, years=0.25)


def lawful_ledger(seed, *, exponent=1.0, trades=TRADES, paths=2000, groups=64, names=None, **options):
    """Normal floor of variance 1, and a discretisation error of variance 9 N^-p that schedules share in part."""
    rng = np.random.default_rng(seed)
    size = np.sqrt(9.0 * np.asarray(trades, dtype=float) ** -exponent)[:, None]
    lag = size * (0.6 * rng.standard_normal(paths) + 0.8 * rng.standard_normal((len(trades), paths)))
    floor = np.broadcast_to(rng.standard_normal(paths), lag.shape)
    cost = -0.1 * np.sqrt(trades)[:, None] * (1 + 0.1 * rng.standard_normal((len(trades), paths)))
    detail = np.stack([floor, lag, cost], axis=1)[:, None]
    components = options.pop("components", ("vol_gap", "lag", "costs.spread"))
    return build_ledger(detail, components=components, schedules=names, groups=groups, **options)


@cache
def lawful_laws(runs, exponent=1.0, groups=64, trades=TRADES):
    return [
        studied(lawful_ledger(seed, exponent=exponent, groups=groups, trades=trades), trades).law
        for seed in range(runs)
    ]


def studied(ledger, trades=TRADES, *, hidden=(), settings=SETTINGS, **options):
    shown = np.array([i for i, name in enumerate(ledger.schedules) if name not in hidden])
    rules = compiled(ledger.schedules, trades, **options)
    return frequency(ledger, shown, variances(ledger, shown), compiled=rules, settings=settings)


@pytest.mark.parametrize("exponent", [1.0, 0.5])
def test_exponent_interval_covers_the_truth_as_often_as_stated(exponent):
    runs = 400
    laws = lawful_laws(runs, exponent)
    covered = sum(law.low <= exponent <= law.high for law in laws)
    # 95 % of 400, four binomial standard deviations; the widening on a misfit at 1 % can only add cover.
    room = 4 * np.sqrt(runs * 0.95 * 0.05)
    assert 0.95 * runs - room <= covered <= min(runs, 0.95 * runs + room)
    spread = np.std([law.exponent for law in laws], ddof=1)
    stated = np.sqrt(np.mean([law.exponent_se**2 for law in laws]))
    assert stated == pytest.approx(spread, rel=0.17)  # 400 fits: 3.5 %, four of them, and 3 % for the widened ones


def test_few_resamples_for_each_point_are_paid_for_in_the_interval():
    # Three groups a point: without the small-sample factor the interval covers too seldom.
    runs, trades = 400, (*TRADES, 256, 512)
    laws = lawful_laws(runs, groups=24, trades=trades)
    assert {law.weighting for law in laws} == {"joint"}
    covered = sum(law.low <= 1.0 <= law.high for law in laws)
    room = 4 * np.sqrt(runs * 0.95 * 0.05)
    assert 0.95 * runs - room <= covered <= 0.95 * runs + room


def test_a_misfit_widens_the_error_by_its_ratio():
    trades = np.array([4.0, 8.0, 16.0, 64.0])
    lawful = 7.0 * trades**-0.8
    bent = lawful * np.array([1.0, 1.06, 1.06, 1.0])
    noise = lawful * 0.01 * np.random.default_rng(1).standard_normal((64, 4)) / 8

    def fit(removable):
        points = Points(tuple("abcd"), trades, removable, removable + noise, 63 / 64)
        return fit_power_law(points, confidence=0.95, reference=np.inf)[0]

    straight, law = fit(lawful), fit(bent)
    assert law.misfit
    assert not straight.misfit
    ratio = law.chi2 * 62 / (63 * 2)
    # The straight fit carries the small-sample factor 63/61; the bend moves the gradients by a few percent.
    assert law.exponent_se == pytest.approx(straight.exponent_se * np.sqrt(ratio * 61 / 63), rel=0.06)


def test_lawful_points_are_seldom_called_a_misfit():
    laws = lawful_laws(400, 1.0)
    # p-values below 1 %: four expected, binomial deviation 2.0.
    assert sum(law.misfit for law in laws) <= 12
    uniform = np.mean([law.p_value for law in laws])
    assert uniform == pytest.approx(0.5, abs=4 / np.sqrt(12 * 400))


def test_many_schedules_on_few_groups_fall_back_to_single_weights_with_honest_errors():
    runs = 300
    laws = lawful_laws(runs, groups=16)
    assert {law.weighting for law in laws} == {"single"}
    covered = sum(law.low <= 1.0 <= law.high for law in laws)
    room = 4 * np.sqrt(runs * 0.95 * 0.05)
    assert covered >= 0.95 * runs - room
    assert np.isnan(laws[0].chi2)
    assert laws[0].offset is None


def test_free_floor_finds_the_stated_floor():
    offsets = [studied(lawful_ledger(seed, paths=8000)).law.offset for seed in range(100)]
    assert all(o is not None for o in offsets)
    scores = np.array([o.value / o.value_se for o in offsets])
    # Scores of standard width: the mean of 100 within 0.4 of zero, nearly all within three.
    assert abs(scores.mean()) < 0.4
    assert (np.abs(scores) < 3).sum() >= 95


def test_free_floor_shows_what_the_ledger_calls_floor_but_is_not():
    rng = np.random.default_rng(101)
    ledger = lawful_ledger(1, paths=20_000)
    detail = np.array(ledger.detail)
    detail[:, 0, 1] += 0.5 * rng.standard_normal(20_000)  # a discretisation that no schedule removes
    wrong = build_ledger(detail, components=ledger.components, groups=64)
    law = studied(wrong).law
    assert law.offset.value == pytest.approx(0.25, abs=4 * law.offset.value_se)
    assert law.offset.value > 4 * law.offset.value_se
    assert law.misfit


def test_exact_points_give_the_exact_law():
    trades = np.array([4.0, 8.0, 16.0, 64.0])
    removable = 7.0 * trades**-0.8
    noise = 1 + 0.01 * np.random.default_rng(1).standard_normal((64, 4))
    points = Points(("a", "b", "c", "d"), trades, removable, removable * noise, 63 / 64)
    law, reason = fit_power_law(points, confidence=0.95, reference=np.inf)
    assert reason == ""
    assert law.exponent == pytest.approx(0.8, abs=1e-7)
    assert law.coefficient == pytest.approx(7.0, rel=1e-6)
    np.testing.assert_allclose(law.removable(trades), removable, rtol=1e-6)
    assert (law.removable_se(trades) > 0).all()


def test_exact_points_against_a_reference_give_the_exact_law():
    trades = np.array([4.0, 8.0, 16.0, 64.0])
    removable = 7.0 * (trades**-0.8 - 128.0**-0.8)
    noise = 1 + 0.01 * np.random.default_rng(1).standard_normal((64, 4))
    points = Points(("a", "b", "c", "d"), trades, removable, removable * noise, 1 / 63)
    law, _ = fit_power_law(points, confidence=0.95, reference=128.0)
    assert law.exponent == pytest.approx(0.8, abs=1e-7)
    assert law.coefficient == pytest.approx(7.0, rel=1e-6)


def test_price_history_law_is_measured_against_every_look():
    rng = np.random.default_rng(2)
    picks = rng.integers(0, 3000, (200, 3000))
    names = [f"every {128 // n} looks" for n in TRADES]
    paths = 3000
    steps = rng.standard_normal((128, paths))
    # Each look adds a martingale step; a schedule misses a part of variance 9/N - 9/128.
    lag = np.stack([np.sqrt(9.0 / n - 9.0 / 128) * rng.standard_normal(paths) for n in TRADES])
    seen = np.broadcast_to(np.sqrt(1 + 9.0 / 128) * steps.sum(axis=0) / np.sqrt(128), lag.shape)
    detail = np.stack([seen, lag, -np.ones_like(lag)], axis=1)[:, None]
    ledger = build_ledger(
        detail,
        components=("vol_gap_seen", "lag", "costs.spread"),
        schedules=names,
        resamples=picks,
        reference=5,
        engine="replay",
    )
    f = studied(ledger)
    assert f.law.reference == 128
    assert abs(f.law.exponent - 1.0) < 4 * f.law.exponent_se
    assert (names[-1], "is what removable variance is measured against") in f.law.left_out
    assert np.isnan(f.asymptotic_discretisation).all()
    hidden = studied(ledger, hidden=(names[-1],))
    assert hidden.law.exponent == pytest.approx(f.law.exponent, rel=1e-12)
    assert len(hidden.trades) == 5


def test_points_left_out_carry_their_reasons():
    names = ("entry only", "every 4", "every 4 again", "every 5", "every 2", "every 1")
    trades = (1, 4, 4, 6, 8, 16)
    ledger = lawful_ledger(3, trades=trades, names=names, paths=4000)
    law = studied(ledger, trades, equal=[1, 1, 1, 0, 1, 1]).law
    assert dict(law.left_out) == {
        "entry only": "does not rebalance",
        "every 4 again": "as many intervals as every 4",
        "every 5": "intervals do not divide the life",
    }
    assert law.points == ("every 4", "every 2", "every 1")


def test_too_few_points_give_a_reason_not_a_law():
    f = studied(lawful_ledger(3, trades=(4, 8)), (4, 8))
    assert f.law is None
    assert "needs 3 equal-interval schedules, 2 can be used" in f.reason


def test_points_lost_in_noise_neither_help_nor_harm():
    trades = (4, 8, 16, 10**6, 10**7)
    ledgers = [lawful_ledger(seed, trades=trades) for seed in range(40)]
    assert min(variances(ledger, np.arange(5)).value.removable.min() for ledger in ledgers) < 0
    laws = [studied(ledger, trades, looks=64).law for ledger in ledgers]
    scores = np.array([(law.exponent - 1.0) / law.exponent_se for law in laws])
    assert abs(scores.mean()) < 4 / np.sqrt(40)
    assert (np.abs(scores) < 3).sum() >= 38


def test_variance_that_does_not_fall_has_no_law():
    flat = lawful_ledger(4, exponent=0.0)
    f = studied(flat)
    assert f.law is None
    assert "does not fall" in f.reason


def test_without_resamples_there_is_no_law():
    f = studied(lawful_ledger(4, groups=0))
    assert f.law is None
    assert "fewer than eight resamples" in f.reason


def test_schedules_without_a_clock_are_not_rows():
    ledger = lawful_ledger(5)
    rules = compiled(ledger.schedules[:4], TRADES[:4])
    f = frequency(ledger, np.arange(6), variances(ledger, np.arange(6)), compiled=rules, settings=SETTINGS)
    np.testing.assert_array_equal(f.rows, np.arange(4))


def test_cost_growth_is_the_local_slope_in_logs():
    f = studied(lawful_ledger(6))
    assert np.isnan(f.cost_exponent[0])
    scores = (f.cost_exponent[1:] - 0.5) / f.cost_exponent_se[1:]
    assert (np.abs(scores) < 4).all()
    assert (f.cost_exponent_se[1:] < 0.02).all()


def test_hedged_calls_follow_the_law_and_its_asymptotic_line():
    # Boyle and Emanuel (1980), J. Financial Economics 8; Bertsimas, Kogan and Lo (2000), J. Financial Economics 55:
    # hedged at the realised vol the variance falls like 1/N.
    trades = (8, 16, 32, 64)
    hedged = hedge_calls(trades=trades, looks=64, paths=20_000, seed=3, realised=0.2, vol=0.2)
    ledger = build_ledger(hedged.components[:, None], components=HEDGED, groups=64)
    f = studied(ledger, trades)
    # At finite N the local exponent is below one by about 0.02 (the N^-1/2 correction of Kamal and Derman's limit).
    assert abs(f.law.exponent - 0.98) < 4 * f.law.exponent_se + 0.02
    v = variances(ledger, np.arange(4))
    ratio = v.value.discretisation[-1] / f.asymptotic_discretisation[-1]
    assert ratio == pytest.approx(1.0, abs=0.05)
    # Hedged and marked at the realised vol, the floor is the difference of two conventions for the variance of a look.
    assert v.std_floor[0] < 0.01 * v.std_gross[-1]
    np.testing.assert_allclose(f.asymptotic_discretisation * trades, f.asymptotic_discretisation[0] * trades[0])


def test_unequal_looks_have_no_asymptotic_line():
    trades = (4, 8, 16)
    hedged = hedge_calls(trades=trades, looks=16, paths=400, seed=3)
    ledger = build_ledger(hedged.components[:, None], components=HEDGED, groups=16)
    settings = Settings("costs", "std", 0.5, None, 0.95, 0.25, equal_looks=False)
    assert np.isnan(studied(ledger, trades, settings=settings).asymptotic_removable).all()
    assert (studied(ledger, trades).asymptotic_removable > 0).all()


def test_floor_and_hedge_vol_mismatch_move_the_removable_line():
    # Hedged at 20 % while 30 % is realised, removable variance stands well below the variance of the discretisation.
    hedged = hedge_calls(trades=(16, 32, 64), looks=64, paths=20_000, seed=5, realised=0.3, vol=0.2)
    ledger = build_ledger(hedged.components[:, None], components=HEDGED, groups=64)
    f = studied(ledger, (16, 32, 64))
    v = variances(ledger, np.arange(3))
    assert v.value.removable[-1] < 0.8 * v.value.discretisation[-1]
    assert f.asymptotic_removable[-1] == pytest.approx(v.value.removable[-1], rel=0.05)
