"""Option positions, and the value, greeks and payoff of a book."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date

import numpy as np
from numpy.typing import NDArray

from hedgesim.market import Flags, Floats, Ints, Market, frozen
from hedgesim.pricing import greeks


@dataclass(frozen=True)
class Expiry:
    """When a position settles; exactly one is given.

    Attributes
    ----------
    days : trading days after the inception (calendar days under act-365)
    years : calendar years after the inception
    on : a date
    """

    days: float | None = None
    years: float | None = None
    on: date | None = None


@dataclass(frozen=True)
class Position:
    """A position as the experiment states it, before an inception fixes spot, vol and looks.

    Attributes
    ----------
    underlying : index of the underlying
    is_call : call or put
    strike : price; or a fraction of the spot at inception when `strike_of_spot`
    amount : signed units of the underlying; or signed notional in currency when `is_notional`
    expiry : see `Expiry`
    mark_vol, hedge_vol : own vols, None to take those of the underlying
    premium : price per unit of the underlying, None to take the model value at mark
    physical : settled by delivery
    """

    underlying: int
    is_call: bool
    strike: float
    strike_of_spot: bool
    amount: float
    is_notional: bool
    expiry: Expiry
    mark_vol: float | None = None
    hedge_vol: float | None = None
    premium: float | None = None
    physical: bool = False


@dataclass(frozen=True)
class Book:
    """Positions of one inception, one array entry a position; negative units are short.

    Attributes
    ----------
    underlying : index of the underlying
    is_call : call or put
    strike : price, in currency
    units : signed quantity times contract multiplier, in units of the underlying
    expiry_look : look at which the position settles; larger than the last look when the horizon is earlier
    expiry_t, expiry_s : calendar and variance years from the inception to expiry
    mark_vol : vol that values the position
    hedge_vol : reference hedge vol, that the delta is computed at
    premium : price paid or received per unit of the underlying; nan where the model value at mark is taken
    physical : settled by delivery of the units, not in cash
    initial_units : by underlying: hedge units already held at the inception
    """

    underlying: Ints
    is_call: Flags
    strike: Floats
    units: Floats
    expiry_look: Ints
    expiry_t: Floats
    expiry_s: Floats
    mark_vol: Floats
    hedge_vol: Floats
    premium: Floats
    physical: Flags
    initial_units: Floats

    @property
    def size(self) -> int:
        """Number of positions."""
        return len(self.units)


def settle_terms(
    positions: Sequence[Position],
    *,
    spot: Floats,
    mark_vol: Floats,
    hedge_vol: Floats,
    expiry_look: Ints,
    expiry_t: Floats,
    expiry_s: Floats,
    initial_units: Floats,
) -> Book:
    """Fix `positions` at one inception.

    Parameters
    ----------
    spot, initial_units : by underlying
    mark_vol : by underlying, at the inception; a position's own mark vol goes before it
    hedge_vol : by underlying: the vol to hedge at, nan to hedge each position at its mark vol; a position's own hedge
        vol goes before it
    expiry_look, expiry_t, expiry_s : by position
    """
    at = np.array([p.underlying for p in positions], dtype=np.int64)
    strike = np.array([p.strike * (spot[p.underlying] if p.strike_of_spot else 1.0) for p in positions])
    units = np.array([p.amount / (spot[p.underlying] if p.is_notional else 1.0) for p in positions])
    mark = np.array([mark_vol[p.underlying] if p.mark_vol is None else p.mark_vol for p in positions])
    usual = np.where(np.isnan(hedge_vol[at]), mark, hedge_vol[at])
    hedge = np.array([v if p.hedge_vol is None else p.hedge_vol for p, v in zip(positions, usual, strict=True)])
    return Book(
        underlying=frozen(at, np.int64),
        is_call=frozen([p.is_call for p in positions], bool),
        strike=frozen(strike),
        units=frozen(units),
        expiry_look=frozen(expiry_look, np.int64),
        expiry_t=frozen(expiry_t),
        expiry_s=frozen(expiry_s),
        mark_vol=frozen(mark),
        hedge_vol=frozen(hedge),
        premium=frozen([np.nan if p.premium is None else p.premium for p in positions]),
        physical=frozen([p.physical for p in positions], bool),
        initial_units=frozen(initial_units),
    )


@dataclass(frozen=True)
class Exposure:
    """What the book is worth and how it moves, by position, at the inception, at the mark vol.

    Attributes
    ----------
    value : units times model value, in currency
    delta : units times dV/dS, in units of the underlying
    gamma : units times d2V/dS2
    vega : units times dV/dvol, per unit of vol
    """

    value: Floats
    delta: Floats
    gamma: Floats
    vega: Floats


def exposure(book: Book, market: Market, *, vol: Floats | None = None) -> Exposure:
    """Value and greeks of each position at the inception, at `vol` (default: the mark vols)."""
    u = book.underlying
    g = greeks(
        market.spot[u],
        book.strike,
        years=book.expiry_t,
        variance_years=book.expiry_s,
        vol=book.mark_vol if vol is None else vol,
        rate=market.rate,
        growth=market.growth[u],
        is_call=book.is_call,
    )
    return Exposure(*(book.units * x for x in (g.value, g.delta, g.gamma, g.vega)))


def premium_received(book: Book, market: Market) -> Floats:
    """Cash at the inception by position: minus units times premium, at the model value where none is given."""
    model = exposure(book, market).value
    return -np.where(np.isnan(book.premium), model, book.units * book.premium)


def gross_value(book: Book, market: Market) -> float:
    """Sum of the absolute position values at the inception: the yardstick of the P&L identity."""
    return float(np.abs(exposure(book, market).value).sum())


def expiry_looks(book: Book) -> NDArray[np.int64]:
    """The looks at which any position settles, ascending."""
    return np.unique(book.expiry_look)
