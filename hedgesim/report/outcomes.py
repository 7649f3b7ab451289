"""Charts of outcomes: P&L densities, loss exceedance, rolling P&L over history, and one path explained look by look."""

import math
from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from hedgesim.engine.ledger import Story
from hedgesim.market import Floats
from hedgesim.report import style
from hedgesim.report.facts import OptionMark
from hedgesim.report.figures import legend_below, name_rows
from hedgesim.report.view import View
from hedgesim.study.money import money, money_with_error

MOST_RIDGES = 12
MOST_LINES = 8
_FEW = 40


def ridge_title(view: View, currency: str) -> str:
    """The finding of the distribution chart."""
    b = view.best
    if not math.isfinite(view.std[b]):
        return f"One outcome per schedule: {money(view.mean[b], currency=currency)} under {view.names[b]}"
    p05, p01 = (money(q[b], currency=currency) for q in (view.p05, view.p01))
    return f"Under {view.names[b]} one life in twenty ends below {p05}, one in a hundred below {p01}"


def ridges(axes: Axes, view: View, totals: Floats, *, currency: str) -> None:
    """A density by schedule (dots for a small sample) with its 1 % and 5 % quantiles, mean and expected shortfall."""
    rows = view.pick(MOST_RIDGES)
    sample = [totals[view.rows[r]] for r in rows]
    low = min(float(np.quantile(s, 0.002)) for s in sample)
    high = max(float(np.quantile(s, 0.998)) for s in sample)
    low = min([low, *(-view.es975[r] for r in rows if math.isfinite(view.es975[r]))])
    span = high - low or max(abs(high), 1.0)
    low, high = low - 0.04 * span, high + 0.04 * span
    base = np.arange(len(rows))[::-1].astype(float)
    tallest = 0.0
    curves = []
    for s in sample:
        grid, density = _density(s, low, high)
        curves.append((grid, density))
        tallest = max(tallest, float(density.max()))
    for k, (r, y, (grid, density)) in enumerate(zip(rows, base, curves, strict=True)):
        colour = view.colours[r]
        axes.axhline(y, color=style.HAIR, lw=0.5, zorder=2 * k)
        if 1 < len(sample[k]) < _FEW:
            axes.plot(
                sample[k],
                np.full(len(sample[k]), y + 0.12),
                "o",
                ms=4,
                color=colour,
                alpha=0.75,
                zorder=2 * k + 1,
                mew=0,
            )
        elif len(sample[k]) >= _FEW:
            lifted = y + 0.86 * density / tallest
            axes.fill_between(grid, y, lifted, color=colour, alpha=0.55, lw=0, zorder=2 * k + 1)
            axes.plot(grid, lifted, color=colour, lw=1.5 if r == view.best else 0.9, zorder=2 * k + 1)
        if math.isfinite(view.std[r]):
            axes.plot([view.p01[r], view.p05[r]], [y, y], "|", ms=9, mew=1.5, color=style.COMPONENT["costs"], zorder=60)
            axes.plot(-view.es975[r], y, marker="^", ms=5.5, color=style.INK, zorder=61, mew=0)
        axes.plot(view.mean[r], y, marker="o", ms=3.8, color=style.INK, zorder=61, mew=0)
    axes.set_xlim(low, high)
    axes.set_ylim(-0.35 if len(rows) > 3 else -0.9, max(len(rows), 3) + 0.1)
    name_rows(axes, view, rows, base)
    axes.tick_params(axis="y", length=0)
    axes.spines["left"].set_visible(False)
    style.money_axis(axes.xaxis, np.array([low, high]))
    axes.set_xlabel(f"P&L per life, {currency}, discounted to the start")
    if not view.varied:
        legend_below(axes, [Line2D([], [], color=style.INK, marker="o", ms=4, ls="none", label="outcome")], columns=1)
        return
    handles = [
        Line2D([], [], color=style.INK, marker="o", ms=4, ls="none", label="mean"),
        Line2D([], [], color=style.COMPONENT["costs"], marker="|", ms=9, mew=1.5, ls="none", label="p01 and p05"),
        Line2D([], [], color=style.INK, marker="^", ms=5.5, ls="none", label="minus ES 97.5 %"),
    ]
    legend_below(axes, handles, columns=3)


def _density(sample: Floats, low: float, high: float) -> tuple[Floats, Floats]:
    """Kernel density by a smoothed histogram.

    The width is 0.9 min(sd, IQR / 1.34) n^(-1/5) (Silverman 1986, eq. 3.31, from memory).
    """
    cells = 400
    edges = np.linspace(low, high, cells + 1)
    step = edges[1] - edges[0]
    counts = np.histogram(sample, bins=edges)[0] / (len(sample) * step)
    q25, q75 = np.quantile(sample, [0.25, 0.75])
    spread = min(float(sample.std()), float(q75 - q25) / 1.34) if q75 > q25 else float(sample.std())
    width = min(max(0.9 * spread * len(sample) ** -0.2 / step, 1.0), cells / 8)
    reach = int(4 * width) + 1
    weights = np.exp(-0.5 * (np.arange(-reach, reach + 1) / width) ** 2)
    smooth = np.convolve(counts, weights / weights.sum(), mode="full")[reach:-reach]
    return 0.5 * (edges[1:] + edges[:-1]), smooth


def exceedance_title(view: View, currency: str) -> str:
    """The finding of the tail chart."""
    b = view.best
    if not (view.varied and math.isfinite(view.es975[b])):
        return "Tails need more than one outcome"
    size = money_with_error(abs(view.es975[b]), view.es975_se[b], currency=currency)
    verb = "lose" if view.es975[b] >= 0 else "still earn"
    return f"The worst 2.5 % of lives under {view.names[b]} {verb} {size} on average (ES 97.5 %)"


def exceedance(axes: Axes, view: View, totals: Floats, *, currency: str) -> None:
    """Probability of losing more than an amount, on a log scale; the marks are ES 97.5 %."""
    n = totals.shape[1]
    axes.set_xlabel(f"loss, {currency}")
    axes.set_ylabel("probability of a larger loss")
    if n < 8:
        axes.text(
            0.5,
            0.5,
            f"{n} outcome{'s' if n != 1 else ''}: too few for a tail",
            transform=axes.transAxes,
            ha="center",
            va="center",
            gid="annotation",
        )
        axes.set_xticks([])
        axes.set_yticks([])
        return
    rows = view.pick(MOST_LINES)
    floor = max(1.0 / n, 1e-5)
    left, right = math.inf, -math.inf
    for r in rows:
        losses = np.sort(-totals[view.rows[r]])[::-1]
        rank = np.unique(np.geomspace(1, n, min(n, 260)).astype(int))
        x, p = losses[rank - 1], rank / n
        inside = p <= 0.5
        axes.step(
            x[inside],
            p[inside],
            where="pre",
            color=view.colours[r],
            lw=2.2 if r == view.best else 1.2,
            zorder=3 + int(r == view.best),
        )
        left, right = min(left, float(x[inside].min())), max(right, float(x[inside].max()))
        if math.isfinite(view.es975[r]):
            axes.plot(
                view.es975[r],
                0.025,
                "^",
                ms=6 if r == view.best else 4.5,
                color=view.colours[r],
                mec=style.PAPER,
                mew=0.4,
                zorder=6,
            )
    for p in (0.05, 0.01):
        axes.axhline(p, color=style.HAIR, lw=0.6, zorder=1)
    axes.set_yscale("log")
    room = 0.04 * (right - left) or 1.0
    axes.set_xlim(left - room, right + room)
    axes.set_ylim(floor * 0.8, 0.6)
    style.log_axis(axes.yaxis, floor, 0.5, most=12, name="percent")
    style.money_axis(axes.xaxis, np.array([left, right]), ticks=5)
    handles = [
        Line2D([], [], color=view.colours[r], lw=2.2 if r == view.best else 1.4, label=style.clipped(view.names[r]))
        for r in rows
    ]
    handles.append(Line2D([], [], color=style.QUIET, marker="^", ls="none", ms=5.5, label="ES 97.5 %"))
    legend_below(axes, handles, columns=3)


def rolling_title(view: View, totals: Floats, currency: str) -> str:
    """The finding of the rolling chart."""
    mine = totals[view.rows[view.best]]
    lost = int((mine < 0).sum())
    worst = money(float(mine.min()), currency=currency)
    name = style.start(view.names[view.best])
    return f"{name}: {lost} of {len(mine)} inceptions lose money; the worst ends at {worst}"


def rolling(axes: Axes, view: View, totals: Floats, labels: Sequence[str], *, currency: str) -> None:
    """P&L of each inception in order of time, under the chosen, the rarest and the most frequent schedule."""
    rows = sorted({0, view.best, len(view.names) - 1})
    n = totals.shape[1]
    x = np.arange(n)
    for r in rows:
        axes.plot(
            x,
            totals[view.rows[r]],
            color=view.colours[r],
            lw=1.6 if r == view.best else 0.9,
            marker="o" if n < _FEW else None,
            ms=3.5,
            zorder=4 if r == view.best else 3,
        )
    axes.axhline(0, color=style.QUIET, lw=0.7)
    axes.axhline(view.mean[view.best], color=style.CHOSEN, lw=1.0, ls=(0, (4, 2)))
    axes.set_xlim(-0.5 if n < _FEW else 0, n - 0.5)
    style.money_axis(axes.yaxis, totals[[view.rows[r] for r in rows]])
    ticks = np.unique(np.linspace(0, n - 1, min(n, 8)).round().astype(int))
    axes.set_xticks(ticks, [style.clipped(labels[t]) if len(labels) == n else str(t + 1) for t in ticks])
    axes.set_xlabel("inception" if len(labels) != n else "date of inception")
    axes.set_ylabel(f"P&L per life, {currency}")
    handles = [
        Line2D(
            [],
            [],
            color=view.colours[r],
            lw=1.6,
            label=style.clipped(view.names[r]) + (" (chosen)" if r == view.best else ""),
        )
        for r in rows
    ]
    handles.append(Line2D([], [], color=style.CHOSEN, lw=1.0, ls=(0, (4, 2)), label="mean of the chosen"))
    legend_below(axes, handles, columns=4)


def story_title(story: Story, currency: str) -> str:
    """What one path earned, and its largest component."""
    end = {k: float(v[-1]) for k, v in story.components.items()}
    total = end.pop("total", math.nan)
    largest = max(end, key=lambda k: abs(end[k]), default="")
    verb = "earns" if total >= 0 else "loses"
    tail = f"; the largest part is {style.words(largest)}, {money(end[largest], currency=currency)}" if largest else ""
    return (
        f"{style.start(story.label)}. {style.start(story.schedule)} {verb} {money(abs(total), currency=currency)}{tail}"
    )


def story_price(axes: Axes, story: Story, marks: Sequence[OptionMark], names: Sequence[str], *, currency: str) -> None:
    """Price along the path, with strikes and expiries faint; in per cent of its start for several underlyings."""
    days = story.t
    several = len(names) > 1
    for u, name in enumerate(names):
        start = story.price[u, 0] if several else 1.0
        axes.plot(days, story.price[u] / start, color=UNDERLYING[u % len(UNDERLYING)], lw=1.3, label=name, zorder=3)
    low, high = axes.get_ylim()
    for u in range(len(names)):
        start = story.price[u, 0] if several else 1.0
        for strike in sorted({m.strike for m in marks if m.underlying == u}):
            if low <= strike / start <= high:
                until = max(m.expiry_years for m in marks if m.underlying == u and m.strike == strike)
                axes.plot(
                    [days[0], min(until, days[-1])],
                    [strike / start] * 2,
                    color=UNDERLYING[u % len(UNDERLYING)],
                    lw=0.8,
                    alpha=0.35,
                    zorder=1,
                )
    for expiry in sorted({m.expiry_years for m in marks}):
        if days[0] <= expiry <= days[-1]:
            axes.axvline(expiry, color=style.QUIET, lw=0.7, ls=(0, (2, 3)), alpha=0.6, zorder=1)
    axes.set_ylim(low, high)
    axes.set_xlim(days[0], days[-1])
    if several:
        style.percent_axis(axes.yaxis)
        axes.set_ylabel("price, % of start")
    else:
        axes.set_ylabel(f"price of {names[0]}, {currency}" if len(names[0]) <= 12 else f"price, {currency}")
    axes.tick_params(labelbottom=False)


UNDERLYING = (style.ACCENT, "#B8860B", "#007A5A", "#7A3E6B")


def hedge_title(story: Story) -> str:
    """How far the hedge strays from the reference delta."""
    gap = np.abs(story.hedge - story.target).max(axis=1)
    if float(gap.max()) <= 1e-9 * float(np.abs(story.hedge).max()):
        return "The hedge is the reference delta at every look"
    return f"The hedge is at most {' and '.join(f'{g:,.0f}' for g in gap)} units from the reference delta"


def story_hedge(axes: Axes, story: Story, names: Sequence[str]) -> None:
    """Units held against the reference delta, as steps."""
    for u in range(len(names)):
        colour = UNDERLYING[u % len(UNDERLYING)]
        axes.step(story.t, story.target[u], where="post", color=colour, lw=0.8, alpha=0.55, zorder=2)
        axes.step(story.t, story.hedge[u], where="post", color=colour, lw=1.4, zorder=3)
    axes.axhline(0, color=style.HAIR, lw=0.6)
    axes.set_xlim(story.t[0], story.t[-1])
    style.money_axis(axes.yaxis, np.concatenate([story.hedge.ravel(), story.target.ravel()]), ticks=5)
    axes.set_ylabel("hedge, units")
    axes.set_xlabel("calendar years from the inception")
    handles: list[Line2D | Patch] = [
        Line2D([], [], color=UNDERLYING[u % len(UNDERLYING)], lw=1.4, label=f"{style.clipped(name)}: held")
        for u, name in enumerate(names)
    ]
    handles += [
        Line2D([], [], color=UNDERLYING[u % len(UNDERLYING)], lw=0.8, alpha=0.55, label="minus reference delta")
        for u in range(len(names))
    ]
    order = [h for pair in zip(handles[: len(names)], handles[len(names) :], strict=True) for h in pair]
    legend_below(axes, order, columns=2)


def story_pnl(axes: Axes, story: Story, *, currency: str) -> None:
    """Cumulative P&L by component."""
    drawn = {k: v for k, v in story.components.items() if "." not in k and (k == "total" or np.abs(v).max() > 0)}
    for name, value in drawn.items():
        axes.plot(
            story.t,
            value,
            color=style.component_colour(name),
            lw=2.2 if name == "total" else 1.2,
            zorder=5 if name == "total" else 3,
        )
    axes.axhline(0, color=style.QUIET, lw=0.7)
    axes.set_xlim(story.t[0], story.t[-1])
    style.money_axis(axes.yaxis, np.concatenate(list(drawn.values())) if drawn else np.zeros(1))
    axes.set_ylabel(f"cumulative P&L, {currency}")
    axes.set_xlabel("calendar years from the inception")
    handles = [
        Line2D(
            [],
            [],
            color=style.component_colour(n),
            lw=2.2 if n == "total" else 1.4,
            label=f"{style.words(n)} {money(float(v[-1]))}",
        )
        for n, v in drawn.items()
    ]
    legend_below(axes, handles, columns=3)
