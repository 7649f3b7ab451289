"""Charts of what a schedule costs against the risk it leaves."""

import math
from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from hedgesim.market import Floats
from hedgesim.report import style
from hedgesim.report.figures import centred, legend_below, name_ticks, ticks_depth
from hedgesim.report.sheet import text_width
from hedgesim.report.view import View
from hedgesim.study.money import money, money_with_error


def objective_title(view: View) -> str:
    """The finding of the objective chart."""
    k = view.best
    risk = f"{view.risk[k]:.3g}" if view.risk_name == "variance" else money(view.risk[k])
    return (
        f"{style.start(view.names[k])}: {view.cost_name} {money(view.cost[k])} + {view.cost_of_risk:g} x "
        f"{view.risk_name} {risk} = {money(view.objective[k])}"
    )


def objective_bars(axes: Axes, view: View, rows: Sequence[int], *, currency: str, width_mm: float) -> None:
    """What each schedule is judged by: its cost and the charge for its risk, stacked, with the error of the sum."""
    x = np.arange(len(rows))
    cost, charge = view.cost[list(rows)], view.cost_of_risk * view.risk[list(rows)]
    below = np.where(cost > 0, cost, 0.0)
    axes.bar(x, cost, 0.6, color=style.COMPONENT["costs"])
    axes.bar(x, charge, 0.6, bottom=below, color=[view.colours[r] for r in rows])
    sums = view.objective[list(rows)]
    axes.errorbar(
        x, sums, yerr=np.nan_to_num(view.objective_se[list(rows)]), fmt="_", ms=9, color=style.INK, elinewidth=0.9
    )
    axes.axhline(0, color=style.QUIET, lw=0.7)
    axes.set_xlim(*centred(len(rows)))
    top = float(np.nanmax(np.maximum(sums, below + charge)))
    axes.set_ylim(min(0.0, 1.08 * float(np.nanmin(np.minimum(cost, sums)))), 1.12 * top if top > 0 else None)
    style.money_axis(axes.yaxis, np.append(sums, below + charge), ticks=4)
    axes.set_ylabel(f"objective, {currency}")
    name_ticks(axes, view, rows, width_mm)
    handles: list[Line2D | Patch] = [
        Patch(color=style.COMPONENT["costs"], label=view.cost_name),
        Patch(color=view.colours[view.best], label="charge for risk (shade: frequency)"),
        Line2D([], [], color=style.INK, marker="_", ls="none", ms=9, label="objective \u00b1 1 se"),
    ]
    legend_below(axes, handles, columns=3, drop=ticks_depth(view, rows, width_mm) + 3.5)


def cost_risk_title(view: View, currency: str) -> str:
    """The finding of the cost and risk chart."""
    k, ties = view.best, sum(view.tied) - int(view.tied[view.best])
    more = f"; {ties} tied with it" if ties else ""
    cost = money_with_error(view.cost[k], view.cost_se[k], currency=currency)
    if view.risk_name == "variance":
        return f"{style.start(view.names[k])}: {view.cost_name} {cost}, variance {view.risk[k]:.3g}{more}"
    risk = money_with_error(view.risk[k], view.risk_se[k], currency=currency)
    return f"{style.start(view.names[k])}: {view.cost_name} {cost}, {view.risk_name} {risk}{more}"


def cost_risk(axes: Axes, view: View, *, currency: str) -> None:
    """Mean cost against risk with errors; the efficient schedules joined, the chosen and the tied ones ringed."""
    x, y = view.risk, view.cost
    ok = np.isfinite(x) & np.isfinite(y)
    axes.set_xlabel(f"risk: {view.risk_name} of P&L, {currency}" + ("\u00b2" if view.risk_name == "variance" else ""))
    axes.set_ylabel(f"{view.cost_name}, {currency}")
    if not ok.any():
        axes.text(
            0.5,
            0.5,
            "risk needs more than one outcome",
            transform=axes.transAxes,
            ha="center",
            va="center",
            gid="annotation",
        )
        axes.set_xticks([])
        axes.set_yticks([])
        return
    ex, ey = np.nan_to_num(view.risk_se), np.nan_to_num(view.cost_se)
    joined = [int(k) for k in np.argsort(x) if ok[k] and view.efficient[k]]
    axes.plot(x[joined], y[joined], color=style.QUIET, lw=1.0, zorder=2)
    for k in np.flatnonzero(ok):
        axes.errorbar(
            x[k],
            y[k],
            xerr=ex[k],
            yerr=ey[k],
            fmt="o",
            ms=5.5,
            color=view.colours[k],
            elinewidth=1.0,
            zorder=3,
            mfc=view.colours[k] if view.efficient[k] else style.PAPER,
            mec=view.colours[k],
            mew=1.3,
        )
        if k == view.best:
            axes.plot(x[k], y[k], "o", ms=12, mfc="none", mec=style.CHOSEN, mew=1.8, zorder=4)
        elif view.tied[k]:
            axes.plot(x[k], y[k], "o", ms=11, mfc="none", mec=style.CHOSEN, mew=1.2, ls="none", zorder=4, alpha=0.55)
    _pad(axes, x[ok], y[ok], ex[ok], ey[ok])
    b = view.best
    if math.isfinite(view.cost_of_risk) and ok[b]:
        span = np.array(axes.get_xlim())
        axes.plot(
            span,
            y[b] - view.cost_of_risk * (span - x[b]),
            color=style.CHOSEN,
            lw=0.9,
            ls=(0, (1, 2)),
            zorder=1,
            scalex=False,
            scaley=False,
        )
    style.money_axis(axes.xaxis, x[ok], ticks=5)
    style.money_axis(axes.yaxis, y[ok])
    axes.grid(color=style.HAIR, lw=0.4)
    label_points(
        axes,
        x,
        y,
        sorted((int(k) for k in np.flatnonzero(ok)), key=lambda k: (k != b, not view.tied[k], not view.efficient[k])),
        view.names,
        joined,
    )
    handles = [
        Line2D([], [], color=style.QUIET, marker="o", lw=1.0, label="efficient (\u00b1 1 se)"),
        Line2D(
            [],
            [],
            color=style.QUIET,
            marker="o",
            mfc=style.PAPER,
            ls="none",
            mew=1.3,
            label="another costs less at less risk",
        ),
        Line2D([], [], color=style.CHOSEN, marker="o", mfc="none", ms=10, mew=1.8, ls="none", label="chosen"),
        Line2D([], [], color=style.CHOSEN, marker="o", mfc="none", ms=9, mew=1.2, ls="none", alpha=0.55, label="tied"),
        Line2D([], [], color=style.CHOSEN, lw=0.9, ls=(0, (1, 2)), label="same objective as the chosen"),
    ]
    legend_below(axes, handles, columns=3)


def _pad(axes: Axes, x: Floats, y: Floats, ex: Floats, ey: Floats) -> None:
    for low, high, setter in (
        (float((x - ex).min()), float((x + ex).max()), axes.set_xlim),
        (float((y - ey).min()), float((y + ey).max()), axes.set_ylim),
    ):
        room = 0.09 * (high - low) if high > low else 0.1 * abs(high) or 1.0
        setter(low - room, high + room)


def label_points(
    axes: Axes, x: Floats, y: Floats, order: Sequence[int], names: Sequence[str], line: Sequence[int]
) -> None:
    """Write names beside points and off the line through `line`; a name that finds no free place is left out."""
    figure = axes.figure
    pixel = figure.dpi / 72
    frame = axes.get_window_extent()
    at = {k: axes.transData.transform((x[k], y[k])) for k in order}
    taken = [(p[0] - 4 * pixel, p[1] - 4 * pixel, p[0] + 4 * pixel, p[1] + 4 * pixel) for p in at.values()]
    for a, b in pairwise(line):
        for step in np.linspace(0.0, 1.0, 2 + int(np.hypot(*(at[b] - at[a])) / (5 * pixel))):
            p = at[a] + step * (at[b] - at[a])
            taken.append((p[0] - pixel, p[1] - pixel, p[0] + pixel, p[1] + pixel))
    for k in order:
        w = text_width(names[k], style.CHART) / 25.4 * figure.dpi + 3 * pixel
        h = style.CHART * 1.3 * pixel
        for dx, dy in (
            (8, 8),
            (8, -8),
            (-8, 8),
            (-8, -8),
            (9, 0),
            (-9, 0),
            (0, 11),
            (0, -11),
            (18, 16),
            (-18, -16),
            (18, -18),
            (-18, 18),
        ):
            left = at[k][0] + dx * pixel - (0 if dx > 0 else w if dx < 0 else w / 2)
            bottom = at[k][1] + dy * pixel - h / 2
            box = (left, bottom, left + w, bottom + h)
            if box[0] < frame.x0 or box[2] > frame.x1 or box[1] < frame.y0 or box[3] > frame.y1:
                continue
            if any(box[0] < t[2] and t[0] < box[2] and box[1] < t[3] and t[1] < box[3] for t in taken):
                continue
            taken.append(box)
            axes.annotate(
                names[k],
                (x[k], y[k]),
                (dx, dy),
                textcoords="offset points",
                ha="left" if dx > 0 else "right" if dx < 0 else "center",
                va="center",
                fontsize=style.CHART,
                gid="annotation",
            )
            break
