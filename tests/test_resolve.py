"""What shows only once looks, prices and schedules are laid out: the exact message, status 2, and nothing written."""

import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner

from hedgesim.cli import main
from hedgesim.experiment.loader import load_experiment
from hedgesim.experiment.resolve import Replay, Simulation, resolve

SIMULATED = """\
title: Two options
market:
  date: 2027-03-01
  session: 8h
  underlyings:
    CORVANE: {spot: 100, mark_vol: 22%}
book:
  - {type: call, strike: 105, expiry: 21d, quantity: -500}
  - {type: put, strike: 95, expiry: 10d, quantity: 100}
paths:
  source: gbm
  realised_vol: 19%
  looks_per_day: 4
  count: 500
schedules:
  - {every: 1d}
  - {every: 7d}
"""
HISTORY = """\
title: One call on a price history
market:
  underlyings:
    CORVANE: {mark_vol: 22%}
book:
  - {type: call, strike: 100%, expiry: 3d, quantity: -500}
paths:
  source: prices
  file: closes.csv
  time: date
  series: {CORVANE: {price: close}}
  inceptions: {every: 1d}
schedules:
  - {every: 1d}
"""
CLOSES = """\
date,close,iv
2027-03-01,100,22
2027-03-02,101,21
2027-03-03,99,23
2027-03-04,100.5,22
2027-03-05,102,
2027-03-08,101,20
2027-03-09,100,22
"""
LOOKS = "looks_per_day: 4"
EDGE = "other looks_per_day, another horizon or expiry, or `looks` over the horizon"
OWN_IV = (
    ("CORVANE: {mark_vol: 22%}", "CORVANE: {}"),
    ("price: close}", "price: close, mark_vol: {column: iv, unit: percent}}"),
)

# Replacements in the experiment, and the messages.
SIMULATED_FAULTS = {
    "the last expiry is not on a look": (
        [("expiry: 21d", "expiry: 20.1d")],
        [f"x.yaml:13:18: paths.looks_per_day: the end, 20.1 days away, is not a whole number of looks: it is look 80.4 - {EDGE}"],
    ),
    "an earlier expiry is not on a look": (
        [("expiry: 10d", "expiry: 10.1d")],
        [
            "x.yaml:9:37: book.1.expiry: 10.1 days after the inception there is no look - "
            "the nearest looks are at 10 and 10.25 days (0.0396825 and 0.0406746 years)"
        ],
    ),
    "no expiry is on a look over a horizon": (
        [(LOOKS, "looks: 20"), ("every: 1d", "every: 2 looks"), ("every: 7d", "every: 4 looks")],
        [
            "x.yaml:9:37: book.1.expiry: 10 days after the inception there is no look - "
            "the nearest looks are at 9.45 and 10.5 days (0.0375 and 0.0416667 years)"
        ],
    ),
    "the horizon is not on a look": (
        [(LOOKS, LOOKS + "\n  horizon: 15.2d")],
        [f"x.yaml:13:18: paths.looks_per_day: the end, 15.2 days away, is not a whole number of looks: it is look 60.8 - {EDGE}"],
    ),
    "the horizon is before the first look": (
        [(LOOKS, LOOKS + "\n  horizon: 1h")],
        [f"x.yaml:13:18: paths.looks_per_day: the end, 0.125 days away, is not a whole number of looks: it is look 0.5 - {EDGE}"],
    ),
    "every expiry date is on the weekend of the inception": (
        [("2027-03-01", "2027-03-06"), ("21d", "2027-03-07"), ("10d", "2027-03-07")],
        [f"x.yaml:13:18: paths.looks_per_day: the end, 0 days away, is not a whole number of looks: it is look 0 - {EDGE}"],
    ),
    "an expiry date before the start": (
        [("expiry: 10d", "expiry: 2027-02-26")],
        ["x.yaml:9:37: book.1.expiry: 2027-02-26 is not after the inception 2027-03-01 - write a later date"],
    ),
    "a horizon at the start": (
        [(LOOKS, LOOKS + "\n  horizon: 2027-03-01")],
        ["x.yaml:14:12: paths.horizon: 2027-03-01 is not after the inception 2027-03-01 - write a later date"],
    ),
    "an interval that is not a whole number of looks": (
        [("every: 1d", "every: 3h")],
        [
            "x.yaml:16:5: schedules.0: an interval of 0.375 days is not a whole number of looks of 0.25 days - "
            "a multiple of 0.25 days, or `every: k looks`"
        ],
    ),
    "an interval shorter than a look": (
        [("every: 7d", "every: 1h")],
        [
            "x.yaml:17:5: schedules.1: an interval of 0.125 days is shorter than a look of 0.25 days - "
            "a longer interval, or more looks per day"
        ],
    ),
    "more trades than looks": (
        [("every: 1d", "trades: 85")],
        ["x.yaml:16:5: schedules.0: 85 trades do not fit into 84 looks - at most 84 trades"],
    ),
    "two schedules at once": (
        [("every: 1d", "every: 90min"), ("every: 7d", "trades: 1000")],
        [
            "x.yaml:16:5: schedules.0: an interval of 0.1875 days is shorter than a look of 0.25 days - "
            "a longer interval, or more looks per day",
            "x.yaml:17:5: schedules.1: 1000 trades do not fit into 84 looks - at most 84 trades",
        ],
    ),
}  # fmt: skip
HISTORY_FAULTS = {
    "an expiry beyond the prices": (
        [("expiry: 3d", "expiry: 30d")], [],
        [
            "x.yaml:9:9: paths.file: no life fits into 7 rows of prices, from 2027-03-01 to 2027-03-09 - "
            "a longer history, shorter expiries, or an earlier horizon"
        ],
    ),
    "an expiry before the next price": (
        [("expiry: 3d", "expiry: 0.5d")], [],
        ["x.yaml:6:40: book.0.expiry: it settles before the first price after 2027-03-01 - a later expiry, or more prices"],
    ),
    "a horizon before the next price": (
        [("every: 1d}\nschedules", "every: 1d}\n  horizon: 0.5d\nschedules")], [],
        ["x.yaml:13:12: paths.horizon: it ends before the first price after 2027-03-01 - a later horizon, or more prices"],
    ),
    "a date that cannot roll": (
        [("market:", "market:\n  date: 2027-03-01"), ("expiry: 3d", "expiry: 2027-03-04")], [],
        [
            "x.yaml:7:40: book.0.expiry: a date cannot roll with the inceptions - "
            "a duration such as 21d, or `inceptions: once`"
        ],
    ),
    "an expiry date outside the prices": (
        [("market:", "market:\n  date: 2027-03-01"), ("expiry: 3d", "expiry: 2027-06-04"), ("{every: 1d}\nsch", "once\nsch")], [],
        [
            "x.yaml:7:40: book.0.expiry: 2027-06-04 is not inside the prices, which run from 2027-03-01 to 2027-03-09 - "
            "a date after the first and not after the last row of prices"
        ],
    ),
    "an interval shorter than the prices": (
        [("schedules:\n  - {every: 1d}", "schedules:\n  - {every: 1h}")], [],
        [
            "x.yaml:14:5: schedules.0: an interval of 0.125 days is shorter than a look of 1 days - "
            "a longer interval, or more looks per day"
        ],
    ),
    "more trades than prices": (
        [("schedules:\n  - {every: 1d}", "schedules:\n  - {trades: 4}")], [],
        ["x.yaml:14:5: schedules.0: 4 trades do not fit into 3 looks - at most 3 trades"],
    ),
    "prices and dates of every kind": (
        [], [("101,21", "-101,21"), ("2027-03-04,100.5", "2027-03-04,'100.5"), ("03-08,101", "03-05,101"), ("09,100", "09,")],
        [
            "closes.csv:3: close: the price is -101 - a price greater than zero, or leave the row out",
            "closes.csv:5: close: ''100.5' is not a number - a price greater than zero, or leave the row out",
            "closes.csv:7: date: '2027-03-05' stands twice - one row for each time",
            "closes.csv:8: close: no price - a price greater than zero, or leave the row out",
        ],
    ),
    "prices out of order": (
        [], [("2027-03-03", "2027-03-31")],
        ["closes.csv:5: date: '2027-03-04' is earlier than '2027-03-31' above it - rows in order of time, the oldest first"],
    ),
    "a column that is not there": (
        [("price: close", "price: last")], [],
        ["closes.csv:1: last: the file has no column 'last' - one of 'date', 'close', 'iv'"],
    ),
    "a mark vol missing where a life begins": (
        list(OWN_IV), [("2027-03-02,101,21", "2027-03-02,101,")],
        ["closes.csv:3: iv: no mark vol, and an inception falls on this row - a vol, or leave the row out"],
    ),
    "a mark vol missing where the hedge is re-marked": (
        [*OWN_IV, ("schedules:", "hedge: {remark: daily}\nschedules:"), ("inceptions: {every: 1d}", "inceptions: once")],
        [("2027-03-02,101,21", "2027-03-02,101,")],
        ["closes.csv:3: iv: no mark vol, and open positions are re-marked on this row - a vol, or leave the row out"],
    ),
    "vols in per cent read as fractions": (
        [OWN_IV[0], ("price: close}", "price: close, mark_vol: iv}")], [("22\n2027-03-02", "0.22\n2027-03-02")],
        [
            f"closes.csv:{line}: iv: {vol} looks like a percentage - a fraction such as 0.22, or unit: percent for the column"
            for line, vol in ((3, 21), (4, 23), (5, 22), (7, 20), (8, 22))
        ],
    ),
}  # fmt: skip


@pytest.fixture(autouse=True)
def here(tmp_path, monkeypatch) -> Path:
    monkeypatch.chdir(tmp_path)
    return tmp_path


def replaced(text: str, replacements) -> str:
    for old, new in replacements:
        assert text.count(old) == 1, f"{old!r} stands {text.count(old)} times"
        text = text.replace(old, new)
    return text


def refused(messages: list[str]) -> None:
    """`run` in a process of its own and `check` in this one say the same, and write nothing."""
    before = {path: path.read_bytes() for path in Path().rglob("*")}
    command = [sys.executable, "-c", "from hedgesim.cli import main; main()", "run", "x.yaml"]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert (done.returncode, done.stdout) == (2, "")
    assert done.stderr.splitlines() == messages
    checked = CliRunner().invoke(main, ["check", "x.yaml"])
    assert (checked.exit_code, checked.stdout) == (2, "")
    assert checked.stderr.splitlines() == messages
    assert {path: path.read_bytes() for path in Path().rglob("*")} == before


@pytest.mark.parametrize("fault", SIMULATED_FAULTS)
def test_what_does_not_fit_the_looks_is_refused(fault):
    replacements, messages = SIMULATED_FAULTS[fault]
    Path("x.yaml").write_text(replaced(SIMULATED, replacements))
    refused(messages)


@pytest.mark.parametrize("fault", HISTORY_FAULTS)
def test_what_does_not_fit_the_prices_is_refused(fault):
    replacements, in_prices, messages = HISTORY_FAULTS[fault]
    Path("x.yaml").write_text(replaced(HISTORY, replacements))
    Path("closes.csv").write_text(replaced(CLOSES, in_prices))
    refused(messages)


def test_the_experiments_that_the_faults_are_put_into_are_right():
    Path("x.yaml").write_text(SIMULATED)
    Path("h.yaml").write_text(replaced(HISTORY, OWN_IV))
    Path("closes.csv").write_text(replaced(CLOSES, [("102,\n", "102,21\n")]))
    simulation, replay = resolve(load_experiment("x.yaml")), resolve(load_experiment("h.yaml"))
    assert isinstance(simulation, Simulation)
    assert isinstance(replay, Replay)
    assert simulation.grid.looks == 84
    assert simulation.book.expiry_look.tolist() == [84, 40]
    assert len(replay.laid.inceptions) == 4


def test_a_value_given_on_the_command_line_is_named_as_such():
    Path("x.yaml").write_text(SIMULATED)
    done = CliRunner().invoke(main, ["check", "x.yaml", "--set", "schedules.0.every=3h"])
    assert done.exit_code == 2
    # The schedule stands in the file, its interval on the command line.
    assert done.stderr.startswith("x.yaml:16:5: schedules.0: an interval of 0.375 days")
