"""Charts of variance and covariance shares; each draws into axes, its title names the finding."""

import math
from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from hedgesim.market import Floats, Ints
from hedgesim.report import style
from hedgesim.report.sheet import HEIGHT_MM, text_width
from hedgesim.report.view import View
from hedgesim.study.money import money, percent

_MOST_NAMES = 14


def legend_below(axes: Axes, handles: Sequence[Line2D | Patch], *, columns: int, drop: float = 12.5) -> None:
    """A legend `drop` millimetres under the frame."""
    axes.legend(
        handles=list(handles),
        loc="upper center",
        bbox_to_anchor=(0.5, -drop / (axes.get_position().height * HEIGHT_MM)),
        ncols=columns,
        columnspacing=1.4,
        borderaxespad=0.0,
    )


def name_rows(axes: Axes, view: View, rows: Sequence[int], places: Floats | Ints) -> None:
    """Schedule names at the left of rows, the chosen one in bold."""
    axes.set_yticks(places, [style.clipped(view.names[r]) for r in rows])
    for label, r in zip(axes.get_yticklabels(), rows, strict=True):
        label.set_fontweight("bold" if r == view.best else "normal")


def name_ticks(axes: Axes, view: View, rows: Sequence[int], width_mm: float) -> None:
    """Schedule names under bars at 0..len(rows)-1, upright where there is no room."""
    per, _, upright = _tick_room(view, rows, width_mm)
    step = max(1, math.ceil(4.6 / per)) if upright else 1
    shown = list(range(0, len(rows), step))
    if view.best in rows:
        # The chosen schedule keeps its name; a neighbour too close to it gives way.
        place = list(rows).index(view.best)
        shown = sorted({k for k in shown if abs(k - place) >= step} | {place})
    axes.set_xticks(shown, [style.clipped(view.names[rows[k]]) for k in shown], rotation=90 if upright else 0)
    for label, k in zip(axes.get_xticklabels(), shown, strict=True):
        label.set_fontweight("bold" if rows[k] == view.best else "normal")


def ticks_depth(view: View, rows: Sequence[int], width_mm: float) -> float:
    """Millimetres that `name_ticks` takes under the frame."""
    _, widest, upright = _tick_room(view, rows, width_mm)
    return 2.0 + (widest if upright else 3.5)


def _tick_room(view: View, rows: Sequence[int], width_mm: float) -> tuple[float, float, bool]:
    per = width_mm / max(len(rows), 4)
    widest = max(text_width(style.clipped(view.names[r]), style.CHART, True) for r in rows)
    return per, widest, widest > per - 1.5


def centred(count: int) -> tuple[float, float]:
    """Limits of an axis of `count` bars; few bars stay slim and in the middle."""
    half = max(count, 4) / 2 + 0.2
    return (count - 1) / 2 - half, (count - 1) / 2 + half


def stack_title(view: View) -> str:
    """The finding of the variance chart."""
    best = view.best
    name = view.names[best]
    if math.isfinite(view.reference_gross):
        shown = best if view.gross[best] > 1.005 * view.reference_gross else 0
        ratio = view.gross[shown] / view.reference_gross if view.reference_gross > 0 else math.nan
        return f"Variance before costs under {view.names[shown]} is {ratio:.2f} times that of trading at every look"
    part = style.share_with_error(view.share[best], view.share_se[best])
    if len(view.names) == 1 or best == 0:
        return f"Under {name} trading more would remove {part} of the variance before costs"
    return (
        f"Removable part of variance before costs: {part} under {name}, {percent(view.share[0])} under {view.names[0]}"
    )


def variance_stack(axes: Axes, view: View, *, currency: str, width_mm: float) -> None:
    """Stacked bars of the floor, removable and cost parts of the variance; negative parts hang below zero.

    Where rare schedules dwarf the others, these are drawn again, enlarged, in the room above them.
    """
    rows = view.pick(40)
    replayed = math.isfinite(view.reference_gross)
    labels = {
        "reference": "gross, trading at every look",
        "floor": "floor: no schedule removes it",
        "removable": "gross beyond every look" if replayed else "removable by trading more",
        "costs": "costs and their covariance with gross",
    }
    del labels["floor" if replayed else "reference"]
    ends = _stacked_bars(axes, view, rows)
    written = _write_stds(axes, view, rows, ends, width_mm)
    scale, letter = style.unit_of(np.sqrt(np.array([axes.get_ylim()[1]])))
    style.plain_axis(axes.yaxis, scale**2)
    axes.set_ylabel(f"variance of P&L, ({currency} {letter})\u00b2".replace(" )", ")"))
    axes.set_xlabel("schedule, rare to frequent" + ("; above the bars: std of P&L" if written else ""))
    name_ticks(axes, view, rows, width_mm)
    handles: list[Line2D | Patch] = [Patch(color=style.COMPONENT[key], label=label) for key, label in labels.items()]
    handles.append(
        Line2D([], [], color=style.INK, marker="_", ls="none", ms=9, mew=1.6, label="variance of P&L \u00b1 1 se")
    )
    legend_below(axes, handles, columns=2, drop=ticks_depth(view, rows, width_mm) + 8.0)
    _enlarge(axes, view, rows, ends, width_mm)


def _stacked_bars(axes: Axes, view: View, rows: Sequence[int]) -> Floats:
    """Draw the parts and set the limits; the upper end of each bar with its error comes back."""
    rows = list(rows)
    if math.isfinite(view.reference_gross):
        parts = [("reference", np.full(len(rows), view.reference_gross))]
    else:
        parts = [("floor", view.floor[rows])]
    parts += [("removable", view.removable[rows]), ("costs", view.total[rows] - view.gross[rows])]
    x, total = np.arange(len(rows)), view.total[rows]
    up, down = np.zeros(len(rows)), np.zeros(len(rows))
    for key, known in parts:
        values = np.nan_to_num(known)
        bottom = np.where(values >= 0, up, down)
        axes.bar(x, values, 0.62, bottom=bottom, color=style.COMPONENT[key], edgecolor=style.PAPER, linewidth=0.4)
        up, down = up + np.clip(values, 0, None), down + np.clip(values, None, 0)
    error = np.nan_to_num(view.total_se[rows])
    size = 150 if len(rows) < 20 else 40
    axes.scatter(x, total, marker="_", s=size, color=style.INK, zorder=4, linewidths=1.6)
    axes.errorbar(x, total, yerr=error, fmt="none", ecolor=style.INK, elinewidth=0.9, zorder=4)
    axes.axhline(0, color=style.QUIET, lw=0.7)
    ends = np.maximum(up, np.nan_to_num(total) + error)
    top, low = float(ends.max()) or 1.0, 1.08 * float(down.min())
    axes.set_ylim(low, low + (top - low) * 1.12)
    axes.set_xlim(*centred(len(rows)))
    return ends


def _write_stds(axes: Axes, view: View, rows: Sequence[int], ends: Floats, width_mm: float) -> bool:
    """Standard deviations above the bars, where all of them have room."""
    widest = max(text_width(money(view.std[r]), style.CHART) for r in rows)
    if len(rows) > _MOST_NAMES or widest > width_mm / max(len(rows), 4) - 1:
        return False
    for k, r in enumerate(rows):
        axes.annotate(
            money(view.std[r]),
            (k, ends[k]),
            (0, 4),
            textcoords="offset points",
            ha="center",
            fontsize=style.CHART,
            gid="annotation",
        )
    return True


def _enlarge(axes: Axes, view: View, rows: Sequence[int], ends: Floats, width_mm: float) -> None:
    """The last bars again on their own scale, when they are so low that nothing of them shows."""
    n, height = len(rows), axes.get_ylim()[1]
    first = next((k for k in range(1, n) if ends[k:].max() < 0.25 * height), n)
    small = list(rows[first:])
    if len(small) < 2 or n > _MOST_NAMES or axes.get_ylim()[0] < -0.02 * height:
        return
    left = (first - 0.5 - axes.get_xlim()[0]) / (axes.get_xlim()[1] - axes.get_xlim()[0])
    left = max(left, 0.2) + 0.13
    inset = axes.inset_axes((left, 0.47, 1.0 - left, 0.46))
    _stacked_bars(inset, view, small)
    inset.set_xlim(-0.6, len(small) - 0.4)
    scale, _ = style.unit_of(np.sqrt(np.array([axes.get_ylim()[1]])))
    style.plain_axis(inset.yaxis, scale**2, ticks=4)
    if _tick_room(view, small, width_mm * (1.0 - left) * len(small) / max(len(small), 4))[2]:
        inset.set_xticks(range(len(small)), [""] * len(small))
    else:
        name_ticks(inset, view, small, width_mm * (1.0 - left))
    inset.set_title(f"the last {len(small)}, enlarged", fontsize=style.CHART, color=style.QUIET, loc="right", pad=5)


def shares_title(view: View) -> str:
    """The finding of the covariance chart: the largest component under the chosen schedule."""
    best, rows = view.best, view.book_shares
    if not view.varied:
        top = max(rows, key=lambda s: abs(s.mean[best]))
        size = money(top.mean[best])
        return f"One inception: {style.words(top.component)} is the largest part under {view.names[best]}, {size}"
    top = max(rows, key=lambda s: abs(np.nan_to_num(s.share[best])))
    part = percent(top.share[best])
    return f"{style.start(style.words(top.component))} carries {part} of the variance of P&L under {view.names[best]}"


def most_rows(axes: Axes) -> int:
    """How many named rows these axes have room for."""
    return max(int(axes.get_position().height * HEIGHT_MM / 4.2), 4)


def covariance_shares(axes: Axes, view: View, *, currency: str) -> None:
    """A diverging bar by schedule: Cov(component, total) / Var(total); bars to the left are negative.

    Where there is one outcome only, the amounts of the components instead.
    """
    rows = view.pick(most_rows(axes))
    parts = [(s.component, np.nan_to_num((s.share if view.varied else s.mean)[rows])) for s in view.book_shares]
    largest = max((float(np.abs(values).max()) for _, values in parts), default=0.0)
    parts = [(name, values) for name, values in parts if np.abs(values).max() > 5e-4 * largest]
    y = np.arange(len(rows))[::-1]
    right, left = np.zeros(len(rows)), np.zeros(len(rows))
    for name, values in parts:
        start = np.where(values >= 0, right, left)
        colour = style.component_colour(name)
        axes.barh(y, values, 0.66, left=start, color=colour, edgecolor=style.PAPER, linewidth=0.4)
        right, left = right + np.clip(values, 0, None), left + np.clip(values, None, 0)
    axes.axvline(0, color=style.INK, lw=0.9)
    low, high = float(min(left.min(), 0.0)), float(max(right.max(), 1.0 if view.varied else 0.0))
    axes.set_xlim(low - 0.03 * (high - low), high + 0.04 * (high - low))
    axes.set_ylim(*centred(len(rows)))
    name_rows(axes, view, rows, y)
    if view.varied:
        axes.axvline(1, color=style.QUIET, lw=0.8, ls=(0, (2, 2)))
        style.percent_axis(axes.xaxis)
        axes.set_xlabel("Cov(component, P&L) / Var(P&L): parts add to 100 %, may be negative or exceed it")
    else:
        style.money_axis(axes.xaxis, np.array([low, high]))
        axes.set_xlabel(f"P&L by component, {currency}")
    handles = [Patch(color=style.component_colour(name), label=style.words(name)) for name, _ in parts]
    if handles:
        legend_below(axes, handles, columns=min(5, len(handles)))
