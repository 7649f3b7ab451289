"""What the exact engine and the laws say beside a simulated ledger."""

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from simulate_cases import one_option, random_experiment

import hedgesim
from hedgesim.book import exposure, gross_value
from hedgesim.costs import CostTerms
from hedgesim.engine.exact import exact
from hedgesim.engine.simulate import simulate
from hedgesim.errors import ExperimentError
from hedgesim.market import frozen
from hedgesim.schedules import Schedule, compile_schedules
from hedgesim.study import Settings
from hedgesim.study.distribution import distribution
from hedgesim.study.exactness import SCALED_QUANTILES, exactly_scaled, exactness
from hedgesim.study.findings import laws_off

CONFIGS = Path(__file__).parents[1] / "configs"
SETTINGS = Settings(mean="costs", risk="std", cost_of_risk=0.2, limit=None, confidence=0.95, years=0.25, tolerance=1e-5)
RULES = (Schedule("every look", "looks", 1), Schedule("every 4 looks", "looks", 4), Schedule("entry only", "never"))
SPREAD = CostTerms(half_spread=frozen([1.5e-3]), per_unit=frozen([0.01]), per_trade=frozen([0.0]))


def call(**changes):
    """Short calls off their realised vol, with costs, over 48 looks."""
    terms = {"spot": 100.0, "strike": 102.0, "years": 0.25, "looks": 48, "rate": 0.03, "vol": 0.22}
    terms |= {"schedules": RULES, "realised": 0.2, "drift": 0.06, "units": -1000.0, "costs": SPREAD}
    return one_option(**(terms | changes))


def told(case, *, count=2000, settings=SETTINGS):
    """Exactness of a case, and the distribution it stands beside."""
    ledger = simulate(**case, count=count)
    shown = np.arange(len(ledger.schedules))
    figures = distribution(ledger, shown)
    return exactness(ledger, shown, figures, **case, settings=settings), figures


def at_premiums(case, shift):
    """The case with the premiums it takes at the mark taken at shifted vols instead."""
    book, market = case["book"], case["market"]
    taken = exposure(book, market, vol=book.mark_vol + shift).value / book.units
    return case | {"book": replace(book, premium=frozen(np.where(np.isnan(book.premium), taken, book.premium)))}


@pytest.fixture(scope="module")
def demo():
    """The demo at 20,000 paths."""
    return hedgesim.run(CONFIGS / "demo.yaml", overrides=["paths.count=20000"])


@pytest.fixture(scope="module")
def plain():
    return told(call())


def test_the_simulated_demo_lies_within_four_standard_errors(demo):
    # One of 14 normal scores exceeds 4 for less than one seed in a thousand.
    agreement = demo.study.exactness.agreement
    assert np.abs(agreement.z_mean).max() < 4
    assert np.abs(agreement.z_std).max() < 4
    frame = demo.schedules
    np.testing.assert_allclose(agreement.z_mean, (frame["mean"] - frame.exact_mean) / frame.mean_se, rtol=1e-12)
    np.testing.assert_allclose(agreement.z_std, (frame["std"] - frame.exact_std) / frame.std_se, rtol=1e-12)


def test_exact_columns_are_those_of_the_engine(demo):
    plan = demo.plan
    found = exact(
        market=plan.market, book=plan.book, grid=plan.grid, compiled=plan.compiled, source=plan.source, costs=plan.costs
    )
    figures = found.figures
    columns = {"exact_var_gross": figures.variance_gross, "exact_var_floor": figures.variance_floor}
    columns |= {"exact_removable": figures.removable, "exact_var_total": figures.variance}
    np.testing.assert_array_equal(demo.schedules.exact_mean, figures.mean)
    np.testing.assert_array_equal(demo.schedules.exact_std, figures.std)
    for name, values in columns.items():
        np.testing.assert_array_equal(demo.frequency[name], values)
    agreement = demo.study.exactness.agreement
    assert (agreement.std_error <= 1e-6 * agreement.std).all()


@pytest.mark.parametrize(("mean", "risk"), [("costs", "std"), ("total", "std"), ("costs", "variance")])
def test_the_curve_is_the_engine_at_every_number_of_trades_and_its_optimum_the_smallest(mean, risk):
    case = call()
    cost_of_risk = 0.2 if risk == "std" else 1e-4
    curve = told(case, settings=replace(SETTINGS, mean=mean, risk=risk, cost_of_risk=cost_of_risk))[0].curve
    every = compile_schedules(
        [Schedule(f"{n} trades", "trades", float(n)) for n in range(1, 49)], case["grid"], np.array([48])
    )
    figures = exact(**(case | {"compiled": every}), tolerance=1e-5).figures
    cost = -figures.mean_costs if mean == "costs" else -figures.mean
    objective = cost + cost_of_risk * (figures.std if risk == "std" else figures.variance)
    at = curve.trades - 1
    assert curve.trades[0] == 1
    assert curve.trades[-1] == 48
    scale = figures.std[at]
    assert (np.abs(curve.mean_cost - cost[at]) < 2e-4 * scale).all()
    assert (np.abs(curve.std - figures.std[at]) < 2e-4 * scale).all()
    assert (np.abs(curve.removable - figures.removable[at]) < 4e-4 * scale**2).all()
    np.testing.assert_allclose(curve.objective, objective[at], rtol=1e-3)
    assert curve.best == np.argmin(objective[at])
    # Neither end: the case has something to weigh.
    assert 0 < curve.best < len(at) - 1


def test_sensitivities_are_optima_of_changed_experiments():
    case = call()
    curve = told(case)[0].curve
    changed = {
        "realised vol -2 points": {"realised": 0.18},
        "realised vol +2 points": {"realised": 0.22},
        "costs x 0.5": {
            "costs": CostTerms(*(0.5 * x for x in (SPREAD.half_spread, SPREAD.per_unit, SPREAD.per_trade)))
        },
        "costs x 2": {"costs": CostTerms(*(2.0 * x for x in (SPREAD.half_spread, SPREAD.per_unit, SPREAD.per_trade)))},
        "drift -5 points": {"drift": 0.01},
        "drift +5 points": {"drift": 0.11},
    }
    found = told(case)[0].sensitivities
    assert [s.change for s in found] == list(changed)
    for s in found:
        other = told(call(**changed[s.change]))[0].curve
        assert s.objective == pytest.approx(other.objective[other.best], rel=1e-3)
        # Points whose objectives are closer than the tolerance may change places.
        assert abs(other.objective[list(other.trades).index(s.best_trades)] / other.objective[other.best] - 1) < 1e-3
    by_name = {s.change: s.best_trades for s in found}
    assert by_name["costs x 2"] < curve.trades[curve.best] < by_name["costs x 0.5"]


def test_premiums_at_the_break_even_vol_leave_a_mean_of_zero(plain):
    case, rows = call(), plain[0].break_even
    assert [row.schedule for row in rows] == [rule.name for rule in RULES]
    for i, row in enumerate(rows):
        mean = exact(**at_premiums(case, row.vol_shift), tolerance=1e-5).figures.mean[i]
        assert abs(mean) < 1e-6 * gross_value(case["book"], case["market"])
        assert row.sold_vol == pytest.approx(0.22 + row.vol_shift, abs=1e-12)
        assert row.amount == -plain[0].agreement.mean[i]


def test_premiums_at_the_cushion_leave_the_asked_mean_over_std(plain):
    case = call()
    for i, row in enumerate(plain[0].break_even):
        figures = exact(**at_premiums(case, row.cushion), tolerance=1e-5).figures
        assert figures.mean[i] / figures.std[i] == pytest.approx(SETTINGS.cost_of_risk, abs=1e-6)
        # Short options ask for more than break-even.
        assert row.cushion > row.vol_shift
        assert row.cushion_amount == pytest.approx(0.2 * figures.std[i] + row.amount, rel=1e-9)


def test_a_book_is_sold_at_shifted_marks_and_given_premiums_stay():
    case = random_experiment(5, underlyings=1)
    rows = told(case)[0].break_even
    known = [(i, row) for i, row in enumerate(rows) if not row.note]
    assert known
    assert np.isnan(case["book"].premium).any()
    assert not np.isnan(case["book"].premium).all()
    for i, row in known:
        mean = exact(**at_premiums(case, row.vol_shift), tolerance=1e-5).figures.mean[i]
        assert abs(mean) < 1e-6 * gross_value(case["book"], case["market"])


def test_break_even_is_in_currency_only_with_little_net_vega_or_given_premiums():
    case = call()
    given = told(at_premiums(case, 0.0))[0].break_even[0]
    assert np.isnan([given.vol_shift, given.sold_vol, given.cushion]).all()
    assert given.note == "in currency only: every premium is given"
    assert given.amount == pytest.approx(told(case)[0].break_even[0].amount, rel=1e-9)
    book = case["book"]
    # A call against a put of the same terms: the vegas cancel.
    twice = {n: np.repeat(getattr(book, n), 2) for n in book.__dataclass_fields__ if n != "initial_units"}
    flat = replace(book, **twice | {"units": np.array([-1000.0, 950.0]), "is_call": np.array([True, False])})
    row = told(case | {"book": flat})[0].break_even[0]
    assert np.isnan([row.vol_shift, row.cushion]).all()
    assert row.note == "in currency only: net vega is under a tenth of gross vega"
    assert np.isfinite([row.amount, row.cushion_amount]).all()


def test_a_shortfall_has_no_exact_objective_and_says_so():
    found = told(call(), settings=replace(SETTINGS, risk="es975"))[0]
    assert found.curve.best == -1
    assert np.isnan(found.curve.objective).all()
    assert "expected shortfall has no exact figure" in found.curve.note
    assert found.sensitivities == ()
    assert np.isnan(found.break_even[0].cushion)
    assert found.break_even[0].note == "no cushion: the risk is not the standard deviation"


def test_scaled_quantiles_are_those_of_totals_moved_to_the_exact_mean_and_std():
    case = call()
    found, figures = told(case, count=5000)
    totals = simulate(**case, count=5000).totals
    spread = found.agreement.std / totals.std(axis=1, ddof=1)
    moved = found.agreement.mean[:, None] + (totals - totals.mean(axis=1)[:, None]) * spread[:, None]
    low = np.quantile(moved, [0.01, 0.05], axis=1).T
    shortfall = -np.sort(moved, axis=1)[:, :125].mean(axis=1)
    scaled = exactly_scaled(figures, found.agreement)
    np.testing.assert_allclose(scaled, np.column_stack([low, shortfall]), rtol=1e-9)


def test_the_gain_is_measured_with_enough_paths_only():
    few = told(call(), count=12_799)[0]
    assert few.gain is None
    assert few.notes == ("the gain of exact scaling is not measured: that takes 12,800 paths",)
    enough = told(call(), count=12_800)[0]
    assert enough.gain.quantile_ratio.shape == (3, len(SCALED_QUANTILES))
    assert enough.gain.note == "measured over 64 groups of 200 paths"
    assert enough.notes == ()


def test_the_gain_of_normal_totals_is_the_known_one():
    # Of normal totals a quantile scaled to known mean and std has the variance of the standardised one:
    # n Var = p(1-p)/phi^2 - 1 - z^2/2 against p(1-p)/phi^2 (Bahadur 1966, Ann. Math. Statist. 37, from memory).
    case = call(schedules=(Schedule("entry only", "never"),))
    ledger = simulate(**case, count=400_000)
    figures = exact(**case, tolerance=1e-5).figures
    totals = figures.mean[:, None] + figures.std[:, None] * np.random.default_rng(5).standard_normal((1, 400_000))
    normal = replace(ledger, totals=totals)
    shown = np.arange(1)
    found = exactness(normal, shown, distribution(normal, shown), **case, settings=SETTINGS).gain
    for k, (p, z) in enumerate([(0.01, -2.326348), (0.05, -1.644854)]):
        plain = p * (1 - p) * 2 * np.pi * np.exp(z * z)
        known = plain / (plain - 1 - z * z / 2)
        assert abs(found.quantile_ratio[0, k] - known) < 4 * found.ratio_error[0, k]


def test_correlated_names_are_refused_in_a_note_and_have_no_exact_figures():
    result = hedgesim.run(CONFIGS / "two_names.yaml", overrides=["paths.count=2000"])
    found = result.study.exactness
    assert (found.agreement, found.curve, found.gain, found.break_even) == (None, None, None, ())
    assert "uncorrelated" in found.reason
    assert [note for note in result.plan.notes if found.reason in note] == [
        f"exact figures are missing - {found.reason}"
    ]
    columns = ["exact_mean", "exact_std", *(f"{name}_exactly_scaled" for name in SCALED_QUANTILES)]
    assert result.schedules[columns].isna().all().all()
    assert result.curve.empty
    assert result.break_even.empty
    assert {law.name for law in found.laws} >= {"granularity", "leading-order cost"}
    assert result.findings["exact"]["reason"] == found.reason


def test_a_history_has_nothing_exact():
    result = hedgesim.run(CONFIGS / "history.yaml")
    assert result.study.exactness is None
    assert result.findings["exact"] is None
    assert result.schedules["exact_mean"].isna().all()
    assert "exact" not in result.seconds


def test_findings_say_what_the_engine_found(demo):
    found, told = demo.findings["exact"], demo.study.exactness
    assert json.loads(json.dumps(found, allow_nan=False)) == found
    assert found["tolerance"] == 1e-6
    assert [row["schedule"] for row in found["schedules"]] == list(demo.study.schedules)
    assert [row["std"]["value"] for row in found["schedules"]] == told.agreement.std.tolist()
    assert found["optimum"]["trades"] == told.curve.trades[np.argmin(told.curve.objective)]
    assert [law["name"] for law in found["laws"]] == [law.name for law in told.laws]
    pd.testing.assert_series_equal(demo.curve["N"], pd.Series(told.curve.trades, name="N"))
    assert demo.break_even["amount"].tolist() == (-told.agreement.mean).tolist()


def test_laws_are_held_against_what_was_found_for_the_chosen_schedule(demo):
    off, best = laws_off(demo.study), demo.study.choice.chosen
    laws = {law.name: law for law in demo.study.exactness.laws}
    trades = demo.study.frequency.trades[best]
    figures = demo.study.exactness.agreement.figures
    cost = laws["leading-order cost"].curve(trades) / -figures.mean_costs[best]
    assert off["leading-order cost"] == pytest.approx(float(cost), rel=1e-12)
    floor = laws["continuous hedging"].curve(trades) / figures.variance_floor[best]
    assert off["continuous hedging"] == pytest.approx(float(floor), rel=1e-12)
    sampled = laws["granularity"].curve(trades) / demo.study.variances.value.discretisation[best]
    assert off["granularity"] == pytest.approx(float(sampled), rel=1e-12)
    assert np.isnan(off["two-term law"])


def test_the_tolerance_of_the_file_reaches_the_engine(demo):
    loose = hedgesim.run(CONFIGS / "demo.yaml", overrides=["paths.count=200", "study.tolerance=1e-3"])
    assert loose.study.settings.tolerance == 1e-3
    agreement, tight = loose.study.exactness.agreement, demo.study.exactness.agreement
    assert (np.abs(agreement.std - tight.std) <= 1e-3 * tight.std).all()
    assert (agreement.std != tight.std).any()


@pytest.mark.parametrize("wrong", ["0", "1e-11", "0.1", "tight"])
def test_a_tolerance_out_of_bounds_is_refused(wrong):
    with pytest.raises(ExperimentError, match=r"study\.tolerance"):
        hedgesim.run(CONFIGS / "demo.yaml", overrides=["paths.count=200", f"study.tolerance={wrong}"])
