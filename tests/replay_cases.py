"""Random price histories, books and costs for the tests of the replay engine."""

import numpy as np

from hedgesim.book import Expiry, Position
from hedgesim.costs import CostTerms
from hedgesim.market import frozen
from hedgesim.paths.prices import PriceHistory
from hedgesim.schedules import Schedule

SCHEDULES = (
    Schedule("every 2 looks", "looks", 2),
    Schedule("every 3d", "days", 3.0),
    Schedule("at closes", "sessions", edges=("close",)),
    Schedule("entry only", "never"),
)


def random_history(seed: int, *, days: int = 40, rows_per_day: int = 2, underlyings: int = 2) -> PriceHistory:
    """Lognormal prices with a wandering mark vol; day 0 has one row, its close."""
    random = np.random.default_rng([seed, 1])
    rows = (days - 1) * rows_per_day + 1
    clock = np.arange(rows) / rows_per_day
    day = np.ceil(clock).astype(int)
    steps = random.normal(0.0, 0.25 / np.sqrt(252 * rows_per_day), (underlyings, rows - 1))
    price = 100.0 * np.exp(np.concatenate([np.zeros((underlyings, 1)), np.cumsum(steps, axis=1)], axis=1))
    vol = 0.22 * np.exp(np.cumsum(random.normal(0.0, 0.03, (underlyings, rows)), axis=1))
    return PriceHistory(
        file="prices.csv",
        names=tuple("ABC"[:underlyings]),
        label=tuple(f"row {i}" for i in range(rows)),
        line=frozen(np.arange(rows) + 2, np.int64),
        date=frozen(day + 730_000, np.int64),
        t=frozen(clock / 252),
        s=frozen(clock / 252),
        clock=frozen(clock),
        is_open=frozen(np.diff(day, prepend=-1) > 0, bool),
        is_close=frozen(np.diff(day, append=day[-1] + 1) > 0, bool),
        price=frozen(price),
        mark_vol=frozen(vol),
        mark_vol_column=("iv",) * underlyings,
        days_per_year=252,
        notes=(),
    )


def random_terms(seed: int, *, history: PriceHistory, remark: str, early_horizon: bool, positions: int = 6) -> dict:
    """Everything `lay_inceptions` needs besides the history, and the costs."""
    random = np.random.default_rng([seed, 2])
    n = len(history.names)
    expiries = random.choice([3.0, 7.0, 7.5, 12.0, 15.0], size=positions)

    def sometimes(value: float) -> float | None:
        return value if random.random() < 0.4 else None

    book = [
        Position(
            underlying=int(random.integers(n)),
            is_call=bool(random.integers(2)),
            strike=float(random.uniform(0.9, 1.1)) * (1.0 if relative else 100.0),
            strike_of_spot=relative,
            amount=float(random.normal(0.0, 1000.0)) * (1.0 if units else 100.0),
            is_notional=not units,
            expiry=Expiry(days=float(days)) if random.random() < 0.7 else Expiry(years=float(days) / 252),
            mark_vol=sometimes(random.uniform(0.1, 0.4)),
            hedge_vol=sometimes(random.uniform(0.1, 0.4)),
            premium=sometimes(random.uniform(0.0, 5.0)),
            physical=bool(random.integers(2)),
        )
        for days, relative, units in zip(
            expiries, random.integers(2, size=positions) > 0, random.integers(2, size=positions) > 0, strict=True
        )
    ]
    rate = float(random.uniform(-0.05, 0.15))
    future = random.random(n) < 0.4
    return {
        "positions": book,
        "rate": rate,
        "yield_rate": np.where(future, rate, random.uniform(-0.05, 0.15, n)),
        "is_future": future,
        "mark_vol": np.where(random.random(n) < 0.7, np.nan, random.uniform(0.1, 0.4, n)),
        "hedge_vol": np.where(random.random(n) < 0.6, np.nan, random.uniform(0.1, 0.4, n)),
        "remark": remark,
        "initial_units": random.normal(0.0, 1000.0, n),
        "schedules": SCHEDULES,
        "horizon": Expiry(days=5.0) if early_horizon else None,
    }


def random_costs(seed: int, underlyings: int = 2) -> CostTerms:
    random = np.random.default_rng([seed, 3])
    return CostTerms(
        half_spread=random.uniform(0.0, 0.01, underlyings),
        per_unit=random.uniform(0.0, 0.05, underlyings),
        per_trade=random.uniform(0.0, 20.0, underlyings),
    )


def gross_values(laid) -> np.ndarray:
    """Gross option value by inception, the yardstick of the identity."""
    from hedgesim.book import gross_value

    return np.array([gross_value(life.book, life.market) for life in laid.inceptions])
