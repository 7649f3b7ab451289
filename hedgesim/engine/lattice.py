"""Lattices of the exact engine: where the log price is worked off at each trade, and what a step does there."""

from dataclasses import dataclass
from functools import cache

import numpy as np

from hedgesim.book import Book
from hedgesim.costs import CostTerms
from hedgesim.kernels.breaks import BEHIND, EDGE_BINS, STENCIL, edge_weights
from hedgesim.kernels.exact import Lattice, Steps, Strikes, Trading
from hedgesim.kernels.replay import SMALLEST_TRADE
from hedgesim.kernels.rows import LANES
from hedgesim.kernels.simulate import Payoff
from hedgesim.kernels.tables import Table
from hedgesim.market import Flags, Floats, Ints, LookGrid, Market
from hedgesim.paths.gbm import Gbm
from hedgesim.tables import payoff_knots, slope_table, strike_table, terms

_LARGEST_LATTICE = 40_000


class ExactUnavailable(Exception):  # noqa: N818 - it is an answer, not a fault
    """The exact engine cannot answer; the message is one line and says for which schedule and why."""


@dataclass(frozen=True)
class Level:
    """One refinement.

    Attributes
    ----------
    nodes : lattice nodes to the narrowest standard deviation, of a step or of a delta
    reach : standard deviations at which steps are cut
    """

    nodes: float
    reach: float


def level(number: int) -> Level:
    """The refinements in turn; the spacing shrinks by a third each time."""
    return Level(nodes=1.65 * 1.5**number, reach=6.3 + 0.35 * number)


@dataclass(frozen=True)
class Inputs:
    """An experiment as the exact engine reads it.

    Attributes
    ----------
    slope, variance_slope, mark_slope, mark_strike, hedge_strike, payoff : see kernels.simulate.BookTables
    log_drift, variance : (underlying, look) cumulative mean less half the variance of log X, and variance
    weight : (underlying, look) see Market.hedge_weights
    """

    market: Market
    book: Book
    grid: LookGrid
    costs: CostTerms
    slope: Table
    variance_slope: Table
    mark_slope: Table
    mark_strike: Table
    hedge_strike: Table
    payoff: Payoff
    log_drift: Floats
    variance: Floats
    weight: Floats

    def of(self, underlying: int) -> Ints:
        """Positions on the underlying."""
        return np.flatnonzero(self.book.underlying == underlying)


def read_inputs(
    *, market: Market, book: Book, grid: LookGrid, source: Gbm, costs: CostTerms, tolerance: float
) -> Inputs:
    """Tables of the book, to `tolerance`, and the law of the paths."""
    looks = np.arange(grid.looks + 1)
    last = looks[-1:]
    reach = source.reach(market, grid)

    def slope(vol: Floats, at: Ints, weight: Floats | None = None) -> Table:
        return slope_table(book, market, grid, reach, vol=vol, looks=at, weight=weight, tolerance=tolerance)

    def strike(vol: Floats) -> Table:
        return strike_table(book, market, grid, reach, vol=vol, looks=last, tolerance=tolerance)

    one_vol = all(len(np.unique(book.hedge_vol[book.underlying == u])) <= 1 for u in range(len(market.names)))
    zero = np.zeros((len(market.names), 1))
    return Inputs(
        market=market,
        book=book,
        grid=grid,
        costs=costs,
        slope=slope(book.hedge_vol, looks),
        variance_slope=slope(book.hedge_vol, looks[:0] if one_vol else looks, book.hedge_vol**2),
        mark_slope=slope(book.mark_vol, last),
        mark_strike=strike(book.mark_vol),
        hedge_strike=strike(book.hedge_vol),
        payoff=payoff_knots(book, market, grid.looks),
        log_drift=np.concatenate([zero, np.cumsum(source.log_drift(market, grid), axis=1)], axis=1),
        variance=np.concatenate([zero, np.cumsum(source.variance(grid), axis=1)], axis=1),
        weight=market.hedge_weights(grid.t),
    )


@dataclass(frozen=True)
class Walk:
    """Everything `run_schedule` reads of one schedule and underlying, and the bound on what the bridge leaves out.

    `left_third`, `left_fourth` bound the third and fourth central moment of the total that are left out.
    """

    lattice: Lattice
    steps: Steps
    trading: Trading
    strikes: Strikes
    break_room: int
    left_third: float
    left_fourth: float


def lay_schedule(inputs: Inputs, underlying: int, trades_at: Flags, at: Level, name: str) -> Walk:
    """Lattice, steps and trades of one schedule on one underlying."""
    looks = np.flatnonzero(trades_at)
    market, costs, grid = inputs.market, inputs.costs, inputs.grid
    lattice, kind, first, last, density, law = lay_lattice(
        inputs, underlying, looks, at, name, state_reach=at.reach - 1.0
    )
    t = grid.t[looks]
    discount = np.exp(-market.rate * t)
    price = np.exp((market.growth[underlying] - market.rate) * t)
    inverse = np.append(1.0 / inputs.weight[underlying, looks[:-1]], 0.0)
    mine = inputs.of(underlying)
    gross_units = float(np.abs(inputs.book.units[mine]).sum() + abs(inputs.book.initial_units[underlying]))
    trading = Trading(
        look=looks,
        inverse_weight=inverse,
        spread=costs.half_spread[underlying] * price,
        unit=costs.per_unit[underlying] * discount,
        ticket=costs.per_trade[underlying] * discount,
        smallest=SMALLEST_TRADE * gross_units,
        initial=float(inputs.book.initial_units[underlying]),
    )
    strikes = _strikes(inputs.payoff, underlying, looks, lattice)
    costly = any(float(c[underlying]) != 0.0 for c in (costs.half_spread, costs.per_unit, costs.per_trade))
    needed = np.ones(len(first), bool) if costly else np.isin(np.arange(len(first)), kind[strikes.size[1:] > 0])
    edges = np.zeros((len(first), density.shape[1], EDGE_BINS + 3, STENCIL))
    for row in np.flatnonzero(needed):
        cells = last[row] - first[row]
        edge_weights(lattice.spacing, law[row, 0], law[row, 1], int(first[row]), _taylor(), edges[row, :cells])
    start, gain, inner, left = _gains(inputs, underlying, looks, lattice.spacing, first[kind], last[kind])
    # No hedge is larger than the gross slope of the book; E[X^n] of a lognormal price.
    largest = float(np.abs(terms(inputs.book, market).slope[mine]).sum()) * inverse[:-1]
    log_x, variance = lattice.origin + lattice.mean[:-1], lattice.sd[:-1] ** 2
    left_third = float((left[0] * largest**3 * np.exp(3 * log_x + 4.5 * variance)).sum())
    left_fourth = float((left[1] * largest**4 * np.exp(4 * log_x + 8.0 * variance)).sum())
    return Walk(
        lattice=lattice,
        steps=Steps(kind, first, last, law / lattice.spacing, density, edges, _unit_edges(), start, gain, inner),
        trading=trading,
        strikes=strikes,
        break_room=2 * int(strikes.size.max()) + density.shape[1] + 2,
        left_third=left_third,
        left_fourth=left_fourth,
    )


def lay_lattice(
    inputs: Inputs, underlying: int, looks: Ints, at: Level, name: str, *, state_reach: float
) -> tuple[Lattice, Ints, Ints, Ints, Floats, Floats]:
    """Lattice through `looks` with the kinds of steps on it: kind by step; first, last, density and (mean, sd) by kind.

    Raises
    ------
    ExactUnavailable
        when prices stand still over a step, or the lattice grows out of hand
    """
    variance, drift = inputs.variance[underlying, looks], inputs.log_drift[underlying, looks]
    step_sd, step_mean = np.sqrt(np.diff(variance)), np.diff(drift)
    if not (step_sd > 0.0).all():
        raise ExactUnavailable(f"{name}: the price of {inputs.market.names[underlying]} stands still between trades")
    spacing = min(float(step_sd.min()), _narrowest_delta(inputs, underlying, looks)) / at.nodes
    total = float(np.sqrt(variance[-1]))
    if total / spacing * 2.0 * at.reach > _LARGEST_LATTICE:
        raise ExactUnavailable(
            f"{name}: its shortest step or narrowest delta is 1/{total / spacing * at.nodes:.0f} of the whole life's "
            "standard deviation, too fine a lattice"
        )
    kind, law = _kinds(step_mean, step_sd)
    first = np.floor((law[:, 0] - at.reach * law[:, 1]) / spacing).astype(np.int64)
    last = np.ceil((law[:, 0] + at.reach * law[:, 1]) / spacing).astype(np.int64)
    width = int((last - first).max()) + 1
    offset = first[:, None] + np.arange(width)
    z = (offset * spacing - law[:, :1]) / law[:, 1:]
    density = np.exp(-0.5 * z * z) * spacing / (law[:, 1:] * np.sqrt(2 * np.pi))
    density[offset > last[:, None]] = 0.0
    sd = np.sqrt(variance)
    low = np.floor((drift - state_reach * sd) / spacing).astype(np.int64)
    high = np.ceil((drift + state_reach * sd) / spacing).astype(np.int64)
    # A break in the outermost cell has a stencil that reaches beyond it.
    pad_low = np.minimum(low, np.append(low[:1], low[:-1] + first[kind])) - STENCIL
    pad_high = np.maximum(high, np.append(high[:1], high[:-1] + last[kind])) + STENCIL
    # Tables are read for whole lanes of nodes.
    pad_high += -(pad_high - pad_low + 1) % LANES
    origin = float(np.log(inputs.market.spot[underlying]))
    return Lattice(origin, spacing, low, high, pad_low, pad_high, drift, sd), kind, first, last, density, law


def _narrowest_delta(inputs: Inputs, underlying: int, looks: Ints) -> float:
    """Smallest vol x sqrt(time to expiry) of what is live at any of the looks, at the vol it is hedged or marked at."""
    book, s = inputs.book, inputs.grid.s[looks]
    narrowest = np.inf
    for j in inputs.of(underlying):
        live = looks < book.expiry_look[j]
        left = book.expiry_s[j] - s[live].max()
        vol = min(book.hedge_vol[j], book.mark_vol[j]) if live[-1] else book.hedge_vol[j]
        narrowest = min(narrowest, float(vol * np.sqrt(left)))
    return narrowest


def _kinds(mean: Floats, sd: Floats) -> tuple[Ints, Floats]:
    """Steps of the same law to within rounding share a kind."""
    key = np.stack([np.round(mean / sd, 9), np.round(np.log(sd), 11)], axis=1)
    _, first, kind = np.unique(key, axis=0, return_index=True, return_inverse=True)
    return kind.reshape(-1).astype(np.int64), np.stack([mean[first], sd[first]], axis=1)


def _lagrange(theta: Floats) -> Floats:
    """Coefficients of the stencil's Lagrange polynomials in powers of (position - theta): (theta, node, power)."""
    nodes = np.arange(STENCIL) - BEHIND
    # The inverse of the Vandermonde matrix of the nodes about theta holds the polynomials.
    vandermonde = (nodes - theta[:, None])[:, :, None] ** np.arange(STENCIL)
    return np.asarray(np.linalg.inv(vandermonde).transpose(0, 2, 1))


@cache
def _taylor() -> Floats:
    """The same at the bins of a table of edge weights."""
    return _lagrange((np.arange(EDGE_BINS + 3) - 1) / EDGE_BINS)


def taylor_at(theta: Floats) -> tuple[Floats, Ints]:
    """Error of a plain sum over the nodes above a break less the integral, unit spacing, (break, stencil node).

    Euler-Maclaurin: - sum_p B_p+1(1 - theta) / (p + 1)! F^(p), exact for the quintic through the stencil. Also returns
    the stencil, in nodes from that of the cell.
    """
    u = 1.0 - theta
    bernoulli = np.stack(
        [
            u - 1 / 2,
            u**2 - u + 1 / 6,
            u**3 - 1.5 * u**2 + u / 2,
            u**4 - 2 * u**3 + u**2 - 1 / 30,
            u**5 - 2.5 * u**4 + 5 / 3 * u**3 - u / 6,
            u**6 - 3 * u**5 + 2.5 * u**4 - u**2 / 2 + 1 / 42,
        ],
        axis=-1,
    )
    order = np.arange(STENCIL)
    return -(_lagrange(theta) @ (bernoulli / (order + 1))[..., None])[..., 0], order - BEHIND


@cache
def _unit_edges() -> Floats:
    return taylor_at((np.arange(EDGE_BINS + 3) - 1) / EDGE_BINS)[0][None]


def straight_lines(payoff: Payoff, underlying: int, look: int, lattice: Lattice) -> tuple[Ints, Floats, Floats]:
    """Strikes that settle at a look as cells and positions in them, ascending, and the lines between them."""
    first, size = int(payoff.first[underlying, look]), int(payoff.size[underlying, look])
    place = (np.log(payoff.knot[first : first + size]) - lattice.origin) / lattice.spacing
    cell = np.floor(place).astype(np.int64)
    return cell, place - cell, payoff.line[first : first + size + 1]


def _strikes(payoff: Payoff, underlying: int, looks: Ints, lattice: Lattice) -> Strikes:
    line, size = payoff.first[underlying, looks], payoff.size[underlying, looks]
    found = [straight_lines(payoff, underlying, int(look), lattice) for look in looks[size > 0]]
    return Strikes(
        first=np.concatenate([[0], np.cumsum(size)[:-1]]),
        size=size,
        line=np.maximum(line, 0),
        cell=np.concatenate([f[0] for f in found]) if found else np.zeros(0, np.int64),
        theta=np.concatenate([f[1] for f in found]) if found else np.zeros(0),
    )


def _gains(
    inputs: Inputs, underlying: int, looks: Ints, spacing: float, first: Ints, last: Ints
) -> tuple[Ints, Floats, Floats, tuple[Floats, Floats]]:
    """Gain of a hedge unit over each step given both ends, over X: mean and variance by offset.

    Also bounds on what is left out of its third and fourth central moment, over X^3 and X^4, by step.
    """
    steps = len(looks) - 1
    width = last - first + 1 + 2 * (BEHIND + 1)
    start = np.concatenate([[0], np.cumsum(width)[:-1]])
    gain, inner = np.empty(int(width.sum())), np.zeros(int(width.sum()))
    third, fourth = np.zeros(steps), np.zeros(steps)
    known: dict[tuple[int, int, bytes], tuple[Floats, Floats]] = {}
    plain: dict[tuple[int, int], Floats] = {}
    # Steps that start alike may still end apart, where their laws differ by little.
    reach = [(int(f), int(w)) for f, w in zip(first, width, strict=True)]
    distances = {(f, w): np.asarray(spacing * (f - BEHIND - 1 + np.arange(w)), dtype=np.float64) for f, w in reach}
    for k in range(steps):
        part, distance = slice(start[k], start[k] + width[k]), distances[reach[k]]
        scale = inputs.weight[underlying, looks[k]]
        weight = inputs.weight[underlying, looks[k] : looks[k + 1]] / scale
        if len(weight) == 1 or not np.diff(weight).any():
            if reach[k] not in plain:
                plain[reach[k]] = np.expm1(distance)
            gain[part] = scale * plain[reach[k]]
            continue
        # Steps alike but for the level of their weights share a calculation.
        here = slice(looks[k], looks[k + 1] + 1)
        drift = inputs.log_drift[underlying, here] - inputs.log_drift[underlying, looks[k]]
        variance = inputs.variance[underlying, here] - inputs.variance[underlying, looks[k]]
        alike = (*reach[k], np.round(np.concatenate([weight, drift, variance]), 14).tobytes())
        if alike not in known:
            known[alike] = _bridge(distance, weight, drift, variance)
        gain[part], inner[part] = scale * known[alike][0], scale**2 * known[alike][1]
        usual = np.abs(distance - drift[-1]) < 4.0 * np.sqrt(variance[-1])
        largest, spread = float(inner[part][usual].max()), 0.25 * float(variance[-1])
        # Third cumulant of a sum of lognormals to leading order: at most 3 v^2 sd / sqrt(v), v its variance.
        third[k] = 3.0 * largest**1.5 * spread**0.5
        fourth[k] = 16.0 * largest**2 * spread
    return start, gain, inner, (third, fourth)


def _bridge(distance: Floats, weight: Floats, drift: Floats, variance: Floats) -> tuple[Floats, Floats]:
    """Mean and variance of sum w_l dX_l over X at its start, given the log distance of the two ends.

    By Abel's sum it is w_last X_end - w_first X_start - sum (w_l - w_l-1) X_l over the looks inside; `drift` and
    `variance` run from the start.
    """
    share = (variance / variance[-1])[1:-1]
    between = drift[1:-1] + np.outer(distance - drift[-1], share) + 0.5 * variance[-1] * share * (1.0 - share)
    inside = np.diff(weight) * np.exp(between)
    mean = weight[-1] * np.exp(distance) - weight[0] - inside.sum(axis=1)
    return mean, _bridge_variance(inside, share, float(variance[-1]))


def _bridge_variance(mean: Floats, share: Floats, variance: float) -> Floats:
    """Variance of sums of lognormals along a Brownian bridge; `mean` (case, look) their signed means.

    Cov(X_l, X_m) = mean_l mean_m (exp(variance share_l (1 - share_m)) - 1) for l <= m; the exponential series makes the
    double sum a few running sums.
    """
    total = np.zeros(len(mean))
    factor, power = 1.0, 0
    while power == 0 or factor * 0.25**power > 1e-17 * variance:
        power += 1
        factor *= variance / power
        rising, falling = mean * share**power, mean * (1.0 - share) ** power
        before = np.cumsum(rising, axis=1) - rising
        total += factor * ((2.0 * before + rising) * falling).sum(axis=1)
    return total
