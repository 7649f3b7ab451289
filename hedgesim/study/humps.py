"""Expectations of a book's gamma under geometric Brownian motion, in closed form but for the integral over time.

In discounted units (X = S exp(-b t), y = log X) and at its hedge vol k, one option held has

    X^2 d2U/dX2 = D n(y; c, w^2),   D = K e^{-rT},   w^2 = k^2 (T_s - s),   c = log K - b T + w^2 / 2

with n the normal density in y (from Black 1976: D phi(d2) / w). A book's gamma is thus a sum of normal humps, positive
and negative, and y itself is normal: the mean of a hump is the density n(c - E y; Var y + w^2), and the mean product of
two, at two times and on two underlyings, a bivariate normal density. Only the integral over time is left to do
numerically. Between expiries it runs over q with s = end - (end - start) q^2, which takes away the inverse root that
gamma squared has where options expire.
"""

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from hedgesim.book import Book
from hedgesim.market import Flags, Floats, Ints, LookGrid, Market
from hedgesim.paths.gbm import Gbm

# Books with more different options than this have neighbouring strikes lumped.
LARGE_BOOK = 200
_LUMPS_PER_WIDTH = 16
_CHUNK = 200_000
# Where sign changes of a sum of humps are looked for, in widths from each centre.
_PROBES = np.array([-6.0, -4.0, -3.0, -2.0, -1.4, -0.9, -0.45, 0.0, 0.45, 0.9, 1.4, 2.0, 3.0, 4.0, 6.0])
_MOST_PROBES, _FEWEST_PROBES, _PROBE_WORK = 900, 200, 200_000
_HALVINGS = 16
_NODES_TERMINAL = 12
# Time left at the last node beside the time that has passed: less would be lost to rounding.
_LEAST_LEFT = 1e-14


@dataclass(frozen=True)
class Motion:
    """Real-world law of the log prices in discounted units; arrays by underlying.

    Attributes
    ----------
    start : log of the spot
    excess : drift less growth of the forward, per calendar year
    vol : realised, annual
    correlation : of the Brownian motions
    clock_t, clock_s : calendar and variance years of the looks, joined by straight lines
    """

    start: Floats
    excess: Floats
    vol: Floats
    correlation: Floats
    clock_t: Floats
    clock_s: Floats

    @property
    def life(self) -> float:
        """Variance years to the horizon."""
        return float(self.clock_s[-1])

    def years(self, s: Floats) -> Floats:
        """Calendar years at which `s` variance years have passed."""
        return np.asarray(np.interp(s, self.clock_s, self.clock_t))

    def mean(self, u: Ints, s: Floats) -> Floats:
        """E[log X] of underlyings `u` after `s` variance years, broadcast."""
        return np.asarray(self.start[u] + self.excess[u] * self.years(s) - 0.5 * self.vol[u] ** 2 * s)


def motion(market: Market, grid: LookGrid, source: Gbm) -> Motion:
    """The law of the paths of `source`."""
    return Motion(
        start=np.log(market.spot),
        excess=source.drift - market.growth,
        vol=source.realised_vol,
        correlation=source.correlation,
        clock_t=grid.t,
        clock_s=grid.s,
    )


@dataclass(frozen=True)
class Options:
    """The different gammas in a book: positions that share underlying, strike, expiry and hedge vol are one.

    Attributes
    ----------
    underlying : index
    weight : D times the units held, in discounted currency; calls and puts have the same gamma
    log_strike : log K - b T
    vol : hedge vol
    end : variance years to expiry
    """

    underlying: Ints
    weight: Floats
    log_strike: Floats
    vol: Floats
    end: Floats

    @property
    def size(self) -> int:
        """Number of different gammas."""
        return len(self.weight)

    def part(self, which: Flags) -> "Options":
        """Those for which `which` holds."""
        return Options(
            self.underlying[which], self.weight[which], self.log_strike[which], self.vol[which], self.end[which]
        )


def options(book: Book, market: Market, grid: LookGrid) -> Options:
    """The different gammas of `book`, without those that net to nothing."""
    from hedgesim.tables import terms

    t = terms(book, market)
    settles = book.expiry_look <= grid.looks
    end = np.where(settles, grid.s[np.minimum(book.expiry_look, grid.looks)], book.expiry_s)
    key = np.round(np.stack([book.underlying, t.log_strike, book.hedge_vol, end], axis=1), 12)
    _, first, which = np.unique(key, axis=0, return_index=True, return_inverse=True)
    net = np.bincount(which.ravel(), weights=t.strike_leg).astype(np.float64)
    gross = np.bincount(which.ravel(), weights=np.abs(t.strike_leg))
    kept = np.abs(net) > 1e-12 * gross
    first = first[kept]
    found = Options(book.underlying[first], net[kept], t.log_strike[first], book.hedge_vol[first], end[first])
    return _lumped(found) if found.size > LARGE_BOOK else found


def _lumped(held: Options) -> Options:
    """Dense strikes moved to evenly spaced ones, a share to each of four neighbours: cubic interpolation in the strike.

    Spaced at a sixteenth of a hump's width at the inception, `_LUMPS_PER_WIDTH`; groups of one underlying, expiry and
    hedge vol are lumped where that at least halves their number.
    """
    group = np.stack([held.underlying, held.vol, held.end], axis=1)
    parts = []
    for row in np.unique(group, axis=0):
        mine = held.part((group == row).all(axis=1))
        low, high = mine.log_strike.min(), mine.log_strike.max()
        cells = int(np.ceil((high - low) * _LUMPS_PER_WIDTH / (row[1] * np.sqrt(row[2])))) + 1
        if cells + 3 > mine.size // 2:
            parts.append(mine)
            continue
        step = (high - low) / cells
        cell = np.minimum(((mine.log_strike - low) / step).astype(np.int64), cells - 1)
        x = (mine.log_strike - low) / step - cell
        shares = (x * (x - 1) * (2 - x) / 6, (x * x - 1) * (x - 2) / 2, x * (x + 1) * (2 - x) / 2, x * (x * x - 1) / 6)
        weight = np.zeros(cells + 3)
        for k, share in enumerate(shares):
            np.add.at(weight, cell + k, mine.weight * share)
        same = np.ones(cells + 3)
        parts.append(
            Options(
                underlying=np.full(cells + 3, mine.underlying[0]),
                weight=weight,
                log_strike=low + step * np.arange(-1, cells + 2),
                vol=same * mine.vol[0],
                end=same * mine.end[0],
            )
        )
    return Options(
        underlying=np.concatenate([p.underlying for p in parts]),
        weight=np.concatenate([p.weight for p in parts]),
        log_strike=np.concatenate([p.log_strike for p in parts]),
        vol=np.concatenate([p.vol for p in parts]),
        end=np.concatenate([p.end for p in parts]),
    )


@dataclass(frozen=True)
class Humps:
    """Humps at some times.

    Attributes
    ----------
    underlying : (hump,)
    offset : (time, hump) centre less the mean of log X
    spread : (time, hump) squared width plus the variance of log X
    """

    underlying: Ints
    offset: Floats
    spread: Floats

    def means(self) -> Floats:
        """(time, hump) expectation of each hump."""
        return np.asarray(np.exp(-0.5 * self.offset**2 / self.spread) / np.sqrt(2 * np.pi * self.spread))


def humps(held: Options, law: Motion, s: Floats) -> Humps:
    """Gammas of `held`, per unit of weight, at the times `s` (variance years, before every expiry)."""
    width = held.vol**2 * (held.end - s[:, None])
    return placed(held.underlying, held.log_strike + 0.5 * width, width, law, s)


def placed(underlying: Ints, centre: Floats, width: Floats, law: Motion, s: Floats) -> Humps:
    """Humps at given centres and squared widths, (hump,) or (time, hump)."""
    at = s[:, None]
    return Humps(
        underlying=underlying,
        offset=centre - law.mean(underlying, at),
        spread=width + law.vol[underlying] ** 2 * at,
    )


def pair_sum(
    a: Humps, b: Humps, law: Motion, *, shared: Floats, times: Floats, coefficient: Floats, centred: bool
) -> float:
    """Sum over times m and pairs (i, j) of times_m coefficient_ij E[a_mi b_mj], or of their covariances if `centred`.

    Parameters
    ----------
    shared : (time,) the earlier of the two times, in variance years: both log prices have moved together till then
    times : (time,) weights
    coefficient : (hump of a, hump of b)
    """
    together = np.multiply.outer(law.vol[a.underlying], law.vol[b.underlying])
    together = together * law.correlation[np.ix_(a.underlying, b.underlying)]
    total = 0.0
    step = max(1, _CHUNK // max(1, together.size))
    for k in range(0, len(times), step):
        m = slice(k, k + step)
        x, y = a.offset[m, :, None], b.offset[m, None, :]
        p, q = a.spread[m, :, None], b.spread[m, None, :]
        c = shared[m, None, None] * together
        determinant = p * q - c * c
        # Written so that humps close together on one underlying, near expiry, do not cancel.
        joint = c * (x - y) ** 2
        joint += (q - c) * (x * x)
        joint += (p - c) * (y * y)
        joint /= -2.0 * determinant
        np.exp(joint, out=joint)
        joint /= (2 * np.pi) * np.sqrt(determinant)
        if centred:
            joint -= a.means()[m, :, None] * b.means()[m, None, :]
        total += float(times[m] @ (joint.reshape(len(joint), -1) @ coefficient.ravel()))
    return total


@dataclass(frozen=True)
class Panel:
    """A stretch of time without an expiry inside.

    Attributes
    ----------
    start, end : variance years
    alive : options that have not settled before its end
    """

    start: float
    end: float
    alive: Flags

    @property
    def size(self) -> int:
        """How many are alive."""
        return int(np.count_nonzero(self.alive))

    def nodes(self, count: int, *, power: int = 2) -> tuple[Floats, Floats]:
        """Times and weights of an integral over the panel, s = end - (end - start) q^power.

        Power 2 is best where only the inverse root is to be taken away. Power 4 looks closer at the end: strikes 0.01 %
        apart part only in the last moments.
        """
        q, weight = unit_rule(count)
        length = self.end - self.start
        left = np.maximum(length * q**power, _LEAST_LEFT * self.end)
        return self.end - left, power * length * q ** (power - 1) * weight


def panels(held: Options, law: Motion) -> list[Panel]:
    """Stretches between expiries, to the horizon or to the last expiry, whichever is first."""
    edges = np.unique(np.concatenate([[0.0, law.life], held.end[held.end < law.life]]))
    found = [Panel(float(x), float(y), held.end >= y) for x, y in pairwise(edges)]
    return [panel for panel in found if panel.alive.any()]


def unit_rule(count: int) -> tuple[Floats, Floats]:
    """Gauss-Legendre nodes and weights on (0, 1)."""
    x, weight = np.polynomial.legendre.leggauss(count)
    return 0.5 * (x + 1.0), 0.5 * weight


def ordered_pairs(parts: list[Panel], count: int) -> Iterator[tuple[Panel, Panel, Floats, Floats, Floats]]:
    """Nodes (panel, later panel, time, later time, weight) of a double integral over all pairs of ordered times.

    Within a panel the later time is at q x, the earlier at q: the corner at an expiry, where both humps are narrow, is
    then as smooth as the rest (the substitution of Duffy 1982, SIAM J. Numerical Analysis 19, from memory).
    """
    q, weight = unit_rule(count)
    first, second = (z.ravel() for z in np.meshgrid(q, q, indexing="ij"))
    both = np.multiply.outer(weight, weight).ravel()
    for k, early in enumerate(parts):
        length = early.end - early.start
        inner = first * second
        jacobian = 4.0 * length**2 * first * inner * first
        yield early, early, early.end - length * first**2, early.end - length * inner**2, jacobian * both
        for late in parts[k + 1 :]:
            span = late.end - late.start
            jacobian = 4.0 * length * span * first * second
            yield early, late, early.end - length * first**2, late.end - span * second**2, jacobian * both


def zeros(function: Callable[[Floats], Floats], points: Floats) -> Floats:
    """Where `function` changes sign between neighbours of the ascending `points`, those where it is 0 passed over."""
    values = function(points)
    points, values = points[values != 0.0], values[values != 0.0]
    at = np.flatnonzero(np.sign(values[1:]) != np.sign(values[:-1]))
    low, high, sign = points[at], points[at + 1], np.sign(values[at])
    for _ in range(_HALVINGS if len(at) else 0):
        middle = 0.5 * (low + high)
        before = np.sign(function(middle)) == sign
        low, high = np.where(before, middle, low), np.where(before, high, middle)
    return np.asarray(0.5 * (low + high))


def absolute_mean(held: Options, law: Motion, u: int, s: float) -> tuple[float, float]:
    """E|g| and E[|g| / X] of the options of underlying `u` at time `s`; g = X^2 U'' changes sign at points found here.

    Between sign changes both integrals are closed forms; a point missed by e costs of the order of e^2.
    """
    from scipy.special import ndtr

    w2 = held.vol**2 * (held.end - s)
    centre = held.log_strike + 0.5 * w2
    mean, variance = float(law.mean(np.array([u]), np.array([s]))[0]), float(law.vol[u] ** 2 * s)
    edges = np.array([-np.inf, np.inf])
    if not (np.all(held.weight > 0) or np.all(held.weight < 0)):
        edges = np.concatenate([edges[:1], _zeros(held.weight, centre, np.sqrt(w2), mean, variance), edges[1:]])
    results = []
    for tilt in (0.0, -1.0):
        # Weighting by exp(tilt y) moves the mean of y by tilt times its variance.
        shifted = mean + tilt * variance
        mass = np.exp(tilt * mean + 0.5 * tilt**2 * variance - 0.5 * (centre - shifted) ** 2 / (variance + w2))
        mass *= held.weight / np.sqrt(2 * np.pi * (variance + w2))
        middle = (shifted * w2 + centre * variance) / (variance + w2)
        sd = np.sqrt(variance * w2 / (variance + w2))
        below = ndtr((edges[:, None] - middle) / sd)
        results.append(float(np.abs(np.diff(below, axis=0) @ mass).sum()))
    return results[0], results[1]


def probes(count: int) -> int:
    """How many points are searched for sign changes of the sum of `count` humps, at most."""
    return min(len(_PROBES) * count, max(_FEWEST_PROBES, min(_MOST_PROBES, _PROBE_WORK // count)))


def _zeros(weight: Floats, centre: Floats, width: Floats, mean: float, variance: float) -> Floats:
    """Where the sum of humps changes sign, within nine standard deviations of the price."""

    def total(y: Floats) -> Floats:
        return np.asarray(np.exp(-0.5 * ((y[:, None] - centre) / width) ** 2) @ (weight / width))

    points = np.sort((centre + np.multiply.outer(_PROBES, width)).ravel())
    points = points[np.abs(points - mean) < 9.0 * np.sqrt(variance)]
    most = probes(len(weight))
    if len(points) > most:
        points = points[np.linspace(0, len(points) - 1, most).astype(np.int64)]
    return zeros(total, points)


def open_at_horizon(book: Book, market: Market, grid: LookGrid, law: Motion) -> tuple[Humps, Floats]:
    """Humps, and their amounts, that add up to U^m - U^k at the horizon."""
    from hedgesim.tables import terms

    t = terms(book, market)
    still = np.flatnonzero((book.expiry_look > grid.looks) & (book.hedge_vol != book.mark_vol))
    left = book.expiry_s[still] - grid.s[-1]
    low, high = book.hedge_vol[still] ** 2 * left, book.mark_vol[still] ** 2 * left
    node, weight = unit_rule(_NODES_TERMINAL)
    width = (low[:, None] + np.multiply.outer(high - low, node)).ravel()
    amount = np.multiply.outer(high - low, weight).ravel()
    legs = 0.5 * t.strike_leg
    underlying = np.repeat(book.underlying[still], _NODES_TERMINAL)
    centre = np.repeat(t.log_strike[still], _NODES_TERMINAL) + 0.5 * width
    return placed(underlying, centre, width, law, grid.s[-1:]), amount * np.repeat(legs[still], _NODES_TERMINAL)


def final_trades(book: Book, market: Market, grid: LookGrid, law: Motion, u: int) -> tuple[float, float]:
    """Expected discounted notional and units traded at settlements and in the final unwinding."""
    from scipy.special import ndtr

    from hedgesim.tables import terms

    mine = np.flatnonzero(book.underlying == u)
    growth = float(market.growth[u])
    t = terms(book, market)
    is_put = np.where(book.is_call, 0.0, 1.0)
    z, weight = unit_rule(8)
    notional, units = 0.0, 0.0
    for look in np.unique(np.minimum(book.expiry_look[mine], grid.looks)):
        s = grid.s[look : look + 1]
        settling = mine[(book.expiry_look[mine] == look) & ~book.physical[mine]]
        open_ = mine[book.expiry_look[mine] > grid.looks] if look == grid.looks else mine[:0]
        root = book.hedge_vol[open_] * np.sqrt(book.expiry_s[open_] - s)

        def held(y: Floats, settling: Ints = settling, open_: Ints = open_, root: Floats = root) -> Floats:
            """Slope of what leaves the book, minus the hedge to be traded away."""
            paying = np.where(y[:, None] > t.log_strike[settling], 1.0, 0.0) - is_put[settling]
            upper = ndtr((y[:, None] - t.log_strike[open_]) / root + 0.5 * root) - is_put[open_]
            return np.asarray(paying @ t.slope[settling] + upper @ t.slope[open_])

        mean, sd = float(law.mean(np.array([u]), s)[0]), float(law.vol[u] * np.sqrt(s[0]))
        low, high = mean - 8.5 * sd, mean + 8.5 * sd
        edges = np.concatenate([np.linspace(low, high, 69), np.clip(t.log_strike[settling], low, high)])
        edges = np.sort(np.concatenate([edges, zeros(held, np.unique(edges))]))
        y = (edges[:-1, None] + np.multiply.outer(np.diff(edges), z)).ravel()
        mass = np.multiply.outer(np.diff(edges), weight).ravel()
        mass *= np.exp(-0.5 * ((y - mean) / sd) ** 2) / (np.sqrt(2 * np.pi) * sd) * np.abs(held(y))
        notional += float(mass @ np.exp(y))
        units += float(mass.sum() * np.exp(-growth * grid.t[look]))
    return notional, units
