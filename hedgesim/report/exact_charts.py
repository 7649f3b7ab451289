"""Charts of what needs no random numbers: the curve over the number of trades, and break-even premiums."""

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from hedgesim.market import Floats
from hedgesim.report import style
from hedgesim.report.figures import centred, legend_below, name_rows
from hedgesim.report.view import View
from hedgesim.study.exactness import BreakEven, Curve
from hedgesim.study.money import money

# Objectives this close to the smallest are as good, for a desk.
_AS_GOOD = 0.01
_OPTIMUM: dict[str, Any] = {"color": style.INK, "marker": "D", "mfc": "none", "ms": 9, "mew": 1.3, "ls": "none"}
_LAW: dict[str, Any] = {"color": style.COMPONENT["costs"], "lw": 1.1, "ls": (0, (5, 2))}


def _with_optimum(view: View) -> Curve | None:
    """The curve, where it has an optimum."""
    curve = None if view.exact is None else view.exact.curve
    return curve if curve is not None and curve.best >= 0 else None


def optimum_title(view: View, currency: str) -> str:
    """The finding of the exact curve: where its optimum lies, how flat it is, or how far risk falls."""
    curve = _with_optimum(view)
    if curve is None:
        told = None if view.exact is None else view.exact.curve
        if told is None:
            return "No exact curve"
        ends = [money(float(told.std[k]), currency=currency) for k in (0, -1)]
        return f"Standard deviation falls from {ends[0]} at N = {told.trades[0]} to {ends[1]} at N = {told.trades[-1]}"
    least, n = float(curve.objective[curve.best]), int(curve.trades[curve.best])
    title = f"N = {n:,} is best, objective {money(least, currency=currency)}"
    low, high = _flat(curve)
    if least > 0.0 and low < high:
        title += f"; from N = {low:,} to {high:,} it is within 1 %"
    return title


def _flat(curve: Curve) -> tuple[int, int]:
    """Fewest and most trades around the optimum whose objective is as good."""
    good = curve.objective <= curve.objective[curve.best] * (1.0 + _AS_GOOD)
    low = high = curve.best
    while low > 0 and good[low - 1]:
        low -= 1
    while high < len(good) - 1 and good[high + 1]:
        high += 1
    return int(curve.trades[low]), int(curve.trades[high])


def objective_curve(axes: Axes, view: View, *, currency: str) -> None:
    """Objective against N: the exact curve with its optimum, the schedules as simulated.

    Where the risk has no exact figure, the standard deviation takes the place of the objective.
    """
    curve = None if view.exact is None else view.exact.curve
    known = _with_optimum(view)
    values, seen, error = (
        (curve.std if curve is not None else np.empty(0), view.std, view.std_se)
        if known is None
        else (known.objective, view.objective, view.objective_se)
    )
    axes.set_ylabel(f"{'standard deviation' if known is None else 'objective'}, {currency}")
    handles = _over_trades(axes, view, values, seen, error)
    if known is not None:
        axes.plot(known.trades[known.best], known.objective[known.best], zorder=5, **_OPTIMUM)
        handles.insert(1, Line2D([], [], label="its optimum", **_OPTIMUM))
    legend_below(axes, handles, columns=len(handles), drop=11.0)


def cost_title(view: View) -> str:
    """The finding of the cost chart: how far off the law is for the chosen schedule."""
    off = math.nan if view.exact is None or view.cost_name != "mean cost" else _cost_law_off(view)
    if not math.isfinite(off):
        return f"{style.start(view.cost_name)} against the number of hedge intervals"
    way = "above" if off >= 1.0 else "below"
    return f"The leading-order cost is {100 * abs(off - 1.0):.1f} % {way} the mean cost of {view.names[view.best]}"


def _cost_law_off(view: View) -> float:
    told = view.exact
    names = [law.name for law in told.laws if law.quantity == "cost"] if told is not None else []
    return told.off[names[0]] if told is not None and names else math.nan


def cost_curve(axes: Axes, view: View, *, currency: str) -> None:
    """Mean cost against N: exact, simulated, and the law of leading order where costs are what is counted."""
    told = view.exact
    curve = None if told is None else told.curve
    axes.set_ylabel(f"{view.cost_name}, {currency}")
    handles = _over_trades(axes, view, np.empty(0) if curve is None else curve.mean_cost, view.cost, view.cost_se)
    if told is not None and view.cost_name == "mean cost":
        grid = np.geomspace(*axes.get_xlim(), 60)
        for name, values in told.lines("cost", grid):
            axes.plot(grid, values, zorder=2, scaley=False, scalex=False, **_LAW)
            handles.append(Line2D([], [], label=name, **_LAW))
    legend_below(axes, handles, columns=len(handles), drop=11.0)


def _over_trades(axes: Axes, view: View, values: Floats, seen: Floats, error: Floats) -> list[Line2D]:
    """The curve of the exact view and the schedules as points, N on a log axis; handles for the legend come back."""
    curve = None if view.exact is None else view.exact.curve
    n = view.intervals
    ok = np.isfinite(n) & (n > 0) & np.isfinite(seen)
    trades = n[ok] if curve is None else np.concatenate([n[ok], curve.trades.astype(np.float64)])
    axes.set_xscale("log")
    axes.set_xlabel("hedge intervals over the life, N")
    handles = []
    if curve is not None:
        axes.plot(curve.trades, values, color=style.ACCENT, lw=1.0, zorder=2)
        handles.append(Line2D([], [], color=style.ACCENT, lw=1.0, label="exact"))
    se = np.nan_to_num(error)
    for k in np.flatnonzero(ok):
        axes.errorbar(
            n[k],
            seen[k],
            yerr=se[k],
            fmt="o",
            ms=7 if k == view.best and view.varied else 5,
            color=view.colours[k],
            mfc=view.colours[k] if view.equal[k] else style.PAPER,
            mec=style.CHOSEN if k == view.best and view.varied else view.colours[k],
            mew=1.5,
            elinewidth=1.0,
            capsize=2,
            zorder=3,
        )
    if ok.any():
        label = "simulated \u00b1 1 se"
        handles.append(Line2D([], [], color=style.QUIET, marker="o", ls="none", ms=5, label=label))
    if len(trades):
        low_n, high_n = float(trades.min()) / 1.4, float(trades.max()) * 1.4
        axes.set_xlim(low_n, high_n)
        style.log_axis(axes.xaxis, low_n, high_n)
        shown = np.concatenate([seen[ok] - se[ok], seen[ok] + se[ok], values])
        low, high = float(shown.min()), float(shown.max())
        room = 0.07 * (high - low) if high > low else 0.1 * abs(high) or 1.0
        axes.set_ylim(low - room, high + room)
        style.money_axis(axes.yaxis, shown, ticks=5)
    axes.grid(color=style.HAIR, lw=0.4)
    return handles


def uneven(view: View) -> bool:
    """Whether a schedule that stands on the charts has unequal intervals."""
    return any(math.isfinite(n) and not even for n, even in zip(view.intervals, view.equal, strict=True))


def in_vol(rows: Sequence[BreakEven]) -> bool:
    """Whether any schedule has a vol at which it breaks even."""
    return any(math.isfinite(row.vol_shift) for row in rows)


def break_even_chart(axes: Axes, view: View, rows: Sequence[int], *, currency: str) -> None:
    """The premiums at which schedules earn nothing, and those that pay for their risk, against the mark.

    In vol points where the book can be put in vol, in currency otherwise.
    """
    told = () if view.exact is None else tuple(view.exact.break_even[r] for r in rows)
    vols = in_vol(told)
    nothing = np.array([100 * row.vol_shift if vols else row.amount for row in told])
    cushion = np.array([100 * row.cushion if vols else row.cushion_amount for row in told])
    y = np.arange(len(rows))[::-1]
    axes.axvline(0.0, color=style.INK, lw=0.9)
    for k, r in enumerate(rows):
        axes.plot([nothing[k], cushion[k]], [y[k], y[k]], color=view.colours[r], lw=2.2, zorder=2)
    colours = [view.colours[r] for r in rows]
    axes.scatter(nothing, y, s=34, color=colours, zorder=3)
    axes.scatter(cushion, y, s=34, marker="D", facecolor=style.PAPER, edgecolor=colours, linewidths=1.4, zorder=3)
    axes.set_ylim(*centred(len(rows)))
    name_rows(axes, view, rows, y)
    ends = np.concatenate([nothing, cushion, [0.0]])
    low, high = float(np.nanmin(ends)), float(np.nanmax(ends))
    room = 0.06 * (high - low) or 1.0
    axes.set_xlim(low - room, high + room)
    if vols:
        style.plain_axis(axes.xaxis, 1.0)
        axes.set_xlabel("vol points from the mark")
    else:
        style.money_axis(axes.xaxis, ends)
        axes.set_xlabel(f"more premium needed than is taken, {currency}")
    axes.grid(axis="x", color=style.HAIR, lw=0.4)
    handles = [Line2D([], [], color=style.QUIET, marker="o", ls="none", label="mean P&L of zero after costs")]
    if np.isfinite(cushion).any():
        label = f"mean = {view.cost_of_risk:g} x std"
        handles.append(Line2D([], [], color=style.QUIET, marker="D", mfc=style.PAPER, mew=1.4, ls="none", label=label))
    legend_below(axes, handles, columns=2, drop=11.0)
