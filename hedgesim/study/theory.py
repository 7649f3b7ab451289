"""Published laws of discrete hedging for a whole book under geometric Brownian motion, to draw beside the figures.

All are for N hedge intervals of equal variance time over the life (the time to the horizon), discounted to the
inception, and for the real-world law of the paths: realised vol, drift and correlation of the source. Gammas are those
of the reference hedge vols. Integrals over time are as accurate as stated where the variance clock runs evenly; with
overnight variance the drift is read off the broken line of the clock, and they are good to about 1e-4.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike

from hedgesim.book import Book, exposure, premium_received
from hedgesim.costs import CostTerms
from hedgesim.market import Floats, LookGrid, Market
from hedgesim.paths.gbm import Gbm
from hedgesim.study.humps import (
    Humps,
    Motion,
    Options,
    absolute_mean,
    final_trades,
    humps,
    motion,
    open_at_horizon,
    options,
    ordered_pairs,
    pair_sum,
    panels,
    probes,
)

# Nodes a panel, fewer where books are large: short panels between many expiries need few.
_NODES, _POWER = (64, 40, 24, 12, 8, 5), 4
_NODES_SMOOTH = 40
_NODES_ABSOLUTE = (24, 16, 8, 5, 4)
_NODES_PAIRS = (28, 20, 14, 10)
_WORK, _MOST_WORK = 10_000_000, 60_000_000
# A law whose limit is further than this from the book's own is said not to hold; a ratio of standard deviations.
_NEAR = 0.01

Quantity = Literal["discretisation", "floor", "cost"]


@dataclass(frozen=True)
class Interval:
    """P&L of the hedged book over one interval from the inception, in discounted currency."""

    mean: float
    sd: float
    skewness: float
    excess_kurtosis: float


@dataclass(frozen=True)
class LeadingCost:
    """Expected cost of hedging with N intervals: spread and commission grow with the root of N, tickets with N.

    Amounts are positive, in discounted currency, added over underlyings.

    Attributes
    ----------
    spread, commission : of rehedging, to be multiplied by sqrt(N)
    tickets : of rehedging, to be multiplied by N
    ends_spread, ends_commission, ends_tickets : of entry, settlements and final unwinding, whatever N
    """

    spread: float
    commission: float
    tickets: float
    ends_spread: float
    ends_commission: float
    ends_tickets: float

    def rehedging(self, trades: ArrayLike) -> Floats:
        """Without entry, settlements and unwinding."""
        n = np.asarray(trades, dtype=np.float64)
        return np.asarray((self.spread + self.commission) * np.sqrt(n) + self.tickets * n)

    def total(self, trades: ArrayLike) -> Floats:
        """All trades."""
        return np.asarray(self.rehedging(trades) + self.ends_spread + self.ends_commission + self.ends_tickets)


@dataclass(frozen=True)
class Continuous:
    """P&L of continuous hedging at the hedge vols, without costs: the floor.

    Attributes
    ----------
    mean : in discounted currency, premium edge included
    variance : in currency squared; None where it is not computed, for `reason`
    reason : empty when there is a variance
    """

    mean: float
    variance: float | None
    reason: str


@dataclass(frozen=True)
class Law:
    """A reference line over the number of trades.

    Attributes
    ----------
    name, source : as a chart and its notes state them
    quantity : what it gives: variance of the discretisation, variance of the floor, or mean cost as a positive amount
    assumptions : of its derivation
    holds : this book, market and source meet them, but for the number of trades, which is to be large
    reason : why not, else empty
    curve : value at N hedge intervals, None where the law cannot be written down for this book
    """

    name: str
    source: str
    quantity: Quantity
    assumptions: tuple[str, ...]
    holds: bool
    reason: str
    curve: Callable[[ArrayLike], Floats] | None


def misses(law: Law, trades: ArrayLike, value: ArrayLike) -> Floats:
    """The law over what is found, `value` at `trades`; 1 where it is exact, nan where there is no law or no value."""
    found = np.asarray(value, dtype=np.float64)
    if law.curve is None:
        return np.full(np.broadcast_shapes(np.shape(trades), found.shape), np.nan)
    told = law.curve(trades)
    return np.asarray(np.divide(told, found, out=np.full(np.broadcast_shapes(told.shape, found.shape), np.nan),
                                where=found != 0.0))  # fmt: skip


def granularity(*, market: Market, book: Book, grid: LookGrid, source: Gbm) -> float:
    """G2 with Var(discretisation) ~ G2 / N for N equal intervals of variance time, in currency squared.

    Notes
    -----
    Bertsimas, Kogan and Lo (2000), J. Financial Economics 55 (re-derived), for a whole book: over an interval h the
    hedged book earns the sum over underlyings of 1/2 sigma_u^2 g_u h (Z_u^2 - 1), g = X^2 U'' at the hedge vols, and
    Cov(Z_u^2, Z_w^2) = 2 rho_uw^2. With S the life in variance years,

        G2 = (S/2) int_0^S sum_uw rho_uw^2 sigma_u^2 sigma_w^2 E[g_u g_w] ds

    Gammas of one underlying add before they are squared. Relative accuracy 1e-6; 1e-3 where strikes are lumped, in
    books of more than 200 different options.
    """
    law, held = motion(market, grid, source), options(book, market, grid)
    total = 0.0
    parts = panels(held, law)
    count = _affordable(_NODES, [p.size**2 for p in parts])
    for panel in parts:
        alive = held.part(panel.alive)
        s, weight = panel.nodes(count, power=_POWER)
        at = humps(alive, law, s)
        coefficient = _squared_correlation(alive, law)
        total += pair_sum(at, at, law, shared=s, times=weight, coefficient=coefficient, centred=False)
    return 0.5 * law.life * total


def _affordable(choices: tuple[int, ...], work: list[int]) -> int:
    """Most nodes a panel that keep the work in bounds, or the fewest; `work` of one node of each panel."""
    return next((n for n in choices if n * sum(work) <= _WORK), choices[-1])


def _squared_correlation(held: Options, law: Motion) -> Floats:
    amount = held.weight * law.vol[held.underlying] ** 2
    correlation = law.correlation[np.ix_(held.underlying, held.underlying)]
    return np.asarray(np.multiply.outer(amount, amount) * correlation**2)


def boyle_emanuel(*, market: Market, book: Book, grid: LookGrid, source: Gbm, trades: float) -> Interval:
    """P&L of the first of `trades` equal intervals of variance time, to leading order in its length.

    Notes
    -----
    Boyle and Emanuel (1980), J. Financial Economics 8 (from memory; verified): 1/2 sigma^2 g h (Z^2 - 1), with
    skewness sqrt(8) of the sign of gamma and excess kurtosis 12; for several underlyings a quadratic form in
    correlated normals, with cumulants 2 tr M^2, 8 tr M^3 and 48 tr M^4, M = diag(1/2 sigma_u^2 g_u h) correlation. The
    mean is 1/2 sum_j g_j (sigma^2 - k_j^2) h, k the hedge vol.
    """
    law, held = motion(market, grid, source), options(book, market, grid)
    h = law.life / trades
    half_gamma = 0.5 * h * held.weight * humps(held, law, np.zeros(1)).means()[0]
    realised = law.vol[held.underlying] ** 2
    form = np.bincount(held.underlying, half_gamma * realised, minlength=len(law.vol))[:, None] * law.correlation
    square = form @ form
    second, third, fourth = 2.0 * np.trace(square), 8.0 * np.trace(square @ form), 48.0 * np.trace(square @ square)
    flat = second == 0.0
    return Interval(
        mean=float((half_gamma * (realised - held.vol**2)).sum()),
        sd=float(np.sqrt(second)),
        skewness=float("nan") if flat else float(third / second**1.5),
        excess_kurtosis=float("nan") if flat else float(fourth / second**2),
    )


def _single(held: Options, law: Motion) -> str:
    """Why the book is not one option held to the horizon and hedged at the realised vol; empty when it is."""
    if held.size != 1:
        return f"the book has {held.size} different options, the law is for one"
    if abs(held.end[0] - law.life) > 1e-9 * law.life:
        return "the option does not expire at the horizon"
    if abs(held.vol[0] - law.vol[held.underlying[0]]) > 1e-12:
        return "the hedge vol is not the realised vol"
    return ""


def _d2(held: Options, law: Motion) -> float:
    u = held.underlying[0]
    root = float(held.vol[0] * np.sqrt(held.end[0]))
    return float(law.start[u] - held.log_strike[0]) / root - 0.5 * root


def _density(x: float) -> float:
    return float(np.exp(-0.5 * x * x) / np.sqrt(2.0 * np.pi))


def kamal_derman(*, market: Market, book: Book, grid: LookGrid, source: Gbm) -> tuple[float | None, str]:
    """sqrt(pi/4) vega sigma, which over sqrt(N) is the standard deviation, in discounted currency; or None and why.

    Notes
    -----
    Kamal and Derman (1999), Risk 12(1). Exact in the limit of many trades where d2 = 0 and the drift is the growth of
    the forward; elsewhere an approximation, which is given all the same.
    """
    law, held = motion(market, grid, source), options(book, market, grid)
    reason = _single(held, law)
    if reason:
        return None, reason
    vega = abs(float(held.weight[0])) * _density(_d2(held, law)) * np.sqrt(held.end[0])
    return float(np.sqrt(np.pi / 4) * vega * held.vol[0]), ""


def two_term(*, market: Market, book: Book, grid: LookGrid, source: Gbm) -> tuple[tuple[float, float] | None, str]:
    """(a, b) of N Var = a + b / sqrt(N) + O(1/N), in currency squared; or None and why.

    Notes
    -----
    a is the granularity, b = zeta(-1/2)/sqrt(pi) sigma^2 k*^2 T phi(d2), k* = K exp(-rT) times the units: what the sum
    over intervals misses of the inverse root at expiry. Derived for drift = growth of the forward; no published source.
    """
    from scipy.special import zeta

    law, held = motion(market, grid, source), options(book, market, grid)
    reason = _single(held, law)
    if not reason and abs(law.excess[held.underlying[0]]) > 1e-12:
        reason = "the drift is not the growth of the forward"
    if reason:
        return None, reason
    scale = (float(held.vol[0] * held.weight[0])) ** 2 * float(held.end[0])
    zeta_minus_half = -zeta(1.5) / (4.0 * np.pi)  # by the functional equation; scipy's zeta starts at 1
    second = zeta_minus_half / np.sqrt(np.pi) * scale * _density(_d2(held, law))
    return (granularity(market=market, book=book, grid=grid, source=source), float(second)), ""


def leading_cost(*, market: Market, book: Book, grid: LookGrid, source: Gbm, costs: CostTerms) -> LeadingCost:
    """Expected cost of hedging with N equal intervals of variance time, to leading order in N, and its ends.

    Notes
    -----
    An interval h trades |dP| = sigma X |U''| sqrt(h) |Z| units, E|Z| = sqrt(2/pi), at the half-spread lambda:

        spread     lambda sqrt(2 N / (pi S)) int sigma E[X^2 |U''|] ds, for one option at the realised vol and drift =
                   growth lambda vega sqrt(2 N / (pi T)) (same order as Leland 1985, J. Finance 40)
        commission the same with the cost per unit, X |U''| and the factor exp(-b t)
        tickets    N / S int exp(-r t) ds to the last expiry of the underlying, and half a ticket at each end: an
                   underlying of N intervals has N + 1 trades

    The ends are entry, the hedge of what settles in cash, and the final unwinding; at each the hedge goes from its
    limit just before to that just after. Trades that a schedule makes at expiries between its own are not counted, and
    every trade is taken to need a ticket. Relative accuracy 1e-4 of the integrals; their laws err by order 1/N.
    """
    law, held = motion(market, grid, source), options(book, market, grid)
    entry = np.bincount(book.underlying, exposure(book, market, vol=book.hedge_vol).delta, minlength=len(market.names))
    entry = np.abs(entry + book.initial_units)
    sums = np.zeros(6)
    for u in range(len(market.names)):
        rate, unit, ticket = costs.half_spread[u], costs.per_unit[u], costs.per_trade[u]
        notional, units = _rehedging(held.part(held.underlying == u), law, u, float(market.growth[u]))
        ends_notional, ends_units = final_trades(book, market, grid, law, u)
        rehedging_tickets, end_tickets = _tickets(book, market, grid, law, u, bool((held.underlying == u).any()))
        sums += [
            rate * notional,
            unit * units,
            ticket * rehedging_tickets,
            rate * (entry[u] * market.spot[u] + ends_notional),
            unit * (entry[u] + ends_units),
            ticket * end_tickets,
        ]
    return LeadingCost(*(float(x) for x in sums))


def _rehedging(held: Options, law: Motion, u: int, growth: float) -> tuple[float, float]:
    """Discounted notional and units traded in rehedging, over sqrt(N)."""
    total = np.zeros(2)
    parts = panels(held, law)
    count = _affordable(_NODES_ABSOLUTE, [probes(p.size) * p.size for p in parts])
    for panel in parts:
        alive = held.part(panel.alive)
        s, weight = panel.nodes(count)
        carry = np.exp(-growth * law.years(s))
        found = np.array([absolute_mean(alive, law, u, float(x)) for x in s])
        total += weight @ (found * np.stack([np.ones_like(carry), carry], axis=1))
    notional, units = total * law.vol[u] * np.sqrt(2.0 / (np.pi * law.life))
    return float(notional), float(units)


def _tickets(book: Book, market: Market, grid: LookGrid, law: Motion, u: int, rehedged: bool) -> tuple[float, float]:
    """Discounted number of tickets of rehedging, over N, and of the ends."""
    mine = book.expiry_look[book.underlying == u]
    if not len(mine):
        return 0.0, float(book.initial_units[u] != 0.0)
    last = min(int(mine.max()), grid.looks)
    final = float(np.exp(-market.rate * grid.t[last]))
    if not rehedged:
        return 0.0, 1.0 + final
    discount = np.exp(-market.rate * grid.t[: last + 1])
    mean = float((0.5 * (discount[1:] + discount[:-1]) * np.diff(grid.s[: last + 1])).sum()) / law.life
    return mean, 0.5 * (1.0 + final)


def continuous_hedging(*, market: Market, book: Book, grid: LookGrid, source: Gbm) -> Continuous:
    """Mean and variance of the P&L of continuous hedging at the hedge vols.

    Notes
    -----
    Ahmad and Wilmott (2005), Wilmott magazine, in general form: with U^k, U^m the book at hedge and mark vols,

        P&L = premium edge + [U^m - U^k](S) - [U^m - U^k](0) + int_0^S sum_j 1/2 (sigma^2 - k_j^2) g_j ds

    where the first bracket is what is still open at the horizon. Since dU/dw^2 = g/2 for total variance w^2, it is an
    integral of the same humps over w^2, and mean and variance are single and double integrals of normal densities,
    whatever the number of underlyings. Relative accuracy: mean 1e-8 of its integrals, standard deviation 1e-5.
    """
    law, held = motion(market, grid, source), options(book, market, grid)
    certain = float((premium_received(book, market) + exposure(book, market, vol=book.hedge_vol).value).sum())
    excess = law.vol[held.underlying] ** 2 - held.vol**2
    held = held.part(np.abs(excess) > 1e-15)
    amount = 0.5 * held.weight * (law.vol[held.underlying] ** 2 - held.vol**2)
    parts = panels(held, law)
    mean = certain
    for panel in parts:
        s, weight = panel.nodes(_NODES_SMOOTH)
        mean += float(weight @ humps(held.part(panel.alive), law, s).means() @ amount[panel.alive])
    final, final_amount = open_at_horizon(book, market, grid, law)
    mean += float(final.means()[0] @ final_amount)
    pairs = sum(a.size * b.size for k, a in enumerate(parts) for b in parts[k:])
    ends = len(final_amount) * (len(final_amount) + _NODES_SMOOTH * sum(panel.size for panel in parts))
    if pairs * _NODES_PAIRS[-1] ** 2 > _MOST_WORK or ends > _MOST_WORK:
        return Continuous(mean, None, f"{book.size} positions are too many for the double integral")
    count = next((n for n in _NODES_PAIRS if pairs * n**2 <= _WORK), _NODES_PAIRS[-1])
    variance = 0.0
    for early, late, s, later, weight in ordered_pairs(parts, count):
        variance += 2.0 * pair_sum(
            humps(held.part(early.alive), law, s),
            humps(held.part(late.alive), law, later),
            law,
            shared=s,
            times=weight,
            coefficient=np.multiply.outer(amount[early.alive], amount[late.alive]),
            centred=True,
        )
    if len(final_amount):
        for panel in parts:
            s, weight = panel.nodes(_NODES_SMOOTH)
            at_end = Humps(final.underlying, *(np.repeat(x, len(s), axis=0) for x in (final.offset, final.spread)))
            variance += 2.0 * pair_sum(
                humps(held.part(panel.alive), law, s),
                at_end,
                law,
                shared=s,
                times=weight,
                coefficient=np.multiply.outer(amount[panel.alive], final_amount),
                centred=True,
            )
        variance += pair_sum(
            final,
            final,
            law,
            shared=grid.s[-1:],
            times=np.ones(1),
            coefficient=np.multiply.outer(final_amount, final_amount),
            centred=True,
        )
    return Continuous(mean, max(variance, 0.0), "")


_GBM = "geometric Brownian motion"
_EQUAL = "equal intervals of variance time"
_MANY = "many trades"
_AT_REALISED = "hedged at the realised vol"


def laws(*, market: Market, book: Book, grid: LookGrid, source: Gbm, costs: CostTerms) -> tuple[Law, ...]:
    """Every law beside this experiment, also those that do not hold for it, each with the reason."""
    g2 = granularity(market=market, book=book, grid=grid, source=source)
    floor = continuous_hedging(market=market, book=book, grid=grid, source=source)
    charged = leading_cost(market=market, book=book, grid=grid, source=source, costs=costs)
    floor_source = "Ahmad and Wilmott (2005), general form"
    return (
        Law(
            name="granularity",
            source="Bertsimas, Kogan and Lo (2000), for a whole book",
            quantity="discretisation",
            assumptions=(_GBM, _EQUAL, _MANY),
            holds=True,
            reason="",
            curve=_over_trades(g2, 1.0),
        ),
        _kamal_derman_law(market, book, grid, source, g2),
        _two_term_law(market, book, grid, source),
        _boyle_emanuel_law(market, book, grid, source, g2),
        Law(
            name="continuous hedging",
            source=floor_source,
            quantity="floor",
            assumptions=(_GBM, "hedged without pause at the hedge vol", "no costs"),
            holds=floor.variance is not None,
            reason=floor.reason,
            curve=None if floor.variance is None else _over_trades(floor.variance, 0.0),
        ),
        Law(
            name="leading-order cost",
            source="order of Leland (1985) and Toft (1996), for a whole book",
            quantity="cost",
            assumptions=(_GBM, _EQUAL, _MANY, "no trades but those of the intervals"),
            holds=True,
            reason="",
            curve=charged.total,
        ),
    )


def _over_trades(coefficient: float, power: float) -> Callable[[ArrayLike], Floats]:
    return lambda trades: np.asarray(coefficient * np.asarray(trades, dtype=np.float64) ** -power)


def _against_limit(law: float, limit: float) -> str:
    """Why a law of order 1/N does not hold in the limit, or an empty string."""
    if limit == 0.0:
        return "" if law == 0.0 else "the book has no variance to remove"
    ratio = float(np.sqrt(law / limit))
    return "" if abs(ratio - 1.0) <= _NEAR else f"its standard deviation tends to {ratio:.3g} times that of this book"


def _kamal_derman_law(market: Market, book: Book, grid: LookGrid, source: Gbm, g2: float) -> Law:
    root, reason = kamal_derman(market=market, book=book, grid=grid, source=source)
    if root is not None:
        reason = _against_limit(root**2, g2)
    return Law(
        name="square-root law",
        source="Kamal and Derman (1999)",
        quantity="discretisation",
        assumptions=(_GBM, _EQUAL, _MANY, "one option, held to expiry", _AT_REALISED, "drift = growth", "d2 = 0"),
        holds=not reason,
        reason=reason,
        curve=None if root is None else _over_trades(root**2, 1.0),
    )


def _two_term_law(market: Market, book: Book, grid: LookGrid, source: Gbm) -> Law:
    terms, reason = two_term(market=market, book=book, grid=grid, source=source)

    def curve(trades: ArrayLike) -> Floats:
        n = np.asarray(trades, dtype=np.float64)
        first, second = terms or (np.nan, np.nan)
        return np.asarray(first / n + second / n**1.5)

    return Law(
        name="two-term law",
        source="granularity and its next term, derived",
        quantity="discretisation",
        assumptions=(_GBM, _EQUAL, "one option, held to expiry", _AT_REALISED, "drift = growth"),
        holds=terms is not None,
        reason=reason,
        curve=None if terms is None else curve,
    )


def _boyle_emanuel_law(market: Market, book: Book, grid: LookGrid, source: Gbm, g2: float) -> Law:
    whole = boyle_emanuel(market=market, book=book, grid=grid, source=source, trades=1.0).sd ** 2
    reason = _against_limit(whole, g2)
    return Law(
        name="gamma of the inception",
        source="Boyle and Emanuel (1980), N times their interval",
        quantity="discretisation",
        assumptions=(_GBM, _EQUAL, _MANY, "dollar gamma stays what it is at the inception"),
        holds=not reason,
        reason=reason,
        curve=_over_trades(whole, 1.0),
    )
