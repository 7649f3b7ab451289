"""Which rows of a history begin and end a life, what cannot be laid, and results that must not depend on threads."""

import dataclasses
from datetime import date

import numpy as np
import pytest
from replay_cases import random_costs, random_history, random_terms

from hedgesim.book import Expiry, Position
from hedgesim.engine.inceptions import EVERY_LOOK, InceptionError, Inceptions, lay_inceptions
from hedgesim.engine.replay import COMPONENTS, replay, replay_laid, stationary_resamples
from hedgesim.errors import ExperimentError
from hedgesim.market import frozen
from hedgesim.schedules import Schedule, ScheduleError

WEEKLY = Schedule("every 5d", "days", 5.0)


def call(expiry: Expiry, **changes) -> Position:
    terms = {
        "underlying": 0,
        "is_call": True,
        "strike": 1.0,
        "strike_of_spot": True,
        "amount": -100.0,
        "is_notional": False,
        "expiry": expiry,
    }
    return Position(**terms | changes)


def lay(history, positions, inceptions, **changes):
    n = len(history.names)
    terms = {
        "rate": 0.02,
        "yield_rate": np.zeros(n),
        "is_future": np.zeros(n, bool),
        "mark_vol": np.full(n, np.nan),
        "hedge_vol": np.full(n, np.nan),
        "initial_units": np.zeros(n),
        "schedules": [WEEKLY],
    }
    return lay_inceptions(history, positions, inceptions=inceptions, **terms | changes)


def history(**options):
    return random_history(1, **{"underlyings": 1, "rows_per_day": 1, "days": 30} | options)


@pytest.mark.parametrize(("step", "rows"), [(1.0, list(range(20))), (3.0, [0, 3, 6, 9, 12, 15, 18]), (10.0, [0, 10])])
def test_daily_inceptions_run_until_the_last_whole_life(step, rows):
    # 30 closes, days 0 to 29: a life of 10 days that begins on day 19 ends on the last.
    laid = lay(history(), [call(Expiry(days=10.0))], Inceptions("days", step))
    assert [life.row for life in laid.inceptions] == rows
    assert {life.grid.looks for life in laid.inceptions} == {10}


def test_intraday_inceptions_fall_on_closes():
    laid = lay(history(rows_per_day=4), [call(Expiry(days=10.0))], Inceptions("days", 2.0))
    assert [life.row for life in laid.inceptions] == list(range(0, 80, 8))
    assert all(life.grid.is_close[0] for life in laid.inceptions)
    assert {life.grid.looks for life in laid.inceptions} == {40}


def test_inceptions_by_looks_may_fall_within_a_day():
    laid = lay(history(rows_per_day=4), [call(Expiry(days=10.0))], Inceptions("looks", 7.0))
    assert [life.row for life in laid.inceptions] == list(range(0, 77, 7))


@pytest.mark.parametrize("rows_per_day", [1, 3, 7])
def test_expiries_are_met_in_spite_of_rounding_in_the_clock(rows_per_day):
    # Thirds and sevenths of a day, and years that are no binary fractions.
    expiries = [Expiry(days=15.0), Expiry(years=15 / 252), Expiry(days=21.0), Expiry(years=21 / 252)]
    laid = lay(history(rows_per_day=rows_per_day, days=60), [call(e) for e in expiries], Inceptions("days", 1.0))
    assert len(laid.inceptions) == 39
    for life in laid.inceptions:
        assert life.book.expiry_look.tolist() == [n * rows_per_day for n in (15, 15, 21, 21)]
    assert laid.notes == ()


def test_once_is_the_first_row():
    laid = lay(history(), [call(Expiry(days=10.0)), call(Expiry(years=15 / 252))], Inceptions("once"))
    assert [life.row for life in laid.inceptions] == [0]
    assert laid.inceptions[0].book.expiry_look.tolist() == [10, 15]
    assert laid.inceptions[0].grid.looks == 15
    assert laid.notes == ()


def test_strikes_units_and_vols_are_fixed_at_each_inception():
    h = history()
    book = [
        call(Expiry(days=5.0), strike=0.9, amount=-1e4, is_notional=True),
        call(Expiry(days=5.0), mark_vol=0.3, hedge_vol=0.35),
    ]
    laid = lay(h, book, Inceptions("days", 7.0))
    for life in laid.inceptions:
        spot, vol = h.price[0, life.row], h.mark_vol[0, life.row]
        assert life.book.strike.tolist() == [0.9 * spot, spot]
        assert life.book.units.tolist() == [-1e4 / spot, -100.0]
        assert life.book.mark_vol.tolist() == [vol, 0.3]
        assert life.book.hedge_vol.tolist() == [vol, 0.35]


def test_a_date_settles_at_the_close_of_that_date():
    h = history(rows_per_day=4)
    wanted = date.fromordinal(730_000 + 6)
    laid = lay(h, [call(Expiry(on=wanted))], Inceptions("once"))
    life = laid.inceptions[0]
    assert life.grid.clock[-1] == 6.0
    assert life.grid.is_close[-1]
    assert laid.notes == ()


def test_an_expiry_between_rows_settles_at_the_row_before_and_is_noted():
    laid = lay(history(), [call(Expiry(days=5.5))], Inceptions("days", 10.0))
    assert [life.book.expiry_look[0] for life in laid.inceptions] == [5, 5, 5]
    assert laid.inceptions[0].book.expiry_t[0] == 5 / 252
    assert laid.notes == (
        "3 of 3 expiries fall between rows of prices and settle at the row before "
        "(first: inception row 0, settled row 5)",
    )


def test_prices_as_strikes_are_noted_when_rolling_only():
    book = [call(Expiry(days=5.0), strike=100.0, strike_of_spot=False)]
    note = "some strikes are prices: they stay where they are while the spot at inception moves"
    assert lay(history(), book, Inceptions("days", 10.0)).notes == (note,)
    assert lay(history(), book, Inceptions("once")).notes == ()


def test_an_early_horizon_needs_no_price_at_the_expiry():
    # 30 closes and options of 40 days: valued at mark after 10.
    laid = lay(history(), [call(Expiry(days=40.0))], Inceptions("days", 1.0), horizon=Expiry(days=10.0))
    assert len(laid.inceptions) == 20
    life = laid.inceptions[-1]
    assert life.grid.looks == 10
    assert life.book.expiry_look[0] > 10
    assert life.book.expiry_t[0] == life.book.expiry_s[0] == 40 / 252


def test_a_horizon_after_the_last_expiry_ends_there_and_is_noted():
    laid = lay(history(), [call(Expiry(days=5.0))], Inceptions("once"), horizon=Expiry(days=9.0))
    assert laid.inceptions[0].grid.looks == 5
    assert laid.notes == ("the horizon lies after the last expiry: a life ends at its last expiry",)


def test_the_schedule_of_every_look_is_added_last_unless_asked_for():
    added = lay(history(), [call(Expiry(days=10.0))], Inceptions("days", 5.0))
    ledger = replay_laid(added, costs=random_costs(1, 1), seed=0)
    assert ledger.schedules == ("every 5d", EVERY_LOOK.name)
    assert ledger.reference == 1
    daily = Schedule("every 1d", "days", 1.0)
    asked = lay(history(), [call(Expiry(days=10.0))], Inceptions("days", 5.0), schedules=[daily, WEEKLY])
    ledger = replay_laid(asked, costs=random_costs(1, 1), seed=0)
    assert ledger.schedules == ("every 1d", "every 5d")
    assert all(life.compiled.names == ledger.schedules for life in asked.inceptions)
    assert all(life.compiled.trades_at.shape == (2, 11) for life in asked.inceptions)
    assert ledger.reference == 0


FAULTS = {
    "date while rolling": (
        {"positions": [call(Expiry(on=date(2024, 1, 5)))]},
        "book.0.expiry: a date cannot roll with the inceptions - a duration such as 21d, or `inceptions: once`",
    ),
    "life too long": (
        {"positions": [call(Expiry(days=30.0))]},
        "paths.file: no life fits into 30 rows of prices, from row 0 to row 29 - "
        "a longer history, shorter expiries, or an earlier horizon",
    ),
    "expiry before the next row": (
        {"positions": [call(Expiry(days=5.0)), call(Expiry(days=0.5))]},
        "book.1.expiry: it settles before the first price after row 0 - a later expiry, or more prices",
    ),
    "horizon before the next row": (
        {"horizon": Expiry(days=0.5)},
        "paths.horizon: it ends before the first price after row 0 - a later horizon, or more prices",
    ),
    "date outside": (
        {"positions": [call(Expiry(on=date(2030, 1, 5)))], "inceptions": Inceptions("once")},
        "book.0.expiry: 2030-01-05 is not inside the prices, which run from row 0 to row 29 - "
        "a date after the first and not after the last row of prices",
    ),
}


@pytest.mark.parametrize("case", FAULTS)
def test_what_does_not_fit_the_history(case):
    changes, message = FAULTS[case]
    terms = {"positions": [call(Expiry(days=5.0))], "inceptions": Inceptions("days", 1.0)} | changes
    with pytest.raises(InceptionError) as caught:
        lay(history(), **terms)
    assert str(caught.value) == message


def test_dates_need_dated_prices():
    numbered = dataclasses.replace(history(), date=None)
    with pytest.raises(InceptionError) as caught:
        lay(numbered, [call(Expiry(on=date(2024, 1, 5)))], Inceptions("once"), horizon=Expiry(on=date(2024, 1, 3)))
    assert str(caught.value) == (
        "book.0.expiry: a date, but the prices are timed by numbers - a duration such as 63d or 20/52\n"
        "paths.horizon: a date, but the prices are timed by numbers - a duration such as 63d or 20/52"
    )


def test_a_mark_vol_must_come_from_somewhere():
    bare = dataclasses.replace(history(), mark_vol=None, mark_vol_column=(None,))
    with pytest.raises(InceptionError) as caught:
        lay(bare, [call(Expiry(days=5.0))], Inceptions("once"))
    assert str(caught.value) == (
        "market.underlyings.A.mark_vol: no mark vol - a vol such as 22%, or a mark_vol column in paths.series"
    )
    assert lay(bare, [call(Expiry(days=5.0))], Inceptions("once"), mark_vol=np.array([0.2])).inceptions


def with_empty_vols(*rows):
    h = history()
    vol = h.mark_vol.copy()
    vol[0, list(rows)] = np.nan
    return dataclasses.replace(h, mark_vol=frozen(vol))


def test_an_empty_mark_vol_is_an_error_only_where_it_is_needed():
    h = with_empty_vols(3, 10, 29)
    book = [call(Expiry(days=5.0))]
    with pytest.raises(ExperimentError) as caught:
        lay(h, book, Inceptions("days", 5.0))
    assert str(caught.value) == (
        "prices.csv:12: iv: no mark vol, and an inception falls on this row - a vol, or leave the row out"
    )
    with pytest.raises(ExperimentError) as caught:
        lay(h, book, Inceptions("days", 5.0), remark="daily")
    assert str(caught.value) == (
        "prices.csv:5: iv: no mark vol, and open positions are re-marked on this row - a vol, or leave the row out\n"
        "prices.csv:12: iv: no mark vol, and an inception falls on this row - a vol, or leave the row out"
    )
    assert lay(h, [call(Expiry(days=5.0), mark_vol=0.2)], Inceptions("days", 5.0), remark="daily").inceptions
    assert lay(h, book, Inceptions("once")).inceptions


def test_an_unused_empty_vol_leaves_finite_results():
    # Day 5 is the expiry: the payoff needs no vol.
    laid = lay(with_empty_vols(5, 20), [call(Expiry(days=5.0))], Inceptions("once"), remark="daily")
    ledger = replay_laid(laid, costs=random_costs(1, 1), seed=0)
    assert np.isfinite(ledger.detail).all()
    assert np.isfinite(ledger.totals).all()


def test_a_schedule_finer_than_the_looks_is_refused():
    with pytest.raises(ScheduleError, match="shorter than a look"):
        lay(history(), [call(Expiry(days=5.0))], Inceptions("once"), schedules=[Schedule("x", "days", 0.25)])


@pytest.mark.parametrize("threads", [2, 3, 64])
def test_results_are_bit_identical_for_any_number_of_threads(threads):
    h = random_history(9)
    terms = random_terms(9, history=h, remark="daily", early_horizon=False)
    one, more = (
        replay(h, costs=random_costs(9), inceptions=Inceptions("days", 1.0), seed=3, threads=n, **terms)
        for n in (1, threads)
    )
    for name in ("totals", "detail", "trades", "turnover", "resamples", "trades_detail", "turnover_detail"):
        assert getattr(one, name).tobytes() == getattr(more, name).tobytes(), name
    for name in ("delta_mean", "delta_p99", "day_std", "day_worst"):
        assert getattr(one.watch, name).tobytes() == getattr(more.watch, name).tobytes(), name
    assert one.below_look == more.below_look
    assert one.replicates.cov.tobytes() == more.replicates.cov.tobytes()


def test_the_seed_moves_the_resamples_and_nothing_else():
    h = random_history(9)
    terms = random_terms(9, history=h, remark="inception", early_horizon=False)
    zero, one, again = (
        replay(h, costs=random_costs(9), inceptions=Inceptions("days", 1.0), seed=s, **terms) for s in (0, 1, 0)
    )
    assert zero.totals.tobytes() == one.totals.tobytes()
    assert not np.array_equal(zero.resamples, one.resamples)
    assert np.array_equal(zero.resamples, again.resamples)


def test_moments_of_the_resamples_are_those_of_the_resampled_inceptions():
    h = random_history(4)
    terms = random_terms(4, history=h, remark="daily", early_horizon=False)
    ledger = replay(h, costs=random_costs(4), inceptions=Inceptions("days", 1.0), seed=5, **terms)
    schedules, underlyings, width, count = ledger.detail.shape
    assert width == len(COMPONENTS)
    columns = ledger.detail.reshape(schedules, underlyings * width, count)
    assert ledger.moments.mean == pytest.approx(columns.mean(axis=2))
    assert ledger.resamples.shape == (999, count)
    for k in range(schedules):
        scale = columns[k].std(axis=1).max() ** 2
        assert ledger.moments.cov[k] == pytest.approx(np.cov(columns[k]), rel=1e-9, abs=1e-12 * scale)
        for r in (0, 500, 998):
            sample = columns[k][:, ledger.resamples[r]]
            assert ledger.replicates.mean[r, k] == pytest.approx(sample.mean(axis=1), rel=1e-9)
            assert ledger.replicates.cov[r, k] == pytest.approx(np.cov(sample), rel=1e-9, abs=1e-12 * scale)


def test_blocks_of_the_stationary_bootstrap_are_geometric_and_start_anywhere():
    # Politis and Romano (1994), JASA 89. Of 999 * 199 steps a share 1 - p (1 - 1/n) goes on to the next inception:
    # binomial, standard error 0.0009; a start is uniform, so each place is drawn n * 999 / n = 999 times on average.
    n, block = 200, 5.0
    index = stationary_resamples(n, block, 999, seed=0)
    goes_on = (np.diff(index, axis=1) % n == 1).mean()
    assert goes_on == pytest.approx(1 - (1 / block) * (1 - 1 / n), abs=4 * 0.0009)
    assert index.min() == 0
    assert index.max() == n - 1
    # The count of one place over resamples: variance of a block's length, about 999 * (2 * block - 1).
    counts = np.bincount(index.ravel(), minlength=n)
    assert np.abs(counts - 999).max() < 5 * np.sqrt(999 * (2 * block - 1))
