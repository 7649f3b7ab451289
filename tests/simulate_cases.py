"""Small simulated experiments for the tests of the simulating engine."""

from dataclasses import replace
from typing import Any

import numpy as np

from hedgesim.book import Expiry, Position, expiry_looks, settle_terms
from hedgesim.costs import CostTerms
from hedgesim.market import LookGrid, Market, frozen, horizon_grid, session_grid
from hedgesim.paths.gbm import Gbm
from hedgesim.schedules import Schedule, compile_schedules

FREE = CostTerms(half_spread=frozen([0.0]), per_unit=frozen([0.0]), per_trade=frozen([0.0]))


def one_option(
    *,
    spot: float,
    strike: float,
    years: float,
    looks: int,
    rate: float,
    vol: float,
    schedules: tuple[Schedule, ...],
    realised: float | None = None,
    drift: float | None = None,
    units: float = -1.0,
    hedge_vol: float | None = None,
    seed: int = 1,
    costs: CostTerms = FREE,
) -> dict[str, Any]:
    """One call on one underlying over `looks` equal looks, as arguments of `simulate`; drift defaults to the rate."""
    market = Market(("H",), rate, frozen([spot]), frozen([0.0]), frozen([False], bool))
    grid = horizon_grid(years=years, looks=looks, day_count="business-252")
    book = settle_terms(
        [Position(0, True, strike, False, units, False, Expiry(years=years))],
        spot=market.spot,
        mark_vol=np.array([vol]),
        hedge_vol=np.array([np.nan if hedge_vol is None else hedge_vol]),
        expiry_look=np.array([looks]),
        expiry_t=np.array([years]),
        expiry_s=np.array([years]),
        initial_units=np.array([0.0]),
    )
    return {
        "market": market,
        "book": book,
        "grid": grid,
        "compiled": compile_schedules(schedules, grid, expiry_looks(book)),
        "source": Gbm(
            frozen([vol if realised is None else realised]), frozen([rate if drift is None else drift]), np.eye(1), seed
        ),
        "costs": costs,
    }


def cut_short(case: dict[str, Any], looks: int) -> dict[str, Any]:
    """The same case with the horizon at look `looks`: what is open then is valued at mark."""
    grid = case["grid"]
    part = LookGrid(*(getattr(grid, name)[: looks + 1] for name in ("t", "s", "clock", "is_open", "is_close")), True)
    trades = case["compiled"].trades_at[:, : looks + 1].copy()
    trades[:, looks] = True
    book = replace(case["book"], expiry_look=np.full(case["book"].size, looks + 1))
    return case | {"grid": part, "book": book, "compiled": replace(case["compiled"], trades_at=trades)}


def random_experiment(seed: int, *, underlyings: int = 2, early_horizon: bool = False) -> dict[str, Any]:
    """A book with everything switched on: own vols, several expiries, both settlements, premiums, units held."""
    random = np.random.default_rng([seed, 11])
    positions, days = 7, 10
    grid: LookGrid = session_grid(
        days=days if not early_horizon else 8,
        looks_per_day=3,
        day_count="business-252",
        session_hours=8.0,
        overnight=float(random.choice([0.0, 0.3])),
    )
    n = underlyings
    rate = float(random.uniform(-0.02, 0.12))
    future = random.random(n) < 0.4
    market = Market(
        tuple("ABC"[:n]),
        rate,
        frozen(random.uniform(20.0, 200.0, n)),
        frozen(np.where(future, rate, random.uniform(-0.05, 0.1, n))),
        frozen(future, bool),
    )
    expiry_days = random.choice([3, 7, 10], size=positions)
    expiry_days[0] = 10
    look = np.array([int(np.searchsorted(grid.clock, d - 1e-9)) for d in expiry_days])
    book = settle_terms(
        [
            Position(
                underlying=j % n,
                is_call=bool(random.integers(2)),
                strike=float(random.uniform(0.93, 1.07)),
                strike_of_spot=True,
                amount=float(random.normal(0.0, 500.0)),
                is_notional=False,
                expiry=Expiry(days=float(expiry_days[j])),
                mark_vol=float(random.uniform(0.15, 0.4)) if random.random() < 0.6 else None,
                hedge_vol=float(random.uniform(0.15, 0.4)) if random.random() < 0.6 else None,
                premium=float(random.uniform(0.0, 4.0)) if random.random() < 0.5 else None,
                physical=bool(random.integers(2)),
            )
            for j in range(positions)
        ],
        spot=market.spot,
        mark_vol=random.uniform(0.15, 0.4, n),
        hedge_vol=np.full(n, np.nan),
        expiry_look=np.where(look > grid.looks, grid.looks + 1, look),
        expiry_t=expiry_days / 252,
        expiry_s=expiry_days / 252,
        initial_units=random.normal(0.0, 300.0, n),
    )
    correlation = np.eye(n)
    if n > 1:
        correlation[0, 1] = correlation[1, 0] = float(random.uniform(-0.8, 0.8))
    rules = (
        Schedule("every look", "looks", 1),
        Schedule("every 4 looks", "looks", 4),
        Schedule("every 1d", "days", 1.0),
        Schedule("at open", "sessions", edges=("open",)),
        Schedule("entry only", "never"),
    )
    return {
        "market": market,
        "book": book,
        "grid": grid,
        "compiled": compile_schedules(rules, grid, expiry_looks(book)),
        "source": Gbm(
            frozen(random.uniform(0.1, 0.5, n)), frozen(random.uniform(-0.2, 0.3, n)), correlation, int(seed)
        ),
        "costs": CostTerms(
            frozen(random.uniform(0.0, 1e-3, n)), frozen(random.uniform(0.0, 0.05, n)), frozen(random.uniform(0, 5, n))
        ),
    }
