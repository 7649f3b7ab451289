"""Every experiment that ships is run to a folder, and the folder keeps the contract that other people's scripts rely on."""

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner

import hedgesim
from hedgesim.cli import main
from hedgesim.experiment.loader import load_experiment

CONFIGS = sorted((Path(__file__).parents[1] / "configs").glob("*.yaml"))
TOLERANCE = 1e-6

# Headings in their order: those of the contract, and after them the further ones.
HEADINGS = {
    "schedules": "schedule engine trades turnover mean mean_se std std_se skew kurtosis p01 p05 p50 p95 p99 es95 es95_se "
    "es975 cost_mean std_gross std_floor removable delta_mean delta_p99 exact_mean exact_std "
    "es975_se cost_mean_se std_gross_se std_floor_se removable_se removable_share removable_share_se day_std day_worst "
    "mean_cost mean_cost_se risk risk_se objective objective_se difference difference_se within_limit tied efficient "
    "chosen p01_exactly_scaled p05_exactly_scaled es975_exactly_scaled",
    "breakdown": "schedule underlying component mean mean_se std share",
    "frequency": "schedule interval_years trades var_discretisation var_floor var_costs cov_discretisation_floor "
    "cov_discretisation_costs cov_floor_costs var_gross removable var_total "
    "exact_var_gross exact_var_floor exact_removable exact_var_total asymptotic_var_discretisation "
    "asymptotic_var_discretisation_se asymptotic_removable asymptotic_removable_se var_discretisation_se var_floor_se "
    "var_costs_se cov_discretisation_floor_se cov_discretisation_costs_se cov_floor_costs_se var_gross_se removable_se "
    "var_total_se fitted law_removable law_removable_se cost_exponent cost_exponent_se below_look",
    "price_of_risk": "schedule mean_cost mean_cost_se risk risk_se next_finer price price_se best_from best_to "
    "within_limit tied",
}
# Only where the exact engine answers.
EXACT_HEADINGS = {
    "curve": "N mean_cost std var_gross var_floor removable objective",
    "break_even": "schedule vol_shift sold_vol amount cushion cushion_amount note",
}
SIMULATED = {"premium_edge", "revaluation", "vol_gap", "sampling", "lag", "remainder", "costs"}
REPLAYED = {"premium_edge", "revaluation", "vol_gap_seen", "vol_mark", "lag", "remainder", "costs"}
MAY_FOLLOW = {"jump", "funding"}
FIGURES_AT_LEAST = 4


@pytest.fixture(scope="module", params=CONFIGS, ids=lambda path: path.stem)
def finished(request, tmp_path_factory):
    """Result folder of one shipped experiment, few paths where they are simulated, and the experiment."""
    config = request.param
    experiment = load_experiment(config).experiment
    few = ["--set", "paths.count=3000"] if experiment.paths.source == "gbm" else []
    folder = tmp_path_factory.mktemp(config.stem) / "o"
    done = CliRunner().invoke(main, ["run", str(config), "--out", str(folder), *few])
    assert done.exit_code == 0, done.stderr
    assert done.stdout.endswith(f"{folder}\n")
    return folder, experiment


@pytest.fixture
def folder(finished) -> Path:
    return finished[0]


@pytest.fixture
def schedules(folder):
    return pd.read_csv(folder / "schedules.csv")


@pytest.fixture
def breakdown(folder):
    return pd.read_csv(folder / "breakdown.csv")


@pytest.mark.parametrize("config", CONFIGS, ids=lambda path: path.stem)
def test_every_experiment_checks(config):
    command = [sys.executable, "-c", "from hedgesim.cli import main; main()", "check", str(config)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert (done.returncode, done.stderr) == (0, "")
    experiment = load_experiment(config).experiment
    assert done.stdout.startswith(f"{experiment.title}\n")
    for word in ("forward", "net delta", "net gamma", "net vega", *experiment.names):
        assert word in done.stdout
    for rule in experiment.schedules:
        assert f"\n  {rule.name} " in done.stdout


def answers_exactly(experiment):
    return experiment.paths.source == "gbm" and not experiment.market.correlation


def test_every_file_of_the_contract_is_there(finished):
    folder, experiment = finished
    exact = {f"{name}.csv" for name in EXACT_HEADINGS} if answers_exactly(experiment) else set()
    assert {path.name for path in folder.iterdir()} == {
        "report.pdf",
        "figures",
        "schedules.csv",
        "breakdown.csv",
        "frequency.csv",
        "price_of_risk.csv",
        "findings.json",
        "experiment.yaml",
        *exact,
    }
    assert (folder / "report.pdf").read_bytes().startswith(b"%PDF-")
    pictures = list((folder / "figures").iterdir())
    assert len(pictures) >= FIGURES_AT_LEAST
    assert all(path.suffix == ".png" and path.read_bytes().startswith(b"\x89PNG\r\n") for path in pictures)
    assert [path.name for path in folder.parent.iterdir()] == [folder.name]


def test_columns_are_those_promised_in_their_order(finished):
    folder, experiment = finished
    for name, headings in (HEADINGS | (EXACT_HEADINGS if answers_exactly(experiment) else {})).items():
        assert (folder / f"{name}.csv").read_text().split("\n", 1)[0].split(",") == headings.split()


def test_there_is_a_row_for_every_schedule_asked_for_and_no_other(finished, schedules, breakdown):
    folder, experiment = finished
    names = [rule.name for rule in experiment.schedules]
    assert schedules["schedule"].tolist() == names
    assert list(dict.fromkeys(breakdown["schedule"])) == names
    assert set(breakdown["underlying"]) == {*experiment.names, "all"}
    engine = "simulate" if experiment.paths.source == "gbm" else "replay"
    assert set(schedules["engine"]) == {engine}
    assert pd.read_csv(folder / "frequency.csv")["schedule"].tolist() == names


def test_figures_of_a_schedule_are_in_range_and_order(schedules):
    assert (schedules["std"] > 0).all()
    assert (schedules["std_se"] > 0).all()
    assert (schedules["mean_se"] > 0).all()
    quantiles = schedules[["p01", "p05", "p50", "p95", "p99"]].to_numpy()
    assert (np.diff(quantiles, axis=1) >= 0).all()
    # The mean of a tail lies beyond its quantile, and a thinner tail beyond a thicker one.
    assert (schedules["es95"] >= -schedules["p05"]).all()
    assert (schedules["es975"] >= schedules["es95"]).all()
    assert (schedules["delta_p99"] >= schedules["delta_mean"]).all()
    assert (schedules["cost_mean"] > 0).all()
    assert schedules["chosen"].sum() == 1
    assert (schedules.loc[schedules["chosen"], "difference"] == 0).all()


def test_components_add_to_the_total(finished, schedules, breakdown):
    known = SIMULATED if finished[1].paths.source == "gbm" else REPLAYED
    for row in schedules.itertuples():
        mine = breakdown[(breakdown.schedule == row.schedule) & (breakdown.underlying == "all")].set_index("component")
        single = [name for name in mine.index if not name.startswith("costs.") and name != "total"]
        assert known <= set(single) <= known | MAY_FOLLOW
        parts = mine.loc[single]
        scale = max(abs(row.mean), row.std)
        assert parts["mean"].sum() == pytest.approx(row.mean, abs=TOLERANCE * scale)
        assert parts["share"].sum() == pytest.approx(1.0, abs=10 * TOLERANCE)
        assert mine.loc["total", "mean"] == pytest.approx(row.mean, abs=TOLERANCE * scale)
        assert mine.loc["total", "std"] == pytest.approx(row.std, abs=TOLERANCE * scale)
        assert -mine.loc["costs", "mean"] == pytest.approx(row.cost_mean, abs=TOLERANCE * scale)
        kinds = mine[mine.index.str.startswith("costs.")]
        assert kinds["mean"].sum() == pytest.approx(mine.loc["costs", "mean"], abs=TOLERANCE * scale)


def test_underlyings_add_to_the_book(breakdown):
    single = breakdown[breakdown.underlying != "all"].groupby(["schedule", "component"])["mean"].sum()
    book = breakdown[breakdown.underlying == "all"].set_index(["schedule", "component"])["mean"]
    np.testing.assert_allclose(single[book.index], book, atol=TOLERANCE * book.abs().max())


def test_variance_parts_add_to_the_total(finished, schedules):
    folder, experiment = finished
    table = pd.read_csv(folder / "frequency.csv")
    both = table.merge(schedules, on="schedule", suffixes=("_f", ""))
    np.testing.assert_allclose(both["std"] ** 2, both["var_total"], rtol=1e-9)
    np.testing.assert_allclose(both["std_gross"] ** 2, both["var_gross"], rtol=1e-9)
    np.testing.assert_array_equal(both["removable_f"], both["removable"])
    parts = [
        "var_discretisation",
        "var_floor",
        "cov_discretisation_floor",
        "cov_discretisation_costs",
        "cov_floor_costs",
    ]
    if experiment.paths.source == "prices":
        assert table[parts].isna().all().all()
        return
    added = table["var_discretisation"] + table["var_floor"] + table["var_costs"]
    added += 2 * (table["cov_discretisation_floor"] + table["cov_discretisation_costs"] + table["cov_floor_costs"])
    np.testing.assert_allclose(added, table["var_total"], rtol=TOLERANCE)
    np.testing.assert_allclose(table["var_gross"] - table["var_floor"], table["removable"], rtol=TOLERANCE)


def test_findings_agree_with_the_tables(finished, schedules):
    folder, experiment = finished
    found = json.loads((folder / "findings.json").read_text())
    chosen = schedules[schedules["chosen"]].iloc[0]
    assert found["choice"]["schedule"] == chosen["schedule"]
    assert found["choice"]["tied"] == schedules[schedules["tied"] & ~schedules["chosen"]]["schedule"].tolist()
    for name in ("mean", "std", "es95", "es975"):
        assert found[name]["value"] == pytest.approx(chosen[name], rel=1e-12)
        assert found[name]["se"] == pytest.approx(chosen[f"{name}_se"], rel=1e-12)
    assert found["choice"]["mean_cost"]["value"] == pytest.approx(chosen["mean_cost"], rel=1e-12)
    assert found["versions"]["hedgesim"] == hedgesim.__version__
    assert len(found["hashes"]["experiment"]) == 64
    assert set(found["seconds"]) == {"prepare", "engine", "study", "report"} | (
        {"exact"} if experiment.paths.source == "gbm" else set()
    )
    assert found["sentence"].endswith(".")
    assert isinstance(found["seed"], int)


def test_the_written_experiment_is_the_one_that_ran(finished):
    folder, experiment = finished
    written = load_experiment(folder / "experiment.yaml").experiment
    for section in ("title", "market", "book", "hedge", "schedules", "costs", "study", "report"):
        assert getattr(written, section) == getattr(experiment, section)
    if experiment.paths.source == "gbm":
        assert written.paths == experiment.paths.model_copy(update={"count": 3000})
