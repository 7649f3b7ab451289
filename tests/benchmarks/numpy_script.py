"""The baseline: the same ledger for the standard desk, as a good numpy user would write it.

Time runs outside and a block of paths inside; the delta and gamma of the book are computed once a look and shared by
the schedules; arrays are reused where numpy allows it; a schedule is touched only at its own trades.
"""

from typing import Any

import numpy as np
from scipy.special import ndtr

BLOCK = 4096


def ledger(case: dict[str, Any], paths: int, seed: int = 7) -> dict[str, np.ndarray]:
    """Components by path: vol_gap, sampling, remainder (path,), lag, spread, total (schedule, path)."""
    blocks = [_block(case, min(BLOCK, paths - begin), [seed, begin]) for begin in range(0, paths, BLOCK)]
    return {name: np.concatenate([b[name] for b in blocks], axis=-1) for name in blocks[0]}


def _block(case: dict[str, Any], n: int, seed: list[int]) -> dict[str, np.ndarray]:
    market, book, grid, source = case["market"], case["book"], case["grid"], case["source"]
    random = np.random.Generator(np.random.SFC64(seed))
    trades_at, half_spread = case["compiled"].trades_at, float(case["costs"].half_spread[0])
    rate, growth, spread_yield = market.rate, float(market.growth[0]), float(market.yield_rate[0])
    vol, drift = float(source.realised_vol[0]), float(source.drift[0])
    schedules, looks = len(trades_at), grid.looks
    a = book.units * np.exp((growth - rate) * book.expiry_t)
    d = book.units * book.strike * np.exp(-rate * book.expiry_t)
    log_strike = np.log(book.strike) - growth * book.expiry_t
    call = np.where(book.is_call, 0.0, 1.0)
    x = np.full(n, float(market.spot[0]))
    gap, sampling, slope_gain, paid = (np.zeros(n) for _ in range(4))
    earned, normals = np.zeros(n), np.empty(n)
    hedge, gain, spread = (np.zeros((schedules, n)) for _ in range(3))
    start = None
    for i in range(looks + 1):
        for j in np.flatnonzero(book.expiry_look == i):
            sign = 1.0 if book.is_call[j] else -1.0
            paid += np.maximum(sign * (a[j] * x - d[j]) / book.units[j], 0.0) * book.units[j]
        live = np.flatnonzero(book.expiry_look > i)
        if len(live):
            root = book.hedge_vol[live] * np.sqrt(book.expiry_s[live] - grid.s[i])
            d1 = np.log(x)[:, None] - log_strike[live]
            d1 /= root
            d1 += 0.5 * root
            cdf = ndtr(d1)
            cdf -= call[live]
            slope = cdf @ a[live]
            if start is None:
                start = float(slope[0] * x[0] - (ndtr(d1[0] - root) - call[live]) @ d[live])
            np.square(d1, out=d1)
            d1 *= -0.5
            np.exp(d1, out=d1)
            gamma = d1 @ (a[live] / (root * np.sqrt(2 * np.pi)))
            gamma *= x
        else:
            slope = np.zeros(n)
            gamma = slope
        target = -slope * np.exp(spread_yield * grid.t[i]) if i < looks else np.zeros(n)
        price = x * np.exp((growth - rate) * grid.t[i])
        for s in np.flatnonzero(trades_at[:, i]):
            bought = target - hedge[s]
            hedge[s] = target
            gain[s] -= bought * earned
            np.abs(bought, out=bought)
            bought *= price
            spread[s] += bought
        if i < looks:
            dt, ds = grid.t[i + 1] - grid.t[i], grid.s[i + 1] - grid.s[i]
            variance = vol**2 * ds
            random.standard_normal(out=normals)
            normals *= np.sqrt(variance)
            normals += (drift - growth) * dt - 0.5 * variance
            ret = np.expm1(normals)
            dx = x * ret
            np.square(ret, out=ret)
            ret -= variance
            ret *= gamma
            sampling += 0.5 * ret
            gap += 0.5 * (variance - float(book.hedge_vol[0]) ** 2 * ds) * gamma
            slope_gain += slope * dx
            earned += np.exp(-spread_yield * grid.t[i]) * dx
            x += dx
    spread *= -half_spread
    remainder = paid - start - slope_gain - gap - sampling
    return {
        "vol_gap": gap,
        "sampling": sampling,
        "remainder": remainder,
        "lag": slope_gain + gain,
        "spread": spread,
        "total": paid - start + gain + spread,
    }
