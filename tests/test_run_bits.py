"""A run is the same to the last bit whatever the threads, rerun from what it wrote; its progress and its ledger."""

import json
import re
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from hedgesim.book import gross_value
from hedgesim.experiment import run as running
from hedgesim.experiment.loader import load_experiment
from hedgesim.experiment.resolve import resolve
from hedgesim.experiment.run import run_file

CONFIGS = Path(__file__).parents[1] / "configs"
TABLES = ("schedules.csv", "breakdown.csv", "frequency.csv", "price_of_risk.csv")
EXPERIMENT = """\
title: Calls and puts on two names, the book in a file of its own
market:
  rate: 2%
  underlyings:
    BRELVOW: {spot: 84, yield: 2%, mark_vol: 26%}
    HUSKADE: {spot: 37.5, mark_vol: 33%}
  correlation: {BRELVOW: {HUSKADE: 55%}}
book: book.csv
paths: {source: gbm, realised_vol: {BRELVOW: 24%, HUSKADE: 34%}, count: 3000, looks_per_day: 4, seed: 5}
schedules: [{every: 1d}, {every: 7d}, {trades: 6}]
costs: {half_spread: 2bp, per_trade: 1.5}
"""
BOOK = """\
underlying,type,strike,expiry,quantity,premium
BRELVOW,call,105%,21d,-500,1.1
HUSKADE,put,36,42d,300,
BRELVOW,put,80,42d,-200,
"""


def tables(folder: Path) -> dict[str, bytes]:
    return {name: (folder / name).read_bytes() for name in TABLES}


def findings(folder: Path) -> dict:
    """Findings without what tells one run from another."""
    found = json.loads((folder / "findings.json").read_text())
    assert found.pop("created")
    assert found.pop("seconds")
    return found


@pytest.fixture(scope="module")
def home(tmp_path_factory) -> Path:
    folder = tmp_path_factory.mktemp("home")
    (folder / "x.yaml").write_text(EXPERIMENT)
    (folder / "book.csv").write_text(BOOK)
    shutil.copy(CONFIGS / "tessovar_closes.csv", folder / "tessovar_closes.csv")
    history = (CONFIGS / "history.yaml").read_text().replace("inceptions: {every: 1d}", "inceptions: {every: 21d}")
    # Without the schedule at every price the engine adds it for reference, to be shown nowhere.
    (folder / "history.yaml").write_text(history.replace("  - {every: 1d}\n", ""))
    return folder


@pytest.fixture(scope="module", params=["x", "history"])
def one_thread(request, home) -> Path:
    """Results of a simulated and of a replayed experiment, on one thread, every component kept."""
    return run_file(
        home / f"{request.param}.yaml", out=home / "one" / request.param, threads=1, ledger=True, quiet=True
    )


def test_threads_do_not_move_a_bit(one_thread, home):
    folder = run_file(home / f"{one_thread.name}.yaml", out=home / "three" / one_thread.name, threads=3, quiet=True)
    assert tables(folder) == tables(one_thread)
    assert findings(folder) == findings(one_thread)
    assert (folder / "experiment.yaml").read_bytes() == (one_thread / "experiment.yaml").read_bytes()


def test_the_written_experiment_reruns_to_the_same_bits_from_anywhere(one_thread, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    shutil.copy(one_thread / "experiment.yaml", tmp_path / "again.yaml")
    folder = run_file(Path("again.yaml"), quiet=True)
    assert folder == Path("reports/again")
    assert tables(folder) == tables(one_thread)
    again, first = findings(folder), findings(one_thread)
    # The files differ: the book is inline now.
    assert again.pop("hashes") != first.pop("hashes")
    assert again == first
    # And from then on the text is its own fixed point.
    assert (folder / "experiment.yaml").read_bytes() == (one_thread / "experiment.yaml").read_bytes()


def test_a_value_set_on_the_command_line_is_as_one_in_the_file(home, tmp_path):
    edited = tmp_path / "x.yaml"
    edited.write_text(EXPERIMENT.replace("count: 3000", "count: 2000").replace("half_spread: 2bp", "half_spread: 5bp"))
    shutil.copy(home / "book.csv", tmp_path / "book.csv")
    by_file = run_file(edited, out=tmp_path / "file", quiet=True)
    given = ("paths.count=2000", "costs.half_spread=5bp")
    by_set = run_file(home / "x.yaml", out=tmp_path / "set", overrides=given, quiet=True)
    assert tables(by_set) == tables(by_file)
    assert (by_set / "experiment.yaml").read_bytes() == (by_file / "experiment.yaml").read_bytes()
    assert "half_spread: 0.0005\n" in (by_set / "experiment.yaml").read_text()
    assert findings(by_set)["count"] == 2000


def process(folder: Path, *arguments: str, before: str = "") -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-c", f"{before}\nfrom hedgesim.cli import main; main()", "run", *arguments]
    return subprocess.run(command, cwd=folder, capture_output=True, text=True, check=True)


def test_progress_is_a_line_per_tenth_where_nobody_watches(home, tmp_path):
    done = process(home, "x.yaml", "--out", str(tmp_path / "o"))
    lines = [line for line in done.stderr.splitlines() if not line.startswith("compiling")]
    assert [line.partition(" %")[0] for line in lines] == [f"paths: {tenth}" for tenth in range(10, 101, 10)]
    assert all(re.fullmatch(r"paths: \d+ %(, [\d,]+ a second, \d+ s left)?", line) for line in lines)
    sentence = json.loads((tmp_path / "o" / "findings.json").read_text())["sentence"]
    assert done.stdout.startswith(f"{sentence}\n")
    assert done.stdout.endswith(f"\n{tmp_path / 'o'}\n")


def test_a_price_history_tells_its_progress_too(home, tmp_path):
    done = process(home, "history.yaml", "--out", str(tmp_path / "o"))
    assert done.stderr.splitlines()[-1] == "inceptions: 100 %"


def test_quiet_prints_the_folder_only(home, tmp_path):
    done = process(home, "x.yaml", "--out", str(tmp_path / "o"), "--quiet")
    assert (done.stdout, done.stderr) == (f"{tmp_path / 'o'}\n", "")


def read_ledger(folder: Path) -> pd.DataFrame:
    if (folder / "ledger.parquet").is_file():
        return pd.read_parquet(folder / "ledger.parquet").astype({"schedule": str})
    with np.load(folder / "ledger.npz", allow_pickle=False) as arrays:
        return pd.DataFrame({name: arrays[name] for name in arrays.files})


def holds_to_the_tables(ledger: pd.DataFrame, folder: Path) -> None:
    plan = resolve(load_experiment(folder / "experiment.yaml"))
    life = plan.laid.inceptions[0] if hasattr(plan, "laid") else plan
    breakdown = pd.read_csv(folder / "breakdown.csv")
    book = breakdown[breakdown["underlying"] == "all"].set_index(["schedule", "component"])["mean"]
    schedules = pd.read_csv(folder / "schedules.csv").set_index("schedule")
    count = json.loads((folder / "findings.json").read_text())["count"]
    single = [name for name in ledger if "." not in name or name.startswith("costs.")]
    single = [name for name in single if name not in ("schedule", "path", "total", "trades", "turnover")]
    rounding = 1e-9 * gross_value(life.book, life.market)
    assert set(single) >= {"premium_edge", "revaluation", "lag", "remainder", "costs.spread"}
    np.testing.assert_allclose(ledger[single].sum(axis=1), ledger["total"], rtol=0, atol=rounding)
    assert list(dict.fromkeys(ledger["schedule"])) == schedules.index.tolist()
    for name, mine in ledger.groupby("schedule", sort=False):
        assert mine["path"].tolist() == list(range(count))
        assert mine["total"].std() == pytest.approx(schedules.loc[name, "std"], rel=1e-9)
        for column in ("trades", "turnover"):
            assert mine[column].mean() == pytest.approx(schedules.loc[name, column], rel=1e-9)
        for component in (*single, "total"):
            assert mine[component].mean() == pytest.approx(book[name, component], rel=1e-9, abs=rounding)
    underlyings = breakdown["underlying"].unique()[:-1]
    if len(underlyings) > 1:
        for component in single:
            added = sum(ledger[f"{underlying}.{component}"] for underlying in underlyings)
            np.testing.assert_allclose(added, ledger[component], rtol=0, atol=rounding)


def test_the_ledger_has_a_row_for_every_path_and_schedule(one_thread):
    holds_to_the_tables(read_ledger(one_thread), one_thread)


def test_without_pyarrow_the_ledger_is_an_archive_of_arrays(home, tmp_path):
    process(
        home, "x.yaml", "--out", str(tmp_path / "o"), "--ledger", before="import sys; sys.modules['pyarrow'] = None"
    )
    assert [path.name for path in (tmp_path / "o").glob("ledger.*")] == ["ledger.npz"]
    holds_to_the_tables(read_ledger(tmp_path / "o"), tmp_path / "o")


def test_with_pyarrow_the_ledger_is_a_parquet_file(home, tmp_path):
    pytest.importorskip("pyarrow")
    folder = run_file(home / "x.yaml", out=tmp_path / "o", ledger=True, quiet=True)
    assert [path.name for path in folder.glob("ledger.*")] == ["ledger.parquet"]
    holds_to_the_tables(read_ledger(folder), folder)


def test_the_ledger_is_written_on_request_only(home, tmp_path, monkeypatch):
    asked = []
    monkeypatch.setattr(running, "write_ledger", lambda *arguments: asked.append(arguments))
    run_file(home / "history.yaml", out=tmp_path / "o", quiet=True)
    assert asked == []


def test_the_first_run_says_that_it_compiles_and_the_next_does_not(home, tmp_path, monkeypatch):
    monkeypatch.setenv("NUMBA_CACHE_DIR", str(tmp_path / "cache"))
    told = [process(home, "history.yaml", "--out", str(tmp_path / "o")).stderr for _ in range(2)]
    assert [text.startswith("compiling, once for this version") for text in told] == [True, False]
