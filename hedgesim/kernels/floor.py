"""The floor under the exact engine: its law, and its covariance with the gross P&L, look by look.

The floor is the sum over looks of gap_i(X_i), half the gamma of the book times realised less hedge variance, and of the
revaluation at the horizon. B_i is its expected rest at look i, F = E[floor | X_i] less the mean of the floor. For gross
P&L = payoffs + sum over trades of h_k(X_k) (gain of a hedge unit until the next trade):

    Cov(pay(X_i), floor) = E[pay F_i]
    Cov(h_k gain, floor) = E[h_k Q_k] + E[h_k X_k drift_k F_k],   Q_i = reach_i Cov(X_i+1, B_i+1 | X_i) + E[Q_i+1 | X_i]

with drift_k the expected gain over X_k, and reach_i what a move of X_i+1 adds to the gain expected until the next
trade.
"""

import math

import numpy as np
from numpy.typing import NDArray

from hedgesim.kernels.exact import Lattice, Steps
from hedgesim.kernels.jit import device, kernel
from hedgesim.kernels.tables import Table, lookup
from hedgesim.kernels.vector_math import exp, fma

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]


@device
def _spread(density: Floats, reached: int, target: Floats, base: int, out: Floats) -> None:
    """Expectation over one step: out[i] = sum_o density[o] target[base + i + o]."""
    out[:] = 0.0
    for o in range(reached):
        shifted, weight = target[base + o : base + o + len(out)], density[o]
        for i in range(len(out)):
            out[i] = fma(weight, shifted[i], out[i])


@device
def _level_ends(values: Floats, low: int, high: int) -> None:
    """Carry values on beyond low .. high unchanged."""
    values[:low] = values[low]
    values[high + 1 :] = values[high]


@kernel
def law_at(lattice: Lattice, look: int, out: Floats) -> None:
    """Probability weights of the nodes low .. high at a look."""
    if lattice.sd[look] == 0.0:
        out[0] = 1.0
        return
    for i in range(lattice.high[look] - lattice.low[look] + 1):
        z = ((lattice.low[look] + i) * lattice.spacing - lattice.mean[look]) / lattice.sd[look]
        out[i] = math.exp(-0.5 * z * z) / (lattice.sd[look] * math.sqrt(2.0 * math.pi)) * lattice.spacing


@kernel
def run_floor(
    underlying: int,
    lattice: Lattice,
    steps: Steps,
    slope: Table,
    variance_slope: Table,
    one_vol: bool,
    excess: Floats,
    variance: Floats,
    step_s: Floats,
    end: Floats,
    moments: Floats,
    slopes: Floats,
    shocks: Floats,
    loads: Floats,
) -> None:
    """Mean and variance of the floor, and what its covariances with hedges and payoffs need.

    Parameters
    ----------
    lattice, steps : through all looks
    slope, variance_slope : P and sum_j k_j^2 P_j at the hedge vols; the second is read unless `one_vol`
    excess : half the realised less the hedge variance of each look, at the one hedge vol
    variance, step_s : realised variance and variance years of each look
    end : revaluation at the padded nodes of the last look
    moments : (2,), overwritten: mean and variance of the floor
    slopes, shocks : (look, node), overwritten: P, and Cov(X_i+1, B_i+1 | X_i); node 0 is lattice.low
    loads : (look + 1, node), overwritten: F times the probability weight of the node
    """
    looks = len(steps.kind)
    room = 0
    for i in range(looks + 1):
        room = max(room, lattice.pad_high[i] - lattice.pad_low[i] + 1)
    log_x, p, dp = np.empty(room), np.empty(room), np.empty(room)
    cell, part = np.empty(room, dtype=np.int32), np.empty(room)
    rest, second = np.zeros(room), np.zeros(room)
    mean, spread, shock, gap = np.empty(room), np.empty(room), np.empty(room), np.empty(room)
    gaps, rests = np.zeros(slopes.shape), np.zeros(loads.shape)
    rest[: len(end)] = end
    own = lattice.low[looks] - lattice.pad_low[looks]
    for j in range(lattice.high[looks] - lattice.low[looks] + 1):
        rests[looks, j] = end[own + j]

    for i in range(looks - 1, -1, -1):
        kind = steps.kind[i]
        first, reached, density = steps.first[kind], steps.last[kind] - steps.first[kind] + 1, steps.density[kind]
        n = lattice.high[i] - lattice.low[i] + 1
        base = lattice.low[i] + first - lattice.pad_low[i + 1]
        _spread(density, reached, rest, base, mean[:n])
        spread[:n] = 0.0
        shock[:n] = 0.0
        for o in range(reached):
            weight, move = density[o], math.expm1((first + o) * lattice.spacing)
            near, variances = rest[base + o : base + o + n], second[base + o : base + o + n]
            for j in range(n):
                away = near[j] - mean[j]
                spread[j] = fma(weight, fma(away, away, variances[j]), spread[j])
            for j in range(n):
                shock[j] = fma(weight * move, near[j] - mean[j], shock[j])
        own, padded = lattice.low[i] - lattice.pad_low[i], lattice.pad_high[i] - lattice.pad_low[i] + 1
        for j in range(padded):
            log_x[j] = fma(lattice.spacing, np.float64(lattice.pad_low[i] + j), lattice.origin)
        lookup(slope, underlying, i, log_x[:padded], cell, part, p[:padded], dp[:padded])
        if one_vol:
            for j in range(n):
                gap[j] = excess[i] * dp[own + j]
        else:
            lookup(variance_slope, underlying, i, log_x[:padded], cell, part, gap[:padded], rest[:padded])
            for j in range(n):
                gap[j] = 0.5 * (variance[i] * dp[own + j] - step_s[i] * rest[own + j])
        for j in range(n):
            x = exp(log_x[own + j])
            gap[j] *= x
            gaps[i, j] = gap[j]
            slopes[i, j] = p[own + j]
            shocks[i, j] = shock[j] * x
            rests[i, j] = mean[j] + gap[j]
            rest[own + j] = rests[i, j]
            second[own + j] = spread[j]
        _level_ends(rest[:padded], own, own + n - 1)
        _level_ends(second[:padded], own, own + n - 1)

    moments[0], moments[1] = rests[0, 0], spread[0]
    past = np.zeros(room)
    for i in range(looks + 1):
        n = lattice.high[i] - lattice.low[i] + 1
        law_at(lattice, i, p[:n])
        for j in range(n):
            loads[i, j] = past[j] + p[j] * (rests[i, j] - moments[0])
        if i == looks:
            break
        kind = steps.kind[i]
        first, reached, density = steps.first[kind], steps.last[kind] - steps.first[kind] + 1, steps.density[kind]
        for j in range(n):
            gap[j] = fma(p[j], gaps[i, j], past[j])
        shift, after = lattice.low[i] + first - lattice.low[i + 1], lattice.high[i + 1] - lattice.low[i + 1] + 1
        past[:after] = 0.0
        for o in range(reached):
            begin, end_at = max(0, -shift - o), min(n, after - shift - o)
            if end_at <= begin:
                continue
            weight, target = density[o], past[max(0, shift + o) :]
            source = gap[begin:end_at]
            for j in range(len(source)):
                target[j] = fma(weight, source[j], target[j])


@kernel
def hedge_against_floor(
    trades_at: Flags,
    lattice: Lattice,
    steps: Steps,
    inverse_weight: Floats,
    reach: Floats,
    drift: Floats,
    slopes: Floats,
    shocks: Floats,
    loads: Floats,
) -> float:
    """Covariance of the hedge gains of one schedule with the floor.

    Parameters
    ----------
    trades_at : (look + 1,)
    inverse_weight : hedge units per unit of -dU/dX at each look
    reach, drift : see the module; `drift` is read where the schedule trades
    slopes, shocks, loads : from `run_floor`
    """
    looks = len(steps.kind)
    room = 0
    for i in range(looks + 1):
        room = max(room, lattice.pad_high[i] - lattice.pad_low[i] + 1)
    after, law, now = np.zeros(room), np.empty(room), np.empty(room)
    total, empty = 0.0, True
    for i in range(looks - 1, -1, -1):
        n = lattice.high[i] - lattice.low[i] + 1
        if empty:
            now[:n] = 0.0
        else:
            kind = steps.kind[i]
            base = lattice.low[i] + steps.first[kind] - lattice.pad_low[i + 1]
            _spread(steps.density[kind], steps.last[kind] - steps.first[kind] + 1, after, base, now[:n])
        for j in range(n):
            now[j] = fma(reach[i], shocks[i, j], now[j])
        empty = trades_at[i]
        if trades_at[i]:
            law_at(lattice, i, law[:n])
            for j in range(n):
                x = exp(fma(lattice.spacing, np.float64(lattice.low[i] + j), lattice.origin))
                hedge = -inverse_weight[i] * slopes[i, j]
                total += hedge * (law[j] * now[j] + loads[i, j] * x * drift[i])
        else:
            own = lattice.low[i] - lattice.pad_low[i]
            padded = lattice.pad_high[i] - lattice.pad_low[i] + 1
            after[own : own + n] = now[:n]
            _level_ends(after[:padded], own, own + n - 1)
    return total
