"""The premiums at which a hedged book breaks even."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from hedgesim.book import Book, exposure, premium_received
from hedgesim.market import Floats, Market
from hedgesim.study.settings import Settings

# A book whose net vega is a smaller share of its gross vega has no meaningful vol to be sold at.
_LEAST_NET_VEGA = 0.1
_LARGEST_SHIFT = 2.0


@dataclass(frozen=True)
class BreakEven:
    """At which premiums a schedule earns nothing on average, costs included.

    Only premiums that are taken at the mark move; hedges and marks stay as they are, so that the spread of the P&L
    does too.

    Attributes
    ----------
    schedule : name
    vol_shift : parallel shift of the mark vols, a fraction (0.01 is one vol point), at which those premiums must be
        sold or bought for a mean total of zero; nan where there is none, see `note`
    sold_vol : mean of the mark vols so shifted, each weighted with its absolute vega, nan likewise
    amount : minus the exact mean total: currency that the premiums lack, negative where they leave something
    cushion : the same shift, from the mark, for mean / std = cost_of_risk; nan likewise and where the risk is not std
    cushion_amount : currency that the premiums lack for it; nan where the risk is not std
    note : why something is missing or in currency only, else empty
    """

    schedule: str
    vol_shift: float
    sold_vol: float
    amount: float
    cushion: float
    cushion_amount: float
    note: str


def break_even(
    *, market: Market, book: Book, names: tuple[str, ...], mean: Floats, std: Floats, settings: Settings
) -> tuple[BreakEven, ...]:
    """Premiums at which each schedule earns nothing on average.

    Parameters
    ----------
    market, book : the experiment
    names : of the schedules
    mean, std : of the total P&L, by schedule
    settings : `cost_of_risk` sets the target of the cushion

    Notes
    -----
    A premium is certain and paid at the inception: with premiums at mark + shift the mean total is the exact mean plus
    what they bring more, a closed form, and the spread stays. The shift is the one nearest to zero.
    """
    free = np.isnan(book.premium)
    vega = np.where(free, exposure(book, market).vega, 0.0)
    net, gross = float(vega.sum()), float(np.abs(vega).sum())
    note = ""
    if not free.any():
        note = "in currency only: every premium is given"
    elif abs(net) < _LEAST_NET_VEGA * gross or gross == 0.0:
        note = "in currency only: net vega is under a tenth of gross vega"
    start = premium_received(book, market)
    mark = float((np.abs(vega) * book.mark_vol).sum() / gross) if gross > 0.0 else float("nan")

    def extra(shift: float) -> float:
        value = exposure(book, market, vol=np.where(free, book.mark_vol + shift, book.mark_vol)).value
        return float((-value - start)[free].sum())

    lowest = -float(book.mark_vol[free].min(initial=np.inf))
    std_risk = settings.risk == "std"
    rows = []
    for name, earned, risk in zip(names, mean.tolist(), std.tolist(), strict=True):
        asked = settings.cost_of_risk * risk - earned if std_risk else float("nan")
        shift, cushion, why = float("nan"), float("nan"), [note] * bool(note)
        if not note:
            shift = _shift(extra, -earned, lowest)
            cushion = _shift(extra, asked, lowest) if std_risk else cushion
            if np.isnan(shift) or (std_risk and np.isnan(cushion)):
                why.append("in currency only: no shift of the mark vols brings what is missing")
        if not std_risk:
            why.append("no cushion: the risk is not the standard deviation")
        rows.append(BreakEven(name, shift, mark + shift, -earned, cushion, asked, "; ".join(why)))
    return tuple(rows)


def _shift(extra: Callable[[float], float], need: float, lowest: float) -> float:
    """Root of `extra(shift) - need` nearest to zero within the vols there can be, nan without one."""
    from scipy.optimize import brentq

    def excess(shift: float) -> float:
        return extra(shift) - need

    if need == 0.0:
        return 0.0
    reach = 1e-3
    while reach < 2.0 * _LARGEST_SHIFT:
        for end in (max(-reach, 0.999 * lowest), min(reach, _LARGEST_SHIFT)):
            if excess(end) * -need <= 0.0:
                return float(brentq(excess, 0.0, end, xtol=1e-15, rtol=8.9e-16))
        reach *= 1.5
    return float("nan")
