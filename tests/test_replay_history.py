"""Rolling inceptions over a real index and its implied vol, against a plain pandas account of the same trades."""

import numpy as np
import pandas as pd
import pytest
from scipy.special import ndtr

from hedgesim.book import Expiry, Position
from hedgesim.costs import CostTerms
from hedgesim.engine.inceptions import Inceptions, lay_inceptions
from hedgesim.engine.replay import replay_laid
from hedgesim.paths.prices import SeriesColumns, read_prices
from hedgesim.schedules import Schedule

LIFE, RATE, YIELD = 21, 0.01, 0.02
EVERY = (1, 2, 5, 10, 21)
HALF_SPREAD, PER_UNIT, PER_TRADE = 0.0002, 0.01, 0.05


@pytest.fixture(scope="module")
def index():
    """Closes of the S&P 500 and of the VIX, 2014-2018, as shipped with the `arch` package."""
    sp500 = pytest.importorskip("arch.data.sp500").load()
    vix = pytest.importorskip("arch.data.vix").load()
    joined = sp500[["Close"]].join(vix, how="inner").dropna()
    assert len(joined) == 1257
    return joined


@pytest.fixture(scope="module")
def replayed(index, tmp_path_factory):
    file = tmp_path_factory.mktemp("prices") / "index.csv"
    index.to_csv(file, date_format="%Y-%m-%d")
    history = read_prices(
        file,
        time="Date",
        time_unit_years=None,
        series={"index": SeriesColumns("Close", "vix", 0.01)},
        day_count="business-252",
    )
    call = Position(
        underlying=0,
        is_call=True,
        strike=1.0,
        strike_of_spot=True,
        amount=-1.0,
        is_notional=False,
        expiry=Expiry(days=float(LIFE)),
    )
    laid = lay_inceptions(
        history,
        [call],
        rate=RATE,
        yield_rate=np.array([YIELD]),
        is_future=np.zeros(1, bool),
        mark_vol=np.array([np.nan]),
        hedge_vol=np.array([np.nan]),
        initial_units=np.zeros(1),
        schedules=[Schedule(f"every {n}d", "days", float(n)) for n in EVERY],
        inceptions=Inceptions("days", 1.0),
    )
    costs = CostTerms(np.array([HALF_SPREAD]), np.array([PER_UNIT]), np.array([PER_TRADE]))
    return laid, replay_laid(laid, costs=costs, seed=11)


def hedged_short_call(index: pd.DataFrame, every: int) -> pd.DataFrame:
    """Final account of a short at-the-money call sold at every close, discounted, and the costs paid."""
    close, vol = index["Close"], index["vix"] / 100
    strike = close
    cash = pd.Series(0.0, index=index.index)
    held = pd.Series(0.0, index=index.index)
    costs = pd.Series(0.0, index=index.index)
    for day in range(LIFE + 1):
        spot, tau = close.shift(-day), (LIFE - day) / 252
        if day > 0:
            cash = cash * np.exp(RATE / 252) + held * spot * (np.exp(YIELD / 252) - 1)
        if day == LIFE:
            cash = cash - (spot - strike).clip(lower=0.0)
            wanted = pd.Series(0.0, index=index.index)
        else:
            root = vol * np.sqrt(tau)
            d1 = (np.log(spot / strike) + (RATE - YIELD) * tau) / root + root / 2
            wanted = np.exp(-YIELD * tau) * ndtr(d1)
            if day == 0:
                cash = cash + spot * wanted - strike * np.exp(-RATE * tau) * ndtr(d1 - root)
        if day % every == 0 or day == LIFE:
            trade = wanted - held
            # No ticket for a trade below 1e-9 of the book's units: the delta of a call that is all but worthless.
            cost = HALF_SPREAD * trade.abs() * spot + PER_UNIT * trade.abs() + PER_TRADE * (trade.abs() > 1e-9)
            cash = cash - trade * spot - cost
            costs = costs + cost * np.exp(-RATE * day / 252)
            held = held + trade
    return pd.DataFrame({"total": cash * np.exp(-RATE * LIFE / 252), "costs": costs, "spot": close}).iloc[:-LIFE]


@pytest.mark.parametrize("every", EVERY)
def test_every_inception_agrees_with_the_plain_account(index, replayed, every):
    _, ledger = replayed
    k = ledger.schedules.index(f"every {every}d")
    plain = hedged_short_call(index, every)
    assert ledger.count == len(plain) == 1257 - LIFE
    assert (np.abs(ledger.totals[k] - plain["total"]) / plain["spot"]).max() < 1e-10
    costs = -ledger.detail[k, 0, 6:9].sum(axis=0)
    assert (np.abs(costs - plain["costs"]) / plain["spot"]).max() < 1e-10


def test_identity_holds_on_every_inception(replayed):
    laid, ledger = replayed
    spot = np.array([life.market.spot[0] for life in laid.inceptions])
    gap = ledger.detail.sum(axis=(1, 2)) - ledger.totals
    assert np.abs(gap / spot).max() < 1e-12


def test_the_daily_schedule_is_the_reference_and_none_is_added(replayed):
    laid, ledger = replayed
    assert ledger.schedules == tuple(f"every {n}d" for n in EVERY)
    assert ledger.reference == 0
    assert not laid.reference_added
    assert np.abs(ledger.detail[0, 0, ledger.components.index("lag")]).max() < 1e-9


def test_vols_strikes_and_dates_are_those_of_the_inception(index, replayed):
    laid, _ = replayed
    for n in (0, 500, 1235):
        life = laid.inceptions[n]
        assert life.label == str(index.index[n].date())
        assert life.book.strike[0] == life.market.spot[0] == index["Close"].iloc[n]
        assert life.book.mark_vol[0] == life.book.hedge_vol[0] == pytest.approx(index["vix"].iloc[n] / 100, rel=1e-15)
        assert life.book.expiry_look[0] == life.grid.looks == LIFE


def test_variance_below_the_look_is_that_of_steps_conditionally_normal(replayed):
    # Given g and the variance v of a look, Var(1/2 g (R^2 - v)) = 1/2 g^2 v^2 and E[R^4] = 3 v^2: so (1/6) g^2 R^4.
    laid, ledger = replayed
    from hedgesim.pricing import greeks

    total = 0.0
    for life in laid.inceptions:
        tau = life.book.expiry_t[0] - life.grid.t[:-1]
        gamma = greeks(
            life.price[0, :-1],
            life.book.strike[0],
            years=tau,
            variance_years=tau,
            vol=life.book.hedge_vol[0],
            rate=RATE,
            growth=RATE - YIELD,
            is_call=True,
        ).gamma
        x = life.price[0] * np.exp(-(RATE - YIELD) * life.grid.t)
        g = np.exp(-RATE * life.grid.t[:-1]) * life.price[0, :-1] ** 2 * gamma
        total += (g**2 * (np.diff(x) / x[:-1]) ** 4).sum() / 6
    assert ledger.below_look == pytest.approx(total / ledger.count, rel=1e-10)


def test_bootstrap_error_of_the_mean_is_the_stationary_bootstraps_own(replayed):
    # The stationary bootstrap of Politis and Romano (1994), JASA 89: two places i apart fall in one block with
    # probability (1-p)^i and are independent otherwise, so that given the data n Var(mean*) is
    # c(0) + 2 sum (1 - i/n) (1-p)^i c(i) with circular autocovariances c (derived). 999 resamples know a standard
    # deviation to 2.2 %; the limit is four of those.
    _, ledger = replayed
    n, p = ledger.count, 1 / LIFE
    lag = np.arange(1, n)
    mean = ledger.replicates.mean.sum(axis=2)
    for k in range(len(ledger.schedules)):
        x = ledger.totals[k] - ledger.totals[k].mean()
        c = np.fft.ifft(np.abs(np.fft.fft(x)) ** 2).real / n
        variance = (c[0] + 2 * ((1 - lag / n) * (1 - p) ** lag * c[1:]).sum()) / n
        assert float(ledger.replicates.spread(mean[:, k])) == pytest.approx(np.sqrt(variance), rel=0.09)
        # The overlap of lives matters: independent inceptions would claim far less.
        assert variance > 4 * c[0] / n
