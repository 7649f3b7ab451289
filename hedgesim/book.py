"""Option positions, and the value, greeks and payoff of a book."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hedgesim.market import Flags, Floats, Ints, Market
from hedgesim.pricing import greeks


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
