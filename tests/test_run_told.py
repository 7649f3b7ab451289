"""What a run says in words where figures would mislead: one life, the finest schedule, rounding, a bent law, a shared look."""

import json
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from ledger_builder import HEDGED, build_ledger, compiled, hedge_calls

import hedgesim
from hedgesim.experiment.loader import dump_experiment, load_experiment
from hedgesim.experiment.resolve import Replay, resolve
from hedgesim.experiment.run import run_file, summary
from hedgesim.study import Settings, study
from hedgesim.study.money import money_with_error

CONFIGS = Path(__file__).parents[1] / "configs"
HISTORY = f"""\
title: Calls on a price history
market: {{rate: 2%, underlyings: {{TESSOVAR: {{yield: 0.5%}}}}}}
book:
  - {{type: call, strike: 100%, expiry: 21d, quantity: -1000}}
paths:
  source: prices
  file: {CONFIGS / "tessovar_closes.csv"}
  time: date
  series: {{TESSOVAR: {{price: close, mark_vol: {{column: iv, unit: percent}}}}}}
  inceptions: {{every: 5d}}
schedules: [{{every: 1d}}, {{every: 7d}}, {{every: never}}]
costs: {{half_spread: 3bp}}
"""
SIMULATED = """\
title: One call
market: {underlyings: {CORVANE: {spot: 100, mark_vol: 22%}}}
book:
  - {type: call, strike: 105, expiry: 21d, quantity: -500}
paths: {source: gbm, realised_vol: 19%, looks_per_day: 4, count: 2000}
schedules: [{every: 1d}, {at: [open, close]}, {at: [close]}]
"""


@pytest.fixture(scope="module")
def files(tmp_path_factory):
    folder = tmp_path_factory.mktemp("experiments")
    (folder / "history.yaml").write_text(HISTORY)
    (folder / "simulated.yaml").write_text(SIMULATED)
    return folder


@pytest.mark.parametrize("risk", ["std", "es975", "variance"])
def test_one_life_declares_no_schedule_best(files, risk):
    result = hedgesim.run(
        files / "history.yaml", overrides=["paths.inceptions=once", f"study.risk={risk}", "study.limit=1"]
    )
    frame = result.schedules.set_index("schedule")
    assert result.sentence.startswith(
        "One life gives no distribution, so that no schedule is called best: the P&L runs"
    )
    assert "n/a" not in "\n".join(summary(result)) + json.dumps(result.findings)
    assert "nan" not in "\n".join(summary(result)).lower()
    assert not frame["chosen"].any()
    for name in ("std", "std_se", "mean_se", "risk", "risk_se", "objective", "removable", "es975_se"):
        assert frame[name].isna().all(), name
    choice = result.findings["choice"]
    assert (choice["schedule"], choice["tied"], choice["limit_met"]) == (None, [], None)
    assert result.findings["std"]["value"] is None
    assert result.findings["mean"]["value"] is None
    assert result.findings["warnings"] == [
        "one life gives no distribution: no risk, no errors, and no choice between the schedules"
    ]
    # The outcomes that the sentence names are the totals of the ledger.
    worst = result.ledger.totals[:, 0][: len(frame)].min()
    assert frame["mean"].min() == pytest.approx(worst)
    assert f"EUR {worst:.2f}" in result.sentence or f"EUR {worst / 1e3:.2f}k" in result.sentence


def test_the_pack_of_one_life_shows_no_missing_figures(files, tmp_path):
    pypdf = pytest.importorskip("pypdf")
    folder = run_file(files / "history.yaml", out=tmp_path / "o", overrides=["paths.inceptions=once"], quiet=True)
    pages = [page.extract_text() for page in pypdf.PdfReader(folder / "report.pdf").pages]
    assert not [k for k, text in enumerate(pages) if "n/a" in text or "nan" in text.split()]
    assert "no schedule is called best" in " ".join(pages[0].split())
    written = pd.read_csv(folder / "schedules.csv", keep_default_na=False, dtype=str)
    assert (written[["std", "std_se", "mean_se", "removable"]] == "").all().all()


def test_one_life_under_one_schedule_tells_its_outcome(files):
    result = hedgesim.run(files / "history.yaml", overrides=["paths.inceptions=once", "schedules=[{every: 7d}]"])
    assert "no schedule is called best: every 7d ends at EUR " in result.sentence


def test_the_finest_schedule_on_prices_is_called_so(files):
    fine = hedgesim.run(files / "history.yaml", overrides=["study.cost_of_risk=100"])
    assert fine.findings["choice"]["schedule"] == "every 1d"
    assert "; it is the finest schedule that the prices allow;" in fine.sentence
    assert "0.0 %" not in fine.sentence
    rare = hedgesim.run(files / "history.yaml", overrides=["study.cost_of_risk=0"])
    assert rare.findings["choice"]["schedule"] == "entry only"
    assert "trading at every look would change its variance before costs by -" in rare.sentence


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [
        (58.0, 3e-13, "58.00"),
        (-85_312, 1e-6, "-85.3k"),
        (0.0123, 1e-14, "0.0123"),
        (58.0, 6e-8, "58.00000000 (±0.00000006)"),
        (0.0, 0.004, "0.000 (±0.004)"),
    ],
)
def test_an_error_of_rounding_size_counts_as_none(value, error, text):
    assert money_with_error(value, error) == text


def test_a_bent_law_is_told_in_a_desk_s_words_once():
    trades = (1, 2, 4, 8, 16, 32)
    names = tuple(f"{n} trades" for n in trades)
    hedged = hedge_calls(trades=trades, looks=32, paths=60_000, seed=4)
    ledger = build_ledger(hedged.components[:, None], components=HEDGED, schedules=names, groups=64)
    asked = Settings(mean="costs", risk="std", cost_of_risk=0.5, limit=None, confidence=0.95, years=0.25)
    result = study(ledger, compiled(names, trades), asked)
    assert result.frequency.law is not None
    assert result.frequency.law.misfit
    told = [w for w in result.warnings if "single power of the number of trades" in w]
    assert told == [
        "at this precision the variances bend away from a single power of the number of trades, which holds for many "
        "trades only: the error of the exponent is widened"
    ]


def test_check_counts_positions_in_words(files):
    command = [sys.executable, "-c", "from hedgesim.cli import main; main()", "check", str(files / "simulated.yaml")]
    one = subprocess.run(command, capture_output=True, text=True, check=True)
    assert ", 1 position\n" in one.stdout
    four = subprocess.run([*command[:-1], str(CONFIGS / "demo.yaml")], capture_output=True, text=True, check=True)
    assert ", 4 positions\n" in four.stdout


def test_the_seed_of_a_price_history_moves_its_errors_only(files):
    one, two, again = (hedgesim.run(files / "history.yaml", overrides=[f"paths.seed={seed}"]) for seed in (0, 5, 0))
    pd.testing.assert_frame_equal(one.schedules, again.schedules, check_exact=True)
    for name in ("mean", "std", "es975", "cost_mean"):
        assert one.schedules[name].tolist() == two.schedules[name].tolist()
    assert (one.schedules["std_se"] != two.schedules["std_se"]).all()
    np.testing.assert_allclose(one.schedules["std_se"], two.schedules["std_se"], rtol=0.5)


def test_the_seed_of_a_price_history_is_1_unless_given_and_stands_in_the_findings(files, tmp_path):
    loaded = load_experiment(files / "history.yaml")
    plan = resolve(loaded)
    assert isinstance(plan, Replay)
    assert plan.seed == 1
    assert "seed: 1\n" in dump_experiment(loaded.experiment)
    for seed in (None, 0):
        given = [] if seed is None else [f"paths.seed={seed}"]
        folder = run_file(
            files / "history.yaml",
            out=tmp_path / str(seed),
            overrides=[*given, "paths.inceptions.every=21d"],
            quiet=True,
        )
        assert json.loads((folder / "findings.json").read_text())["seed"] == (1 if seed is None else seed)


def test_a_schedule_at_the_open_is_noted_where_open_and_close_are_one_look(files):
    simulated = load_experiment(files / "simulated.yaml")
    plan = resolve(simulated)
    assert plan.notes == (
        "'at open and close' trades as `every: 1d` does: without overnight variance an open is the close before it",
    )
    np.testing.assert_array_equal(plan.compiled.trades_at[0], plan.compiled.trades_at[1])
    overnight = resolve(load_experiment(files / "simulated.yaml", ["paths.overnight=20%"]))
    assert overnight.notes == ()
    assert overnight.compiled.trades_at[1].sum() > overnight.compiled.trades_at[0].sum()
    prices = resolve(load_experiment(files / "history.yaml", ["schedules.1={at: [open]}"]))
    assert prices.notes == ("'at open' trades at every price: each is both the open and the close of its day",)


def test_an_unknown_risk_is_not_compared_with_a_limit():
    ledger = build_ledger(np.array([[[[1.0]], [[2.0]]]]).reshape(2, 1, 1, 1), components=("lag",), groups=0)
    ledger = replace(ledger, trades=np.array([2.0, 9.0]))
    asked = Settings(mean="costs", risk="es975", cost_of_risk=0.5, limit=0.1, confidence=0.95, years=0.25)
    choice = study(ledger, compiled(("s0", "s1"), (2, 4)), asked).choice
    assert not choice.comparable
    assert choice.chosen == 1
    assert choice.limit_met
    assert not choice.efficient.any()
    assert np.isnan(choice.risk).all()
