"""The exact engine against a plain twin: every path of a few looks, enumerated by product quadrature."""

from dataclasses import replace

import numpy as np
import pytest
from simulate_cases import cut_short

from hedgesim.book import Expiry, Position, expiry_looks, premium_received, settle_terms
from hedgesim.costs import CostTerms
from hedgesim.engine.exact import exact
from hedgesim.market import LookGrid, Market, frozen, horizon_grid
from hedgesim.paths.gbm import Gbm
from hedgesim.pricing import greeks
from hedgesim.schedules import Compiled, Schedule, compile_schedules


def small_case(*, future=False, rate=0.06, yield_rate=0.02, drift=0.15, physical=False, hedge_vol=0.22, realised=0.30,
               costs=(2e-3, 0.02, 0.0), initial=0.0, trades=((1, 1, 1, 1), (1, 0, 1, 1))):  # fmt: skip
    """Three looks of unequal length; a book of mixed signs, one position settles at look 2, the others at look 3."""
    t = np.array([0.0, 0.03, 0.10, 0.16])
    s = np.array([0.0, 0.04, 0.09, 0.16])
    edges = frozen(np.ones(4), bool)
    grid = LookGrid(frozen(t), frozen(s), frozen(t * 252), edges, edges, True)
    market = Market(
        ("H",), rate, frozen([100.0]), frozen([rate if future else yield_rate]), frozen([future], bool)
    )  # fmt: skip
    look = np.array([2, 3, 3])
    rows = ((True, 103.0, 12.0), (False, 97.0, -10.0), (True, 101.0, -7.0))
    book = settle_terms(
        [Position(0, call, k, False, n, False, Expiry(years=1.0), physical=physical) for call, k, n in rows],
        spot=market.spot,
        mark_vol=np.array([0.25]),
        hedge_vol=np.array([hedge_vol]),
        expiry_look=look,
        expiry_t=t[look],
        expiry_s=s[look],
        initial_units=np.array([initial]),
    )
    flags = np.array(trades, dtype=bool)
    rows = len(flags)
    compiled = Compiled(
        tuple(f"rule {k}" for k in range(rows)), frozen(flags, bool), frozen(flags.sum(1) - 1, np.int64),
        frozen(np.ones(rows)), frozen(np.zeros(rows), bool),
    )  # fmt: skip
    terms = CostTerms(*(frozen([c]) for c in costs))
    source = Gbm(frozen([realised]), frozen([drift]), np.eye(1), 1)
    return {
        "market": market, "book": book, "grid": grid, "compiled": compiled, "source": source, "costs": terms
    }  # fmt: skip


def panels(breaks, count, order):
    """Gauss-Legendre nodes and normal weights over +-8.5, by path, with panel edges at the path's own `breaks`."""
    even = np.broadcast_to(np.linspace(-8.5, 8.5, count + 1), (len(breaks), count + 1))
    edges = np.sort(np.concatenate([even, np.clip(breaks, -8.5, 8.5)], axis=1), axis=1)
    x, w = np.polynomial.legendre.leggauss(order)
    half = 0.5 * np.diff(edges, axis=1)[:, :, None]
    z = (edges[:, :-1, None] + half * (1.0 + x)).reshape(len(breaks), -1)
    weight = (half * w).reshape(len(breaks), -1) * np.exp(-0.5 * z * z) / np.sqrt(2 * np.pi)
    return z, weight


def enumerate_paths(case, schedule, sizes):
    """Moments of all paths; `sizes` are panels of each look, of four nodes."""
    market, book, grid, costs, source = (case[k] for k in ("market", "book", "grid", "costs", "source"))
    t, s, looks = grid.t, grid.s, grid.looks
    r, b, y = market.rate, market.growth[0], market.yield_rate[0]
    vol, drift = source.realised_vol[0], source.drift[0]
    trades = case["compiled"].trades_at[schedule]
    gross_units = np.abs(book.units).sum() + abs(book.initial_units[0])

    def quote(price, look, vols):
        live = book.expiry_look > look
        return greeks(
            price[:, None], book.strike[live], years=book.expiry_t[live] - t[look],
            variance_years=book.expiry_s[live] - s[look], vol=vols[live], rate=r, growth=b, is_call=book.is_call[live],
        ), book.units[live], book.hedge_vol[live]  # fmt: skip

    price, weight = np.array([market.spot[0]]), np.ones(1)
    held = np.full(1, book.initial_units[0])
    gross, cost, floor = np.full(1, premium_received(book, market).sum()), np.zeros(1), np.zeros(1)
    g, units, _ = quote(price, 0, book.hedge_vol)
    # Premium edge is zero; the floor starts at hedge value less mark.
    floor += (units * g.value).sum() + premium_received(book, market).sum()
    for i in range(looks + 1):
        disc = np.exp(-r * t[i])
        delivered = np.zeros_like(price)
        for j in np.flatnonzero(book.expiry_look == i):
            sign = 1.0 if book.is_call[j] else -1.0
            gross = gross + disc * book.units[j] * np.maximum(sign * (price - book.strike[j]), 0.0)
            if book.physical[j]:
                delivered += np.where(sign * (price - book.strike[j]) > 0, sign * book.units[j], 0.0)
        if i == looks:
            at_mark, units, _ = quote(price, i, book.mark_vol)
            at_hedge, _, _ = quote(price, i, book.hedge_vol)
            gross = gross + disc * (units * at_mark.value).sum(axis=1)
            floor = floor + disc * (units * (at_mark.value - at_hedge.value)).sum(axis=1)
            target = np.zeros_like(price)
        else:
            g, units, hedged_at = quote(price, i, book.hedge_vol)
            # A future's gain is paid a look later, so a little more of it is held.
            later = np.exp(r * (t[i + 1] - t[i])) if market.is_future[0] else 1.0
            target = -later * (units * g.delta).sum(axis=1)
            gap = units * price[:, None] ** 2 * g.gamma * (vol**2 - hedged_at**2) * (s[i + 1] - s[i])
            floor = floor + 0.5 * disc * gap.sum(axis=1)
        if trades[i]:
            size = np.abs(target - held - delivered)
            cost = cost - disc * (costs.half_spread[0] * size * price + costs.per_unit[0] * size)
            cost = cost - disc * costs.per_trade[0] * (size > 1e-9 * gross_units)
            held = target
        if i == looks:
            break
        sd, mean = vol * np.sqrt(s[i + 1] - s[i]), drift * (t[i + 1] - t[i]) - 0.5 * vol**2 * (s[i + 1] - s[i])
        settling = book.strike[book.expiry_look == i + 1]
        z, share = panels((np.log(settling / price[:, None]) - mean) / sd, sizes[i], 4)
        after = price[:, None] * np.exp(mean + sd * z)
        later = np.exp(-r * t[i + 1])
        paid = 0.0 if market.is_future[0] else np.expm1(y * (t[i + 1] - t[i]))
        start = later if market.is_future[0] else disc
        gain = held[:, None] * (later * after * (1.0 + paid) - start * price[:, None])
        grow = lambda v, z=z: np.repeat(v, z.shape[1])  # noqa: E731
        gross = grow(gross) + gain.ravel()
        cost, floor, held = grow(cost), grow(floor), grow(held)
        weight = (weight[:, None] * share).ravel()
        price = after.ravel()
    total = gross + cost
    mean = {k: weight @ v for k, v in (("", total), ("_gross", gross), ("_costs", cost), ("_floor", floor))}
    out = {f"mean{k}": v for k, v in mean.items()}
    d, dg, dc, df = total - mean[""], gross - mean["_gross"], cost - mean["_costs"], floor - mean["_floor"]
    for name, product in (
        ("variance", d * d), ("third", d**3), ("fourth", d**4), ("variance_gross", dg * dg), ("variance_costs", dc * dc),
        ("variance_floor", df * df), ("covariance_gross_floor", dg * df), ("covariance_costs_gross", dc * dg),
    ):  # fmt: skip
        out[name] = weight @ product
    return out


CASES = {
    "spot with a yield": {},
    "hedged at the realised vol, no costs": {"hedge_vol": 0.30, "costs": (0.0, 0.0, 0.0)},
    "no yield, drift = rate": {"yield_rate": 0.0, "drift": 0.06},
    "future": {"future": True},
    "physical settlement": {"physical": True},
    "tickets and units held": {"costs": (1e-3, 0.0, 1.5), "initial": 4.0},
    "large yield, entry only": {"yield_rate": 0.30, "trades": ((1, 0, 1, 1),)},
    "negative rate": {"rate": -0.03, "drift": -0.2},
}


def check_against_enumeration(case, sizes):
    result = exact(**case, tolerance=1e-6)
    for k in range(len(result.schedules)):
        told = enumerate_paths(case, k, sizes)
        sd = told["variance"] ** 0.5
        for name, value in told.items():
            power = {"third": 3, "fourth": 4}.get(name, 1 if name.startswith("mean") else 2)
            # Smooth figures agree to the tolerance. The enumeration walks over the kinks of |trade| in panels of a third
            # of a standard deviation, which moves costs by up to 4e-5 here, and by a sixth of that with half the panel.
            smooth = name.endswith(("gross", "floor")) and "costs" not in name
            limit = (2e-6 if smooth else 6e-5) * sd**power
            if power > 2:
                # Shapes are held to a hundred tolerances.
                limit += 1e-4 * max(sd**power, abs(value))
            assert getattr(result.figures, name)[k] == pytest.approx(value, abs=limit), (k, name)


@pytest.mark.parametrize("name", CASES)
def test_three_looks_are_those_of_every_path(name):
    check_against_enumeration(small_case(**CASES[name]), (22, 30, 30))


def test_what_is_open_at_an_early_horizon_is_valued_at_mark():
    case = small_case()
    book, grid = case["book"], case["grid"]
    # All three positions settle at look 3, and the horizon is look 2.
    case["book"] = replace(book, expiry_t=np.full(3, grid.t[3]), expiry_s=np.full(3, grid.s[3]))
    check_against_enumeration(cut_short(case, 2), (60, 60))


def test_equal_looks_and_two_schedules_of_the_public_rules():
    case = small_case()
    grid = horizon_grid(years=0.16, looks=3, day_count="business-252")
    look = case["book"].expiry_look
    book = replace(case["book"], expiry_t=grid.t[look], expiry_s=grid.s[look])
    rules = (Schedule("each", "looks", 1), Schedule("none", "never"))
    compiled = compile_schedules(rules, grid, expiry_looks(book))
    check_against_enumeration(case | {"grid": grid, "book": book, "compiled": compiled}, (22, 30, 30))
