"""Ledgers made from per-path components, and a plain hedging simulation to fill them."""

from dataclasses import dataclass

import numpy as np

from hedgesim.engine.ledger import Ledger, Moments, Replicates, Watch
from hedgesim.market import frozen
from hedgesim.pricing import greeks
from hedgesim.schedules import Compiled


def build_ledger(
    detail,
    *,
    components,
    schedules=None,
    underlyings=("CORVANE",),
    groups=32,
    resamples=None,
    reference=-1,
    keep_detail=True,
    engine="simulate",
    below_look=float("nan"),
):
    """Ledger from `detail` (schedule, underlying, component, path); bootstrap when `resamples` (resample, path) is given.

    `groups` of zero leaves the ledger without resamples.
    """
    s, u, c, n = detail.shape
    flat = detail.reshape(s, u * c, n)
    if resamples is None:
        cut = np.arange(n) * groups // n
        pairs = [_moments(flat[:, :, cut != g]) for g in range(groups)]
        factor, kind = (groups - 1) / max(groups, 1), "jackknife"
    else:
        pairs = [_moments(flat[:, :, pick]) for pick in resamples]
        factor, kind = 1.0 / (len(resamples) - 1), "bootstrap"
    mean, cov = _moments(flat)
    zeros = np.zeros(s)
    return Ledger(
        engine=engine,
        schedules=tuple(schedules or (f"s{i}" for i in range(s))),
        underlyings=tuple(underlyings),
        components=tuple(components),
        count=n,
        moments=Moments(frozen(mean), frozen(cov)),
        replicates=Replicates(
            frozen(np.array([p[0] for p in pairs]).reshape(-1, *mean.shape)),
            frozen(np.array([p[1] for p in pairs]).reshape(-1, *cov.shape)),
            factor,
            kind,
        ),
        totals=frozen(flat.sum(axis=1)),
        trades=frozen(np.arange(s) + 2.0),
        turnover=frozen(zeros + 1000.0),
        reference=reference,
        watch=Watch(n, frozen(zeros + 3.0), frozen(zeros + 9.0), frozen(zeros + 1.0), frozen(zeros - 2.0)),
        resamples=None if resamples is None else frozen(resamples, np.int64),
        detail=frozen(detail) if keep_detail else None,
        below_look=below_look,
    )


def _moments(flat):
    mean = flat.mean(axis=-1)
    centred = flat - mean[..., None]
    with np.errstate(invalid="ignore"):  # one path has no covariance
        return mean, centred @ centred.transpose(0, 2, 1) / np.float64(flat.shape[-1] - 1)


def compiled(names, trades, *, looks=None, years=0.25, equal=None):
    """Time-based rules of `trades` equal intervals over `years`."""
    looks = looks or int(max(trades))
    trades_at = np.zeros((len(names), looks + 1), dtype=bool)
    for row, n in enumerate(trades):
        trades_at[row, np.round(np.arange(n + 1) * looks / n).astype(int)] = True
    return Compiled(
        names=tuple(names),
        trades_at=frozen(trades_at, bool),
        intervals=frozen(trades, np.int64),
        interval_years=frozen(years / np.asarray(trades, dtype=float)),
        equal=frozen(np.ones(len(names)) if equal is None else equal, bool),
    )


HEDGED = ("revaluation", "vol_gap", "sampling", "lag", "remainder", "costs.spread", "costs.tickets")


@dataclass(frozen=True)
class Hedged:
    """Result of `hedge_calls`: components (schedule, component, path) and the cash account (schedule, path)."""

    components: np.ndarray
    cash: np.ndarray


def hedge_calls(
    *, trades, looks, paths, seed, realised=0.25, vol=0.2, units=-1.0, years=0.25, half_spread=0.0005, ticket=0.0
):
    """Short-call hedges under GBM without rate, `trades` equal intervals; identity parts and the cash account apart."""
    rng = np.random.default_rng(seed)
    strike, dt = 100.0, years / looks
    price = np.full(paths, 100.0)
    size = len(trades)
    held, cash = np.zeros((size, paths)), np.zeros((size, paths))
    out = np.zeros((size, len(HEDGED), paths))
    g = _call(price, strike, years, vol)
    value, target, gamma = units * g.value, -units * g.delta, units * g.gamma
    cash -= value
    for i in range(looks):
        for row, n in enumerate(trades):
            if i % (looks // n) == 0:
                _trade(out[row], cash[row], held[row], target, price, half_spread, ticket)
        after = price * np.exp(realised * np.sqrt(dt) * rng.standard_normal(paths) - 0.5 * realised**2 * dt)
        step, square = after - price, np.square(after / price - 1.0)
        cash_gamma = gamma * np.square(price)
        out[:, 1] += 0.5 * cash_gamma * (np.expm1(realised**2 * dt) - vol**2 * dt)
        out[:, 2] += 0.5 * cash_gamma * (square - np.expm1(realised**2 * dt))
        out[:, 3] += (held - target) * step
        g = _call(after, strike, years - (i + 1) * dt, vol)
        change = units * g.value - value
        out[:, 4] += change + target * step - 0.5 * cash_gamma * (square - vol**2 * dt)
        price, value, target, gamma = after, units * g.value, -units * g.delta, units * g.gamma
    for row in range(size):
        _trade(out[row], cash[row], held[row], np.zeros(paths), price, half_spread, ticket)
    return Hedged(out, cash + units * np.maximum(price - strike, 0.0) + 0.0)


def _trade(out, cash, held, to, price, half_spread, ticket):
    size = np.abs(to - held)
    spread, tickets = -half_spread * size * price, -ticket * (size > 0)
    out[5] += spread
    out[6] += tickets
    cash += (held - to) * price + spread + tickets
    held[:] = to


def _call(price, strike, years, vol):
    return greeks(
        price,
        strike,
        years=years,
        variance_years=max(years, 0.0) if years > 1e-12 else 0.0,
        vol=vol,
        rate=0.0,
        growth=0.0,
        is_call=True,
    )
