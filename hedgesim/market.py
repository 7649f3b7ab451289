"""Market data and clocks: rates, yields, underlyings, and the watch grid on which prices are seen."""

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]
DayCount = Literal["business-252", "act-365"]

DAYS_PER_YEAR: dict[DayCount, int] = {"business-252": 252, "act-365": 365}
DAYS_PER_WEEK: dict[DayCount, int] = {"business-252": 5, "act-365": 7}


def frozen(values: Any, dtype: type = np.float64) -> NDArray[Any]:
    """A read-only copy of `values` as an array of `dtype`."""
    array: NDArray[Any] = np.array(values, dtype=dtype)
    array.setflags(write=False)
    return array


@dataclass(frozen=True)
class Market:
    """One rate and the underlyings, in one currency; arrays are by underlying.

    Attributes
    ----------
    names : names of the underlyings
    rate : continuously compounded, per calendar year
    spot : price at inception
    yield_rate : what holding the underlying pays, continuously compounded: dividend yield, foreign rate, lease rate.
        For a future it equals the rate, which makes the growth of the price zero
    is_future : a daily-margined future: buying it needs no money
    """

    names: tuple[str, ...]
    rate: float
    spot: Floats
    yield_rate: Floats
    is_future: Flags

    @property
    def growth(self) -> Floats:
        """b, growth of the forward per calendar year: rate less yield."""
        return self.rate - self.yield_rate

    def hedge_weights(self, t: Floats) -> Floats:
        """Discounted value change of one hedge unit per unit of dX over each look, shape (underlying, look).

        With X = S exp(-b t), a unit held over look i -> i+1 earns w_i (X_i+1 - X_i), discounted: w_i = exp(-yield t_i)
        for a cash underlying whose yield is paid out at the look, w_i = exp(-r t_i+1) for a daily-margined future.
        """
        cash = np.exp(-np.outer(self.yield_rate, t[:-1]))
        margined = np.exp(-self.rate * t[1:])[None, :]
        return np.where(self.is_future[:, None], margined, cash)


@dataclass(frozen=True)
class LookGrid:
    """The watch grid of one inception: look 0 is the inception, the last look is the horizon. Arrays are by look.

    Attributes
    ----------
    t : calendar years since the inception (discount, yield)
    s : variance years since the inception (volatility)
    clock : trading days elapsed on the session clock, by which schedules count; the close of a day and the open of
        the next stand at the same clock time
    is_open, is_close : first and last look of a trading day. Without overnight variance the open is the previous close
    regular : simulated grids; an interval that is not a whole number of looks is then refused, not rounded
    """

    t: Floats
    s: Floats
    clock: Floats
    is_open: Flags
    is_close: Flags
    regular: bool

    @property
    def looks(self) -> int:
        """Number of looks after the inception."""
        return len(self.t) - 1


def session_grid(
    *, days: float, looks_per_day: int, day_count: DayCount, session_hours: float, overnight: float
) -> LookGrid:
    """Looks of a simulated market: the inception is at a close, then whole or part trading days follow.

    Parameters
    ----------
    days : trading days to the horizon; a fraction must be a whole number of looks
    looks_per_day : looks from the open to the close
    day_count : how many days make a year
    session_hours : length of the session, for the share of calendar time that passes overnight
    overnight : share of a day's variance between close and open, 0 <= overnight < 1. With 0, close and next open are
        one look; otherwise each day has one more look, its open
    """
    year = DAYS_PER_YEAR[day_count]
    steps = round(days * looks_per_day)
    k = np.arange(1, steps + 1)
    clock = k / looks_per_day
    if overnight == 0.0:
        clock = np.concatenate([[0.0], clock])
        t = clock / year
        edge = np.concatenate([[0], k]) % looks_per_day == 0
        return LookGrid(t=t, s=t, clock=clock, is_open=edge, is_close=edge, regular=True)
    night = max(0.0, 1.0 - session_hours / 24.0)
    day = (k - 1) // looks_per_day
    part = (k - day * looks_per_day) / looks_per_day
    rows = []
    for share in (night, overnight):
        rows.append((day + share + (1.0 - share) * part, np.unique(day) + share))
    opens = np.unique(day).astype(np.float64)
    order = np.argsort(np.concatenate([rows[1][0], rows[1][1]]), kind="stable")
    t, s = (np.concatenate([[0.0], np.concatenate(pair)[order]]) / year for pair in rows)
    clock = np.concatenate([[0.0], np.concatenate([clock, opens])[order]])
    is_open = np.concatenate([[False], np.concatenate([np.zeros(steps, bool), np.ones(len(opens), bool)])[order]])
    is_close = np.concatenate([[True], np.concatenate([k % looks_per_day == 0, np.zeros(len(opens), bool)])[order]])
    return LookGrid(t=t, s=s, clock=clock, is_open=is_open, is_close=is_close, regular=True)


def horizon_grid(*, years: float, looks: int, day_count: DayCount) -> LookGrid:
    """`looks` equal steps over `years`; every look that falls on a whole trading day is a close (and an open)."""
    t = years * np.arange(looks + 1) / looks
    clock = t * DAYS_PER_YEAR[day_count]
    edge = np.abs(clock - np.round(clock)) < 1e-9 * np.maximum(1.0, clock)
    return LookGrid(t=t, s=t, clock=clock, is_open=edge, is_close=edge, regular=True)
