"""Running an experiment from Python: the lines a reader would type, and what they give."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import hedgesim
from hedgesim.book import gross_value
from hedgesim.errors import ExperimentError

CONFIGS = Path(__file__).parents[1] / "configs"
FEW = ("paths.count=3000",)


def test_ten_lines_run_an_experiment_and_give_frames(tmp_path, monkeypatch):
    monkeypatch.chdir(CONFIGS.parent)
    lines = """\
import hedgesim

result = hedgesim.run("configs/demo.yaml", overrides=["paths.count=3000"])
print(result.sentence)
table = result.schedules.set_index("schedule")
print(table[["trades", "cost_mean", "std", "es975"]].round(0))
parts = result.breakdown.query("underlying == 'all'").pivot(index="schedule", columns="component", values="std")
print(parts.round(0))
print(result.frequency[["trades", "removable", "var_floor"]])
print(result.price_of_risk[["schedule", "next_finer", "price"]])
"""
    assert len(lines.splitlines()) == 10
    names: dict = {}
    exec(lines, names)
    result, table, parts = names["result"], names["table"], names["parts"]
    assert table.index.tolist() == list(result.study.schedules)
    assert set(parts.index) == set(table.index)
    np.testing.assert_allclose(parts["total"][table.index], table["std"], rtol=1e-9)
    assert result.findings["choice"]["schedule"] in table.index
    assert result.findings["choice"]["schedule"].removeprefix("every") in result.sentence
    assert list(tmp_path.iterdir()) == []


def test_frames_are_those_that_a_run_writes(tmp_path):
    from hedgesim.experiment.run import run_file

    folder = run_file(CONFIGS / "demo.yaml", out=tmp_path / "o", overrides=FEW, quiet=True)
    result = hedgesim.run(CONFIGS / "demo.yaml", overrides=FEW)
    for name in ("schedules", "breakdown", "frequency", "price_of_risk"):
        written = (folder / f"{name}.csv").read_text()
        assert getattr(result, name).to_csv(index=False, lineterminator="\n") == written
        assert isinstance(getattr(result, name), pd.DataFrame)


def test_detail_keeps_components_that_add_to_the_totals():
    brief = hedgesim.run(str(CONFIGS / "two_names.yaml"), overrides=["paths.count=500"])
    full = hedgesim.run(CONFIGS / "two_names.yaml", overrides=["paths.count=500"], detail=True, threads=1)
    assert brief.ledger.detail is None
    np.testing.assert_array_equal(brief.ledger.totals, full.ledger.totals)
    rounding = 1e-9 * gross_value(full.plan.book, full.plan.market)
    np.testing.assert_allclose(full.ledger.detail.sum(axis=(1, 2)), full.ledger.totals, atol=rounding, rtol=0)
    assert full.ledger.detail.shape[1] == 2


def test_a_wrong_experiment_raises_with_every_problem():
    with pytest.raises(ExperimentError) as caught:
        hedgesim.run(CONFIGS / "demo.yaml", overrides=["paths.count=1", "study.confidence=95"])
    assert [str(p) for p in caught.value.problems] == [
        "--set paths.count: 1 is out of range - write a whole number of at least 2 and at most 10000000000",
        "--set study.confidence: 95 looks like a percentage - write 95%",
    ]
