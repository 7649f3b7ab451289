"""The floor in the exact engine: premium edge, revaluation and vol gap, and their covariance with the gross P&L."""

from dataclasses import dataclass

import numpy as np

from hedgesim.engine.lattice import Inputs, Level, lay_lattice, straight_lines, taylor_at
from hedgesim.kernels.exact import Lattice, Steps
from hedgesim.kernels.floor import hedge_against_floor, run_floor
from hedgesim.kernels.tables import Table
from hedgesim.market import Flags, Floats


@dataclass(frozen=True)
class FloorLaw:
    """The floor of one underlying, on a lattice through all looks; see `kernels.floor`.

    Attributes
    ----------
    mean, variance : of vol gap and of the revaluation at the horizon
    payoffs : covariance of the payoffs, and of the mark at the horizon, with the floor
    lattice, steps, slopes, shocks, loads : see `run_floor`; None when the floor is certain
    """

    mean: float
    variance: float
    payoffs: float
    lattice: Lattice | None = None
    steps: Steps | None = None
    slopes: Floats | None = None
    shocks: Floats | None = None
    loads: Floats | None = None


def floor_law(inputs: Inputs, underlying: int, at: Level) -> FloorLaw:
    """Law of the floor of one underlying."""
    book, grid = inputs.book, inputs.grid
    mine = inputs.of(underlying)
    vols = np.unique(book.hedge_vol[mine])
    one_vol = len(vols) <= 1
    variance, step_s = np.diff(inputs.variance[underlying]), np.diff(grid.s)
    excess = 0.5 * (variance - vols[0] ** 2 * step_s) if one_vol and len(vols) else np.zeros(grid.looks)
    excess[np.abs(excess) <= 1e-12 * variance] = 0.0
    looks = np.arange(grid.looks + 1)
    same_mark = bool(np.array_equal(book.hedge_vol[mine], book.mark_vol[mine]))
    settled = bool((book.expiry_look[mine] <= grid.looks).all())
    if one_vol and not excess.any() and (same_mark or settled):
        return FloorLaw(0.0, 0.0, 0.0)
    # Payoffs times the floor weigh tails that the hedges take away again: no cut short of the reach here.
    lattice, kind, first, last, density, law = lay_lattice(
        inputs, underlying, looks, at, "the floor", state_reach=at.reach
    )
    nothing = np.zeros(0)
    none, start = np.zeros((0, 0, 0, 0)), np.zeros(0, np.int64)
    steps = Steps(kind, first, last, law / lattice.spacing, density, none, np.zeros((0, 0, 0)), start, nothing, nothing)
    width = int((lattice.high - lattice.low).max()) + 1
    slopes, shocks = np.zeros((grid.looks, width)), np.zeros((grid.looks, width))
    loads, moments = np.zeros((grid.looks + 1, width)), np.empty(2)
    marked, hedged = _open_values(inputs, underlying, lattice)
    run_floor(
        underlying,
        lattice,
        steps,
        inputs.slope,
        inputs.variance_slope,
        one_vol,
        excess,
        variance,
        step_s,
        marked - hedged,
        moments,
        slopes,
        shocks,
        loads,
    )
    inside = slice(lattice.low[-1] - lattice.pad_low[-1], lattice.high[-1] - lattice.pad_low[-1] + 1)
    at_end = float(loads[-1, : lattice.high[-1] - lattice.low[-1] + 1] @ marked[inside])
    return FloorLaw(
        mean=float(moments[0]),
        variance=float(moments[1]),
        payoffs=at_end + _payoffs_against_floor(inputs, underlying, lattice, loads),
        lattice=lattice,
        steps=steps,
        slopes=slopes,
        shocks=shocks,
        loads=loads,
    )


def covariance_with_floor(inputs: Inputs, underlying: int, trades_at: Flags, law: FloorLaw) -> float:
    """Cov(gross, floor) of one underlying under one schedule."""
    if law.lattice is None:
        return 0.0
    looks = inputs.grid.looks
    weight = inputs.weight[underlying]
    growth = np.exp(inputs.log_drift[underlying] + 0.5 * inputs.variance[underlying])
    gain = weight * np.diff(growth)
    before = np.concatenate([[0.0], np.cumsum(gain)])
    trades = np.flatnonzero(trades_at)
    # Expected gain still to come until the next trade, over the expected price now.
    until = before[trades[np.searchsorted(trades, np.arange(looks), side="right")]]
    reach = weight + (until - before[1:]) / growth[1:]
    drift = (until - before[:-1]) / growth[:-1]
    hedges = hedge_against_floor(
        trades_at, law.lattice, law.steps, 1.0 / weight, reach, drift, law.slopes, law.shocks, law.loads
    )
    return float(law.payoffs + hedges)


def _open_values(inputs: Inputs, underlying: int, lattice: Lattice) -> tuple[Floats, Floats]:
    """Discounted value, at mark and at the hedge vols, of what is open at the last look, at its padded nodes."""
    node = np.arange(lattice.pad_low[-1], lattice.pad_high[-1] + 1)
    log_x = lattice.origin + lattice.spacing * node
    look = inputs.grid.looks

    def value(slope: Table, strike: Table) -> Floats:
        return np.exp(log_x) * _read(slope, underlying, look, log_x) - _read(strike, underlying, look, log_x)

    return value(inputs.mark_slope, inputs.mark_strike), value(inputs.slope, inputs.hedge_strike)


def _read(table: Table, underlying: int, look: int, log_x: Floats) -> Floats:
    cells = int(table.cells[underlying, look])
    if cells == 0:
        return np.zeros_like(log_x)
    first = int(table.start[underlying, look])
    place = np.clip((log_x - table.low[underlying, look]) * table.per_cell[underlying, look], 0.0, cells - 1e-9)
    rows, u = table.coefficients[first + place.astype(np.int64)], place % 1.0
    return np.asarray(sum(rows[:, k] * u**k for k in range(6)))


def _payoffs_against_floor(inputs: Inputs, underlying: int, lattice: Lattice, loads: Floats) -> float:
    """Sum over expiries of E[payoff F], with the Euler-Maclaurin terms of the kinks at the strikes."""
    total = 0.0
    for look in np.flatnonzero(inputs.payoff.first[underlying] >= 0):
        low, n = int(lattice.low[look]), int(lattice.high[look] - lattice.low[look] + 1)
        load = np.concatenate([loads[look, :n], np.zeros(1)])
        x = np.exp(lattice.origin + lattice.spacing * (low + np.arange(n)))
        cell, theta, lines = straight_lines(inputs.payoff, underlying, int(look), lattice)
        row = np.searchsorted(cell, low + np.arange(n), side="left")
        total += float(load[:n] @ (lines[row, 0] + lines[row, 1] * x))
        weights, stencil = taylor_at(theta)
        for k in range(len(cell)):
            node = cell[k] - low + stencil
            inside = (node >= 0) & (node < n)
            jump = lines[k + 1] - lines[k]
            at = node[inside]
            total -= float((weights[k][inside] * load[at] * (jump[0] + jump[1] * x[at])).sum())
    return total
