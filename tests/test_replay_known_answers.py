"""Replay against Hull's worked example of delta hedging, from the price file to the cost of hedging.

Hull, Options, Futures, and Other Derivatives, 11th ed., chapter 19, tables 19.2 and 19.3: short calls on 100,000
shares, strike 50, rate 5 %, vol 20 %, 20 weeks, rebalanced weekly.
"""

from pathlib import Path

import numpy as np
import pytest

from hedgesim.book import Expiry, Position
from hedgesim.costs import CostTerms
from hedgesim.engine.inceptions import Inceptions, lay_inceptions
from hedgesim.engine.replay import replay_laid
from hedgesim.engine.story import story
from hedgesim.paths.prices import SeriesColumns, read_prices
from hedgesim.schedules import Schedule

DATA = Path(__file__).parent / "data"
FREE = CostTerms(half_spread=np.zeros(1), per_unit=np.zeros(1), per_trade=np.zeros(1))
RATE, YEARS = 0.05, 20 / 52

# Deltas as printed, weeks 0 to 19; in week 20 the shares are delivered or none are left.
HULL = {
    "hull_19_2.csv": (
        [.522, .458, .400, .596, .693, .774, .771, .706, .674, .787, .550, .413, .542, .591, .768, .759, .865, .978, .990, 1.0],
        263_242,
    ),
    "hull_19_3.csv": (
        [.522, .568, .705, .579, .459, .443, .475, .540, .420, .410, .658, .692, .542, .538, .400, .236, .261, .062, .183, .007],
        256_542,
    ),
}  # fmt: skip


def lay_hull(name: str, *, premium: float | None = 0.0, physical: bool = False):
    history = read_prices(
        DATA / name,
        time="week",
        time_unit_years=1 / 52,
        series={"share": SeriesColumns("price")},
        day_count="business-252",
    )
    call = Position(
        underlying=0,
        is_call=True,
        strike=50.0,
        strike_of_spot=False,
        amount=-100_000.0,
        is_notional=False,
        expiry=Expiry(years=YEARS),
        premium=premium,
        physical=physical,
    )
    return lay_inceptions(
        history,
        [call],
        rate=RATE,
        yield_rate=np.zeros(1),
        is_future=np.zeros(1, bool),
        mark_vol=np.array([0.20]),
        hedge_vol=np.array([np.nan]),
        initial_units=np.zeros(1),
        schedules=[Schedule("weekly", "looks", 1)],
        inceptions=Inceptions("once"),
    )


@pytest.mark.parametrize("name", HULL)
def test_deltas_are_hulls_to_three_decimals(name):
    laid = lay_hull(name)
    life = laid.inceptions[0]
    told = story(life.book, life.market, life.grid, life.compiled, 0, FREE, life.price, label="Hull", path=0)
    assert np.array_equal(np.round(told.hedge[0, :-1] / 100_000, 3), HULL[name][0])
    assert told.hedge[0, -1] == 0.0


@pytest.mark.parametrize("physical", [False, True])
@pytest.mark.parametrize("name", HULL)
def test_cost_of_hedging_is_hulls_with_continuous_interest(name, physical):
    # Nothing is received for the option, so the account at expiry is minus Hull's cost of hedging: his 263,300 and
    # 256,600 come from rounded shares and simple weekly interest.
    ledger = replay_laid(lay_hull(name, physical=physical), costs=FREE, seed=0)
    cost = -ledger.totals[0, 0] * np.exp(RATE * YEARS)
    assert cost == pytest.approx(HULL[name][1], abs=1.0)


def test_premium_at_model_value_turns_the_cost_into_a_profit_and_loss():
    # Black-Scholes value 2.4005273233 a share (Hull prints 2.40).
    ledger = replay_laid(lay_hull("hull_19_2.csv", premium=None), costs=FREE, seed=0)
    assert ledger.totals[0, 0] == pytest.approx(240_052.73233 - 263_242 * np.exp(-RATE * YEARS), abs=1.0)


def test_a_single_inception_has_no_standard_error():
    ledger = replay_laid(lay_hull("hull_19_2.csv"), costs=FREE, seed=0)
    assert ledger.count == 1
    assert len(ledger.replicates.mean) == 0
    assert np.isnan(ledger.replicates.spread(ledger.replicates.mean)).all()
    error = ledger.replicates.standard_error(lambda moments: moments.mean.sum(axis=-1))
    assert error.shape == (1,)
    assert np.isnan(error).all()
    assert np.isnan(ledger.moments.cov).all()
