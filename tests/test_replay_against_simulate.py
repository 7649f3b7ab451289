"""The two engines on the same prices: simulated paths, replayed as if they were a price history."""

import numpy as np
import pytest
from simulate_cases import random_experiment

from hedgesim.book import gross_value
from hedgesim.engine.inceptions import Inception, Laid
from hedgesim.engine.replay import replay_laid
from hedgesim.engine.simulate import simulate
from hedgesim.engine.story import look_by_look
from hedgesim.market import frozen
from hedgesim.paths.prices import PriceHistory
from hedgesim.tables import TOLERANCE

PATHS = 64


def as_history(case, price) -> Laid:
    """One simulated path as the one inception of a price history."""
    grid, book = case["grid"], case["book"]
    history = PriceHistory(
        file="",
        names=case["market"].names,
        label=tuple(str(i) for i in range(grid.looks + 1)),
        line=frozen(np.arange(grid.looks + 1), np.int64),
        date=None,
        t=grid.t,
        s=grid.s,
        clock=grid.clock,
        is_open=grid.is_open,
        is_close=grid.is_close,
        price=frozen(price),
        mark_vol=None,
        mark_vol_column=(None,) * len(price),
        days_per_year=252,
        notes=(),
    )
    fixed = frozen(np.zeros(book.size), bool)
    return Laid(
        history=history,
        inceptions=(Inception(0, "0", case["market"], grid, book, case["compiled"], history.price),),
        mark_follows=fixed,
        hedge_follows=fixed,
        reference=0,
        reference_added=False,
        notes=(),
    )


def doubtful_trades(case, price) -> np.ndarray:
    """Trades so small that tables and closed forms may differ on whether there is one, (schedule, underlying)."""
    book, market = case["book"], case["market"]
    units = np.bincount(book.underlying, np.abs(book.units), len(market.names))
    counts = []
    for k in range(len(case["compiled"].names)):
        told = look_by_look(book, market, case["grid"], case["compiled"], k, case["costs"], price)
        size = np.abs(told.trade[:, case["compiled"].trades_at[k]])
        counts.append((size < 4 * TOLERANCE * units[:, None]).sum(axis=1))
    return np.array(counts)


@pytest.mark.parametrize("early_horizon", [False, True])
@pytest.mark.parametrize("seed", [0, 1, 2, 3])
def test_engines_agree_path_by_path_and_component_by_component(seed, early_horizon):
    # The simulating engine reads its book from tables with a certified error; replay uses closed forms.
    case = random_experiment(seed, early_horizon=early_horizon)
    simulated = simulate(**case, count=PATHS, threads=1, detail=True)
    price = case["source"].prices(case["market"], case["grid"], first_path=0, count=PATHS)
    limit = TOLERANCE * gross_value(case["book"], case["market"])
    of = {name: simulated.detail[:, :, c] for c, name in enumerate(simulated.components)}
    of["vol_gap_seen"] = of["vol_gap"] + of["sampling"]
    of["vol_mark"] = np.zeros_like(of["lag"])
    for p in range(PATHS):
        replayed = replay_laid(as_history(case, price[:, :, p]), costs=case["costs"], threads=1)
        gap = {name: replayed.detail[:, :, c, 0] - of[name][:, :, p] for c, name in enumerate(replayed.components)}
        # Discounting at -2 % or more over ten days makes a ticket at most 1.001 of its charge.
        tickets = gap.pop("costs.tickets")
        assert (
            np.abs(tickets) <= doubtful_trades(case, price[:, :, p]) * 1.001 * case["costs"].per_trade + limit
        ).all()
        for name, difference in gap.items():
            assert np.abs(difference).max() < limit, name
        assert np.abs(replayed.totals[:, 0] - simulated.totals[:, p] - tickets.sum(axis=1)).max() < limit
        assert replayed.turnover_detail[:, 0] == pytest.approx(simulated.turnover_detail[:, p], rel=1e-6)
