"""The P&L identity on the replay kernel, and the kernel against its plain twin."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from replay_cases import gross_values, random_costs, random_history, random_terms

from hedgesim.engine.inceptions import Inceptions, lay_inceptions
from hedgesim.engine.ledger import COST_COMPONENTS
from hedgesim.engine.replay import COMPONENTS, replay_laid
from hedgesim.engine.story import look_by_look, story

EVERY_WAY = [
    pytest.param(remark, early, Inceptions(kind, amount), id=f"{remark}-{'early' if early else 'full'}-{kind}")
    for remark in ("inception", "daily")
    for early in (False, True)
    for kind, amount in (("once", 1.0), ("days", 4.0), ("looks", 3.0))
]


def lay(seed: int, remark: str, early: bool, inceptions: Inceptions, **options):
    history = random_history(seed, **options)
    terms = random_terms(seed, history=history, remark=remark, early_horizon=early)
    return lay_inceptions(history, inceptions=inceptions, **terms)


@settings(deadline=None, max_examples=60)
@given(
    seed=st.integers(0, 2**32 - 1),
    remark=st.sampled_from(["inception", "daily"]),
    early=st.booleans(),
    rows_per_day=st.integers(1, 4),
)
def test_components_add_to_the_cash_account(seed, remark, early, rows_per_day):
    laid = lay(seed, remark, early, Inceptions("days", 3.0), rows_per_day=rows_per_day)
    ledger = replay_laid(laid, costs=random_costs(seed), seed=0, threads=1)
    gap = ledger.detail.sum(axis=(1, 2)) - ledger.totals
    assert np.abs(gap / gross_values(laid)).max() < 1e-9


@pytest.mark.parametrize(("remark", "early", "inceptions"), EVERY_WAY)
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_kernel_agrees_with_the_plain_twin_component_by_component(seed, remark, early, inceptions):
    laid = lay(seed, remark, early, inceptions)
    costs = random_costs(seed)
    ledger = replay_laid(laid, costs=costs, seed=0, threads=1)
    for n, life in enumerate(laid.inceptions):
        mark, hedge = laid.vol_paths(n)
        limit = 1e-10 * gross_values(laid)[n]
        for k in range(len(ledger.schedules)):
            told = look_by_look(
                life.book, life.market, life.grid, life.compiled, k, costs, life.price, mark_path=mark, hedge_path=hedge
            )
            for c, name in enumerate(COMPONENTS):
                assert ledger.detail[k, :, c, n] == pytest.approx(told.components[name][:, -1], rel=1e-9, abs=limit)
            assert ledger.totals[k, n] == pytest.approx(told.components["total"][:, -1].sum(), rel=1e-9, abs=limit)
            assert ledger.trades_detail[k, n] == np.count_nonzero(told.ticket)
            notional = (np.abs(told.trade) * life.price * np.exp(-life.market.rate * life.grid.t)).sum()
            assert ledger.turnover_detail[k, n] == pytest.approx(notional, rel=1e-10)


@pytest.mark.parametrize("given_variance", [False, True])
def test_components_of_a_story_add_to_its_total_at_every_look(given_variance):
    laid = lay(5, "daily", False, Inceptions("once"))
    life, costs = laid.inceptions[0], random_costs(5)
    mark, hedge = laid.vol_paths(0)
    variance = np.random.default_rng(1).uniform(0.0, 0.001, (2, life.grid.looks)) if given_variance else None
    for k in range(len(life.compiled.names)):
        told = story(
            life.book,
            life.market,
            life.grid,
            life.compiled,
            k,
            costs,
            life.price,
            label="",
            path=0,
            variance=variance,
            mark_path=mark,
            hedge_path=hedge,
        )
        parts = dict(told.components)
        total = parts.pop("total")
        assert ("sampling" in parts) == given_variance
        assert np.abs(sum(parts.values()) - total).max() < 1e-9 * gross_values(laid)[0]


def test_every_component_is_exercised():
    # The other tests of this file would hold for components that are always zero.
    laid = lay(1, "daily", False, Inceptions("days", 4.0))
    ledger = replay_laid(laid, costs=random_costs(1), seed=0)
    for name in COMPONENTS:
        assert np.abs(ledger.detail[:, :, COMPONENTS.index(name)]).max() > 1.0, name
    assert all(name in COMPONENTS for name in COST_COMPONENTS)


def test_watch_and_variance_below_the_look_agree_with_the_plain_twin():
    laid = lay(7, "daily", False, Inceptions("days", 4.0))
    costs = random_costs(7)
    ledger = replay_laid(laid, costs=costs, seed=0)
    for k in range(len(ledger.schedules)):
        gaps, days, worst, below = [], [], [], []
        for n, life in enumerate(laid.inceptions):
            mark, hedge = laid.vol_paths(n)
            told = look_by_look(
                life.book, life.market, life.grid, life.compiled, k, costs, life.price, mark_path=mark, hedge_path=hedge
            )
            gaps.append((np.abs(told.hedge - told.target) * life.price).sum(axis=0)[:-1])
            closes = np.flatnonzero(life.grid.is_close | (np.arange(life.grid.looks + 1) == life.grid.looks))
            total = told.components["total"].sum(axis=0)[closes[closes > 0]]
            days.append(np.diff(total, prepend=0.0))
            worst.append(days[-1].min())
            below.append(below_look(life, hedge))
        assert ledger.watch.delta_mean[k] == pytest.approx(np.concatenate(gaps).mean(), rel=1e-9, abs=1e-6)
        assert ledger.watch.delta_p99[k] == pytest.approx(np.quantile(np.concatenate(gaps), 0.99), rel=1e-9, abs=1e-6)
        assert ledger.watch.day_std[k] == pytest.approx(np.concatenate(days).std(ddof=1), rel=1e-9)
        assert ledger.watch.day_worst[k] == pytest.approx(np.mean(worst), rel=1e-9)
        # A bump of 1e-5 against at least 0.4 % of spot in half a day at 10 % vol: squared, 6e-6 of the gamma.
        assert ledger.below_look == pytest.approx(np.mean(below), rel=1e-5)


def below_look(life, hedge):
    """(1/6) sum g^2 R^4 with g by finite difference of the plain delta: a second way to the same number."""
    from hedgesim.pricing import greeks

    total = 0.0
    book, market, grid = life.book, life.market, life.grid
    for i in range(grid.looks):
        g = np.zeros(len(market.names))
        for j in np.flatnonzero(book.expiry_look > i):
            u = book.underlying[j]
            spot = life.price[u, i]
            up, down = (
                greeks(
                    spot * (1 + bump),
                    book.strike[j],
                    years=book.expiry_t[j] - grid.t[i],
                    variance_years=book.expiry_s[j] - grid.s[i],
                    vol=hedge[j, i],
                    rate=market.rate,
                    growth=market.growth[u],
                    is_call=book.is_call[j],
                ).delta
                for bump in (1e-5, -1e-5)
            )
            g[u] += book.units[j] * np.exp(-market.rate * grid.t[i]) * spot * float(up - down) / 2e-5
        for u in range(len(market.names)):
            growth = np.exp(-market.growth[u] * (grid.t[i + 1] - grid.t[i]))
            move = life.price[u, i + 1] / life.price[u, i] * growth - 1.0
            total += (g[u] * move * move) ** 2 / 6.0
    return total
