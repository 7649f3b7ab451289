"""A run on a real index and its implied vol: S&P 500 closes and the VIX, 2014 to 2018, as packed with `arch`.

A short 21-day at-the-money call starts at every close and is hedged daily to monthly. Index options were dearer than
what the index then did (Carr and Wu 2009, Review of Financial Studies 22, table 2, from memory): the facts behind that
are recomputed here with plain pandas, and so is the schedule that trades at entry and expiry only.
"""

import json
import subprocess
import sys
from math import erf, pi, sqrt
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

DAYS, UNITS, HALF_SPREAD = 21, 1000.0, 1e-4
EXPERIMENT = """\
title: Short 21-day at-the-money calls on the index, hedged daily to monthly
market: {underlyings: {INDEX: {}}}
book:
  - {type: call, strike: 100%, expiry: 21d, quantity: -1000}
paths:
  source: prices
  file: closes.csv
  time: Date
  series: {INDEX: {price: Close, mark_vol: {column: vix, unit: percent}}}
  inceptions: {every: 1d}
schedules: [{every: 1d}, {every: 2d}, {every: 5d}, {every: 10d}, {every: 21d}]
costs: {half_spread: 1bp}
report: {currency: USD}
"""


@pytest.fixture(scope="module")
def index() -> pd.DataFrame:
    sp500 = pytest.importorskip("arch.data.sp500").load()
    vix = pytest.importorskip("arch.data.vix").load()
    return sp500[["Close"]].join(vix, how="inner").dropna().loc["2014":"2018"]


@pytest.fixture(scope="module")
def folder(index, tmp_path_factory) -> Path:
    home = tmp_path_factory.mktemp("real")
    index.to_csv(home / "closes.csv", date_format="%Y-%m-%d")
    (home / "index.yaml").write_text(EXPERIMENT)
    command = [sys.executable, "-c", "from hedgesim.cli import main; main()", "run", "index.yaml"]
    done = subprocess.run(command, cwd=home, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    assert done.stdout.endswith("\nreports/index\n")
    return home / "reports" / "index"


@pytest.fixture(scope="module")
def lives(index) -> pd.DataFrame:
    """Implied vol, vol realised over the next 21 days, and the entry-only hedge of each inception, by plain formulas."""
    close, vol = index["Close"], index["vix"] / 100
    squares = np.log(close).diff() ** 2
    realised = np.sqrt(squares.rolling(DAYS).sum().shift(-DAYS) * 252 / DAYS)
    half = vol * sqrt(DAYS / 252) / 2
    # At the money without rates: d1 = -d2 = half the standard deviation of the life.
    delta = half.map(lambda x: 0.5 + 0.5 * erf(x / sqrt(2)))
    premium = close * (2 * delta - 1)
    end = close.shift(-DAYS)
    gross = premium - (end - close).clip(lower=0) + delta * (end - close)
    costs = HALF_SPREAD * delta * (close + end)
    frame = pd.DataFrame({"implied": vol, "realised": realised, "gross": UNITS * gross, "costs": UNITS * costs})
    return frame.dropna()


def test_the_run_covers_every_life_that_the_prices_carry(index, folder, lives):
    assert len(index) == 1257
    found = json.loads((folder / "findings.json").read_text())
    assert found["engine"] == "replay"
    assert found["count"] == len(lives) == len(index) - DAYS
    assert found["std"]["unit"] == "USD"
    inputs = (folder / "experiment.yaml").read_text()
    assert str(folder.parents[1] / "closes.csv") in inputs


def test_the_folder_keeps_the_contract(folder):
    s, b = pd.read_csv(folder / "schedules.csv"), pd.read_csv(folder / "breakdown.csv")
    assert s["schedule"].tolist() == ["every 1d", "every 2d", "every 5d", "every 10d", "every 21d"]
    assert (s["std_se"] > 0).all()
    assert s["std_floor"].isna().all()
    for row in s.itertuples():
        mine = b[(b["schedule"] == row.schedule) & (b["underlying"] == "all")].set_index("component")
        single = mine[[not name.startswith("costs.") and name != "total" for name in mine.index]]
        assert single["mean"].sum() == pytest.approx(row.mean, rel=1e-9, abs=1e-6 * row.std)
        assert single["share"].sum() == pytest.approx(1.0, abs=1e-9)
        assert mine.loc["total", "std"] == pytest.approx(row.std, rel=1e-9)
        assert -mine.loc["costs", "mean"] == pytest.approx(row.cost_mean, rel=1e-9)
    # Trading more costs more, and the monthly hedge is left with more risk than the daily one.
    assert s["cost_mean"].is_monotonic_decreasing
    assert s["std"].iloc[-1] > s["std"].iloc[0]
    for name in ("report.pdf", "figures/finding.png", "frequency.csv", "price_of_risk.csv"):
        assert (folder / name).stat().st_size > 0


def test_the_hedge_at_entry_only_is_that_of_plain_formulas(folder, lives):
    row = pd.read_csv(folder / "schedules.csv").set_index("schedule").loc["every 21d"]
    total = lives["gross"] - lives["costs"]
    assert row["trades"] == 2
    assert row["mean"] == pytest.approx(total.mean(), rel=1e-9)
    assert row["std"] == pytest.approx(total.std(), rel=1e-9)
    assert row["std_gross"] == pytest.approx(lives["gross"].std(), rel=1e-9)
    assert row["cost_mean"] == pytest.approx(lives["costs"].mean(), rel=1e-9)
    assert row["p01"] == pytest.approx(total.quantile(0.01), rel=1e-9)
    assert row["p50"] == pytest.approx(total.quantile(0.50), rel=1e-9)


def test_what_was_implied_exceeded_what_was_realised_and_the_run_earns_it(index, folder, lives):
    gap = lives["implied"] - lives["realised"]
    # Facts of the data, from the closes and the VIX alone.
    assert gap.mean() > 0.02
    assert (gap > 0).mean() > 0.75
    b = pd.read_csv(folder / "breakdown.csv")
    seen = b[(b["underlying"] == "all") & (b["component"] == "vol_gap_seen")].set_index("schedule")["mean"]
    # What gamma earns on that gap is the same under every schedule, and positive.
    assert seen.nunique() == 1
    assert seen.iloc[0] > 0
    # Vega at the money, S sqrt(T / 2 pi), turns the gap into money: the same size, not the same number.
    vega = UNITS * index["Close"].mean() * sqrt(DAYS / 252 / (2 * pi))
    assert 0.5 < seen.iloc[0] / (vega * gap.mean()) < 2.0
