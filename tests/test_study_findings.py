"""The whole study: findings, the sentence, the tables and their contract; amounts of money."""

import csv
import json

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from ledger_builder import HEDGED, build_ledger, compiled, hedge_calls

from hedgesim.study import Settings, study
from hedgesim.study.findings import cost_of_risk_words, headline, sentence
from hedgesim.study.money import money, money_with_error, percent
from hedgesim.study.studies import StudyError
from hedgesim.study.tables import breakdown_table, frequency_table, price_of_risk_table, schedules_table, write_tables

TRADES = (4, 8, 16, 32)
NAMES = tuple(f"every {32 // n} looks" for n in TRADES)

SCHEDULES = [
    "schedule",
    "engine",
    "trades",
    "turnover",
    "mean",
    "mean_se",
    "std",
    "std_se",
    "skew",
    "kurtosis",
    "p01",
    "p05",
    "p50",
    "p95",
    "p99",
    "es95",
    "es95_se",
    "es975",
    "cost_mean",
    "std_gross",
    "std_floor",
    "removable",
    "delta_mean",
    "delta_p99",
    "exact_mean",
    "exact_std",
]
BREAKDOWN = ["schedule", "underlying", "component", "mean", "mean_se", "std", "share"]
FREQUENCY = [
    "schedule",
    "interval_years",
    "trades",
    "var_discretisation",
    "var_floor",
    "var_costs",
    "cov_discretisation_floor",
    "cov_discretisation_costs",
    "cov_floor_costs",
    "var_gross",
    "removable",
    "var_total",
]


def asked(**changes):
    base = {"mean": "costs", "risk": "std", "cost_of_risk": 0.5, "limit": None, "confidence": 0.95, "years": 0.25}
    return Settings(**{**base, "currency": "EUR", **changes})


@pytest.fixture(scope="module")
def two_underlyings():
    one, two = (
        hedge_calls(trades=TRADES, looks=32, paths=4000, seed=s, units=u, ticket=0.1) for s, u in ((1, -1e3), (2, -4e2))
    )
    detail = np.stack([one.components, two.components], axis=1)
    return build_ledger(detail, components=HEDGED, schedules=NAMES, underlyings=("CORVANE", "TALLOW"))


@pytest.fixture(scope="module")
def result(two_underlyings):
    return study(two_underlyings, compiled(NAMES, TRADES), asked())


@pytest.fixture(scope="module")
def history():
    rng = np.random.default_rng(7)
    paths = 600
    lag = np.array([3.0, 2.0, 1.0, 0.0])[:, None] * rng.standard_normal((4, paths))
    seen = np.broadcast_to(4 * rng.standard_normal(paths), lag.shape)
    cost = -np.array([1.0, 2.0, 3.0, 4.0])[:, None] * (1 + 0.1 * rng.standard_normal((4, paths)))
    return build_ledger(
        np.stack([seen, lag, cost], axis=1)[:, None],
        components=("vol_gap_seen", "lag", "costs.spread"),
        schedules=NAMES,
        resamples=rng.integers(0, paths, (100, paths)),
        reference=3,
        engine="replay",
        below_look=0.5,
    )


def test_written_tables_keep_the_contract(result, tmp_path):
    written = write_tables(result, tmp_path)
    assert {p.name for p in written} == {"schedules.csv", "breakdown.csv", "frequency.csv", "price_of_risk.csv"}
    s, b, f = (pd.read_csv(tmp_path / f"{n}.csv") for n in ("schedules", "breakdown", "frequency"))
    assert list(s.columns[: len(SCHEDULES)]) == SCHEDULES
    assert list(b.columns) == BREAKDOWN
    assert list(f.columns[: len(FREQUENCY)]) == FREQUENCY
    assert s["schedule"].is_unique
    assert (s.std_se > 0).all()
    assert ((s.p01 <= s.p05) & (s.p05 <= s.p50) & (s.p50 <= s.p95) & (s.p95 <= s.p99)).all()
    for row in s.itertuples():
        mine = b[(b.schedule == row.schedule) & (b.underlying == "all")].set_index("component")
        single = mine[[not c.startswith("costs.") and c != "total" for c in mine.index]]
        assert single["mean"].sum() == pytest.approx(row.mean, rel=1e-9)
        assert single["share"].sum() == pytest.approx(1.0, abs=1e-9)
        assert mine.loc["total", "std"] == pytest.approx(row.std, rel=1e-9)
        assert -mine.loc["costs", "mean"] == pytest.approx(row.cost_mean, rel=1e-12)
    added = f.var_discretisation + f.var_floor + f.var_costs
    added += 2 * (f.cov_discretisation_floor + f.cov_discretisation_costs + f.cov_floor_costs)
    np.testing.assert_allclose(added, f.var_total, rtol=1e-9)
    np.testing.assert_allclose(f.var_total, s["std"] ** 2, rtol=1e-9)


def test_floats_are_written_to_the_last_bit(result, tmp_path):
    write_tables(result, tmp_path)
    table = schedules_table(result)
    with (tmp_path / "schedules.csv").open(newline="") as file:
        back = list(csv.DictReader(file))
    for name in table.columns[table.dtypes == np.float64]:
        assert [float(row[name] or "nan") for row in back] == pytest.approx(
            table[name].tolist(), rel=0, abs=0, nan_ok=True
        )


def test_tables_cover_every_underlying(result):
    table = breakdown_table(result)
    assert set(table.underlying) == {"CORVANE", "TALLOW", "all"}
    means = table[table.component == "total"].pivot(index="schedule", columns="underlying", values="mean")
    np.testing.assert_allclose(means["CORVANE"] + means["TALLOW"], means["all"], rtol=1e-9)


def test_frequency_trades_are_intervals_and_schedule_trades_are_counted(result, two_underlyings):
    np.testing.assert_array_equal(frequency_table(result).trades, TRADES)
    np.testing.assert_array_equal(schedules_table(result).trades, two_underlyings.trades)


def test_price_table_runs_from_most_risk_to_least(result):
    table = price_of_risk_table(result)
    assert table.risk.is_monotonic_decreasing
    assert table.mean_cost.is_monotonic_increasing
    assert table.best_from.iloc[0] == 0.0
    assert table.best_to.iloc[-1] == np.inf
    assert table.next_finer.iloc[:-1].tolist() == table.schedule.iloc[1:].tolist()


def test_exact_figures_stand_beside_the_estimates(result):
    exact = {NAMES[1]: {"exact_mean": 1.25, "exact_removable": 7.5}}
    s, f = schedules_table(result, exact=exact), frequency_table(result, exact=exact)
    assert s.exact_mean.tolist()[1] == 1.25
    assert np.isnan(s.exact_mean[0])
    assert f.exact_removable[1] == 7.5
    assert f.exact_var_gross.isna().all()


def test_hidden_schedules_appear_nowhere(two_underlyings, tmp_path):
    hidden = NAMES[3]
    result = study(two_underlyings, compiled(NAMES, TRADES), asked(hidden=(hidden,)))
    for path in write_tables(result, tmp_path):
        assert hidden not in path.read_text()
    assert hidden not in json.dumps(headline(result))


def test_price_history_leaves_the_floor_empty(history, tmp_path):
    write_tables(study(history, compiled(NAMES, TRADES), asked()), tmp_path)
    s, f = pd.read_csv(tmp_path / "schedules.csv"), pd.read_csv(tmp_path / "frequency.csv")
    assert s.std_floor.isna().all()
    assert f[["var_discretisation", "var_floor", "cov_floor_costs"]].isna().all().all()
    assert f.var_gross.notna().all()
    assert (f.below_look == 0.5).all()
    assert s.removable.iloc[3] == pytest.approx(0.0, abs=1e-12)


def test_findings_are_plain_json_with_errors_and_units(result, history):
    for one in (result, study(history, compiled(NAMES, TRADES), asked(risk="es975"))):
        found = json.loads(json.dumps(headline(one), allow_nan=False))
        assert {"value", "se", "unit"} == set(found["std"])
        assert found["choice"]["schedule"] in NAMES
        assert found["choice"]["mean_cost"]["unit"] == "EUR"
        assert found["removable"]["unit"] == "EUR^2"
        assert found["choice"]["confidence"] == 0.95
    assert headline(result)["below_look_variance_estimate"] is None


def test_findings_state_the_law_or_why_there_is_none(result, history):
    law = headline(result)["law"]
    assert law["exponent"]["value"] == result.frequency.law.exponent
    low, high = law["exponent_interval"]
    assert low < law["exponent"]["value"] < high
    short = study(history, compiled(NAMES[:2], TRADES[:2]), asked())
    assert headline(short)["law"]["exponent"] is None
    assert "equal-interval schedules" in headline(short)["law"]["reason"]


def test_sentence_carries_the_figures_of_the_choice(result):
    c, d = result.choice, result.distribution
    best = c.chosen
    text = sentence(result)
    assert text.startswith(f"Rebalance {result.schedules[best]}: it costs ")
    assert money_with_error(c.mean_cost[best], c.mean_cost_se[best], currency="EUR") in text
    assert money_with_error(d.std[best], d.std_se[best], currency="EUR") in text
    assert f"{percent(1 - result.variances.removable_share[best])} of whose variance" in text
    assert text.endswith("at 95 % confidence.")


def test_sentence_names_the_tied(two_underlyings):
    few = build_ledger(
        two_underlyings.detail[..., :64], components=HEDGED, schedules=NAMES, groups=0, underlyings=("A", "B")
    )
    result = study(few, compiled(NAMES, TRADES), asked())
    text = sentence(result)
    others = [n for i, n in enumerate(NAMES) if i != result.choice.chosen]
    assert all(name in text for name in others)
    assert "are statistically tied" in text
    assert "too few paths" in headline(result)["warnings"][0]


def test_sentence_without_floor_speaks_of_trading_at_every_look(history):
    result = study(history, compiled(NAMES, TRADES), asked(cost_of_risk=0.0))
    share = result.variances.removable_share[0]
    assert result.choice.chosen == 0
    assert f"trading at every look would change its variance before costs by {percent(-share)}" in sentence(result)


def test_sentence_on_an_unmet_limit_and_on_total_mean(two_underlyings):
    rules = compiled(NAMES, TRADES)
    assert "no schedule meets the risk limit" in sentence(study(two_underlyings, rules, asked(limit=1e-6)))
    total = study(two_underlyings, rules, asked(mean="total"))
    assert "it loses EUR" in sentence(total)
    assert any("luck included" in w for w in headline(total)["warnings"])


def test_cost_of_risk_in_words_gives_the_annual_hurdle(result):
    words = cost_of_risk_words(result)
    assert words.startswith("0.5 EUR of expected P&L given up for each EUR of standard deviation of P&L removed")
    assert "as an annual return-to-risk hurdle 1 (0.5 = 1 x sqrt(0.25))" in words


def test_smallest_ledger_is_studied_without_errors():
    ledger = build_ledger(np.array([[[[1.0, -2.0], [-0.1, -0.2]]]]), components=("lag", "costs.spread"), groups=0)
    result = study(ledger, compiled(("s0",), (4,)), asked())
    assert result.choice.chosen == 0
    assert headline(result)["std"]["se"] is None
    assert headline(result)["choice"]["risk"]["se"] is None


def test_nothing_to_show_is_refused(two_underlyings):
    with pytest.raises(StudyError, match="at least one schedule"):
        study(two_underlyings, compiled(NAMES, TRADES), asked(hidden=NAMES))


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (1_240_000, "1.24m"),
        (85_312, "85.3k"),
        (12.4, "12.40"),
        (-12_400, "-12.4k"),
        (999.96, "1.00k"),
        (999.4, "999.40"),
        (999_960, "1.00m"),
        (999_400, "999k"),
        (2.5e9, "2.50bn"),
        (0, "0.00"),
        (0.01234, "0.0123"),
        (-0.0, "0.00"),
        (float("nan"), "n/a"),
        (float("inf"), "n/a"),
    ],
)
def test_money(value, text):
    assert money(value) == text


def test_money_carries_its_currency():
    assert money(-85_312, currency="EUR") == "EUR -85.3k"


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [
        (12_412, 104, "12.4k (±0.1k)"),
        (85_312, 12, "85.31k (±0.01k)"),
        (85_312, 6_000, "85k (±6k)"),
        (85_312, 12_000, "85k (±12k)"),
        (216.05, 0.356, "216.1 (±0.4)"),
        (999_960, 400, "1.0000m (±0.0004m)"),
        (85_312, float("nan"), "85.3k"),
        (85_312, 0.0, "85.3k"),
        (12_412, 96, "12.4k (±0.1k)"),
    ],
)
def test_money_with_error(value, error, text):
    assert money_with_error(value, error) == text


@given(st.floats(-1e12, 1e12))
def test_money_is_right_to_three_figures(value):
    text = money(value)
    scale = {"k": 1e3, "m": 1e6, "b": 1e9}.get(text.rstrip("n")[-1], 1.0)
    back = float(text.rstrip("kmbn")) * scale
    assert back == pytest.approx(value, rel=0.0051, abs=1e-12)


@pytest.mark.parametrize(
    ("value", "text"), [(0.714, "71 %"), (0.0234, "2.3 %"), (-0.5, "-50 %"), (0.09996, "10 %"), (float("nan"), "n/a")]
)
def test_percent(value, text):
    assert percent(value) == text
