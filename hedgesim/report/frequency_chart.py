"""The chart of removable variance against the number of hedge intervals: points, fitted law, exact curve and theory."""

import math
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from hedgesim.market import Flags, Floats
from hedgesim.report import style
from hedgesim.report.figures import legend_below
from hedgesim.report.sheet import text_width
from hedgesim.report.view import View

_DASHED, _DOTTED, _DASH_DOT = (0, (5, 2)), (0, (1, 1.6)), (0, (7, 2, 1, 2))
# Beside the exact curve, the points and the fitted law.
_MOST_THEORY = 2


def law_title(view: View) -> str:
    """The finding of the frequency chart."""
    if view.law is None:
        return "No law is fitted to the removable variance"
    power = f"N^-{view.law.exponent:.3f} \u00b1 {view.law.exponent_se:.3f}"
    less = "" if math.isinf(view.law.reference) else ", less its value at every look"
    return f"Removable variance falls like {power} in the hedge intervals N{less}"


def frequency_law(axes: Axes, view: View, *, currency: str) -> None:
    """Removable variance against the number of trades on log axes, with the lines that theory draws beside it."""
    n, y, e = view.intervals, view.removable, np.nan_to_num(view.removable_se)
    usable = np.isfinite(n) & np.isfinite(y) & (n > 0) & (y > 0)
    hidden = int((np.isfinite(n) & np.isfinite(y) & ~usable).sum())
    axes.set_xlabel("hedge intervals over the life, N")
    scale, letter = style.unit_of(np.sqrt(np.abs(y[usable]))) if usable.any() else (1.0, "")
    what = "gross less every-look variance" if math.isfinite(view.reference_gross) else "removable variance"
    axes.set_ylabel(f"{what}, ({currency} {letter})\u00b2".replace(" )", ")"))
    if not usable.any():
        axes.text(
            0.5,
            0.5,
            "no schedule has a positive\nremovable variance",
            transform=axes.transAxes,
            ha="center",
            va="center",
            gid="annotation",
        )
        axes.set_xticks([])
        axes.set_yticks([])
        return
    axes.set_xscale("log")
    axes.set_yscale("log")
    unit = scale**2
    _points(axes, view, usable, e, unit)
    low_n, high_n = float(n[usable].min()) / 1.5, float(n[usable].max()) * 1.5
    low_y = float((y[usable] - np.minimum(e[usable], 0.9 * y[usable])).min()) / unit / 1.6
    high_y = float((y[usable] + e[usable]).max()) / unit * 1.6
    told = view.exact
    if told is not None and told.curve is not None:
        ahead = told.curve.removable > 0.0
        if ahead.any():
            trades, exact = told.curve.trades[ahead], told.curve.removable[ahead] / unit
            low_n, high_n = min(low_n, trades[0] / 1.5), max(high_n, trades[-1] * 1.5)
            low_y, high_y = min(low_y, float(exact.min()) / 1.6), max(high_y, float(exact.max()) * 1.6)
    grid = np.geomspace(low_n, high_n, 60)
    lines = _lines(view, grid, unit)
    for x, values, label, look in lines:
        axes.plot(x, values, label=label, zorder=2, **look)
    drawn = [Line2D([], [], label=label, **look) for _, _, label, look in lines]
    axes.set_xlim(low_n, high_n)
    axes.set_ylim(low_y, high_y)
    style.log_axis(axes.xaxis, low_n, high_n)
    style.log_axis(axes.yaxis, low_y, high_y)
    axes.grid(color=style.HAIR, lw=0.4)
    if told is None:
        handles = [*drawn, *_marker_handles(view, usable)]
    else:
        some_open = not all(view.fitted[k] for k in np.flatnonzero(usable))
        seen = _marker(mfc=style.QUIET, label="simulated \u00b1 1 se" + ("; open: not in the fit" if some_open else ""))
        first = [line for line in drawn if line.get_label() == "exact, without noise"]
        handles = [*first, seen, *(line for line in drawn if line not in first)]
        if usable[view.best]:
            _name_chosen(axes, view, unit)
    legend_below(axes, handles, columns=2)
    if hidden:
        axes.annotate(
            f"{hidden} schedule{'s' if hidden > 1 else ''} at or below zero not shown",
            (0.985, 0.97),
            xycoords="axes fraction",
            ha="right",
            va="top",
            fontsize=style.CHART,
            color=style.QUIET,
            gid="annotation",
        )


def theory_note(view: View) -> str:
    """What the theory lines of the chart are, where they are not what the points are."""
    if view.exact is None or not view.exact.lines("discretisation", np.array([1.0])):
        return ""
    return "Green lines: laws of the discretisation, which is what is removable where the floor does not vary. "


def _points(axes: Axes, view: View, usable: Flags, error: Floats, unit: float) -> None:
    n, y = view.intervals, view.removable
    for k in np.flatnonzero(usable):
        below = min(error[k], y[k] * 0.9)
        axes.errorbar(
            n[k],
            y[k] / unit,
            yerr=[[below / unit], [error[k] / unit]],
            fmt="o",
            ms=8 if k == view.best else 5.5,
            color=view.colours[k],
            mfc=view.colours[k] if view.fitted[k] else style.PAPER,
            mec=style.CHOSEN if k == view.best else view.colours[k],
            mew=1.6,
            elinewidth=1.1,
            capsize=2,
            zorder=3,
        )


def _lines(view: View, grid: Floats, unit: float) -> list[tuple[Floats, Floats, str, dict[str, Any]]]:
    """Places, values, name and look of each line, in the order of the legend."""
    told = view.exact
    lines: list[tuple[Floats, Floats, str, dict[str, Any]]] = []
    if told is not None and told.curve is not None:
        x, values = np.asarray(told.curve.trades, dtype=np.float64), told.curve.removable / unit
        look = {"color": style.ACCENT, "lw": 0.9, "ls": "-"}
        lines.append((x, np.where(values > 0.0, values, np.nan), "exact, without noise", look))
    if view.law is not None:
        known = grid[grid < view.law.reference]
        look = {"color": style.INK, "lw": 1.1, "ls": "-" if told is None else _DASHED}
        lines.append((known, view.law.removable(known) / unit, "fitted law", look))
    theory: list[tuple[Floats, Floats, str, dict[str, Any]]] = []
    if told is not None:
        for (name, curve), dashes in zip(told.lines("discretisation", grid), (_DOTTED, _DASH_DOT), strict=False):
            look = {"color": style.COMPONENT["remainder"], "lw": 1.1, "ls": dashes}
            theory.append((grid, curve / unit, name, look))
    limit = np.isfinite(view.asymptotic) & np.isfinite(view.intervals) & (view.asymptotic > 0)
    if limit.any() and len(theory) < _MOST_THEORY:
        first = int(np.flatnonzero(limit)[0])
        values = view.asymptotic[first] * view.intervals[first] / grid / unit
        look = {"color": style.QUIET, "lw": 1.2 if told is None else 0.9, "ls": _DASHED if told is None else _DASH_DOT}
        name = "asymptotic 1/N (quadratic variation)" if told is None else "1/N limit, simulated"
        theory.append((grid, values, name, look))
    return lines + theory


def _marker(**changes: Any) -> Line2D:
    return Line2D([], [], **{"color": style.QUIET, "marker": "o", "ls": "none", **changes})


def _marker_handles(view: View, usable: Flags) -> list[Line2D]:
    handles = []
    if any(view.fitted):
        handles.append(_marker(mfc=style.QUIET, label="in the fit (\u00b1 1 se)"))
    if not all(view.fitted[k] for k in np.flatnonzero(usable)):
        handles.append(_marker(mfc=style.PAPER, mew=1.6, label="not in the fit"))
    handles.append(_marker(color=style.PAPER, mec=style.CHOSEN, mew=1.6, ms=8, label="chosen"))
    return handles


def _name_chosen(axes: Axes, view: View, unit: float) -> None:
    """The chosen schedule by name, on the side of the falling line that has room."""
    name = f"{style.clipped(view.names[view.best])}, chosen"
    at = (view.intervals[view.best], view.removable[view.best] / unit)
    frame = axes.get_window_extent()
    width = text_width(name, style.CHART) / 25.4 * axes.figure.dpi
    right = axes.transData.transform(at)[0] + width + 12 * axes.figure.dpi / 72 < frame.x1
    axes.annotate(
        name,
        at,
        (8, 7) if right else (-8, -7),
        textcoords="offset points",
        ha="left" if right else "right",
        va="center",
        fontsize=style.CHART,
        color=style.CHOSEN,
        gid="annotation",
    )
