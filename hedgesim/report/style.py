"""Colours, type sizes and number formats of the report, each defined once."""

import math
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import matplotlib
import numpy as np
from matplotlib.axis import Axis
from matplotlib.colors import LinearSegmentedColormap, to_hex
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullLocator

from hedgesim.market import Floats
from hedgesim.study.money import percent

PAPER, INK, QUIET, HAIR, WASH = "#FFFFFF", "#1B2430", "#5F6873", "#C9CED4", "#F1F3F5"
ACCENT = "#0B3C5D"
CHOSEN = "#B0124F"

# One colour per component throughout. The hues start from Okabe and Ito (2008), Color Universal Design, and are
# spread in luminance so that neighbours in a stack differ under red-green blindness too.
COMPONENT = {
    "floor": "#6B7480",
    "removable": "#0072B2",
    "reference": "#A9B0B8",
    "premium_edge": "#F0C808",
    "revaluation": "#3B4652",
    "vol_gap": "#97A0AA",
    "vol_gap_seen": "#97A0AA",
    "vol_mark": "#5C3A72",
    "jump": "#1B1B1B",
    "sampling": "#0072B2",
    "lag": "#56B4E9",
    "remainder": "#007A5A",
    "costs": "#D55E00",
    "funding": "#E69F00",
    "total": INK,
}
WORDS = {
    "premium_edge": "premium edge",
    "vol_gap": "vol gap",
    "vol_gap_seen": "vol gap as seen",
    "vol_mark": "vol re-mark",
}

BODY, CHART, CHART_TITLE, PAGE_TITLE, SMALL = 9.5, 8.5, 10.5, 15.0, 8.5

_RARE_TO_FREQUENT = LinearSegmentedColormap.from_list(
    "rare_to_frequent", ["#DDA94B", "#A98F6C", "#6F7F90", "#2F628F", "#10264A"]
)
_RC: dict[str, Any] = {
    "font.family": ["DejaVu Sans"],
    "font.size": CHART,
    "text.color": INK,
    "text.parse_math": False,
    "axes.edgecolor": QUIET,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "axes.labelsize": CHART,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.axisbelow": True,
    "axes.unicode_minus": False,
    "xtick.labelsize": CHART,
    "ytick.labelsize": CHART,
    "xtick.color": QUIET,
    "ytick.color": QUIET,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.major.size": 2.5,
    "ytick.major.size": 2.5,
    "legend.frameon": False,
    "legend.fontsize": CHART,
    "legend.handlelength": 1.4,
    "lines.solid_capstyle": "round",
    "hatch.linewidth": 0.5,
    "pdf.fonttype": 42,
    "savefig.dpi": 150,
    "figure.dpi": 100,
}


@contextmanager
def report_style() -> Iterator[None]:
    """Draw and save inside this block: the reader's own matplotlib settings must not change a report."""
    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(matplotlib.RcParams(_RC))
        yield


def schedule_shades(count: int) -> list[str]:
    """`count` colours, from rare to frequent trading, of falling luminance."""
    places = [0.5] if count == 1 else np.linspace(0.0, 1.0, count)
    return [to_hex(_RARE_TO_FREQUENT(p)) for p in places]


def component_colour(name: str) -> str:
    """Colour of a component, or of the whole that a part such as `costs.spread` belongs to."""
    return COMPONENT[name.split(".")[0]]


def words(component: str) -> str:
    """A component's name as the pages write it."""
    whole, _, part = component.partition(".")
    return f"{part} costs" if part else WORDS.get(whole, whole)


def start(text: str) -> str:
    """`text` as the beginning of a sentence."""
    return text[:1].upper() + text[1:]


def clipped(text: str, most: int = 18) -> str:
    """`text` cut to `most` characters for a tick or a legend."""
    return text if len(text) <= most else text[: most - 2].rstrip() + ".."


def share_with_error(value: float, error: float) -> str:
    """A fraction in per cent with its standard error to one figure, at most four decimals; no error below 1e-6 %."""
    if not (math.isfinite(value) and math.isfinite(error)) or error < 1e-8:
        return percent(value)
    leading = float(f"{100 * error:.0e}")
    decimals = min(4, max(1, -math.floor(math.log10(leading))))
    least = 10.0**-decimals
    shown = f"{100 * error:.{decimals}f}" if leading >= least else f"< {least:.{decimals}f}"
    return f"{100 * value:.{decimals}f} % (\u00b1{shown} %)"


def whole_clauses(text: str, most: int) -> str:
    """`text` within about `most` characters: clauses at its end are left out whole, never cut, and that is said."""
    clauses = text.split("; ")
    kept = clauses[:1]
    for clause in clauses[1:]:
        if sum(len(c) + 2 for c in kept) + len(clause) > most:
            return "; ".join(kept) + "; more in findings.json."
        kept.append(clause)
    return text


def unit_of(values: Floats) -> tuple[float, str]:
    """Divisor and letter that keep the largest of `values` short on an axis: 1, k, m or bn."""
    finite = np.abs(values[np.isfinite(values)])
    top = float(finite.max()) if finite.size else 0.0
    return next(((s, u) for s, u in ((1e9, "bn"), (1e6, "m"), (1e3, "k")) if top >= 2 * s), (1.0, ""))


def money_axis(axis: Axis, values: Floats, *, ticks: int = 6) -> None:
    """Tick labels of a money axis with thousands separators or k, m, bn, one unit for the whole axis."""
    scale, letter = unit_of(values)
    axis.set_major_locator(MaxNLocator(ticks, steps=[1, 2, 2.5, 5, 10]))

    def label(value: float, position: int | None = None) -> str:
        del position
        low, high = axis.get_view_interval()
        step = abs(high - low) / scale / ticks
        decimals = max(0, math.ceil(-math.log10(step))) if step > 0 else 0
        return "0" if value == 0 else f"{value / scale:,.{min(decimals, 6)}f}{letter}"

    axis.set_major_formatter(FuncFormatter(label))


def log_axis(axis: Axis, low: float, high: float, *, most: int = 7, name: str = "count") -> None:
    """Ticks of a log axis at 1, 2, 5 x 10^n where there is room, at powers of ten otherwise, in plain figures."""
    powers = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
    fine = [m * 10.0**p for p in powers for m in (1, 2, 5) if low <= m * 10.0**p <= high]
    coarse = [10.0**p for p in powers if low <= 10.0**p <= high]
    chosen = fine if len(fine) <= most or len(coarse) < 2 else coarse
    chosen = chosen[:: math.ceil(len(chosen) / most)] or [math.sqrt(low * high)]
    axis.set_major_locator(FixedLocator(chosen))
    axis.set_minor_locator(NullLocator())

    def label(value: float, position: int | None = None) -> str:
        del position
        if name == "percent":
            return f"{100 * value:.6g} %"
        return f"{value:,.0f}" if value >= 1 else f"{value:.6g}"

    axis.set_major_formatter(FuncFormatter(label))


def plain_axis(axis: Axis, scale: float, *, ticks: int = 6) -> None:
    """Tick labels of the values divided by `scale`, with thousands separators."""
    axis.set_major_locator(MaxNLocator(ticks, steps=[1, 2, 2.5, 5, 10]))
    axis.set_major_formatter(FuncFormatter(lambda value, _=None: f"{value / scale:,.6g}"))


def percent_axis(axis: Axis) -> None:
    """Tick labels of fractions in per cent."""
    axis.set_major_locator(MaxNLocator(8, steps=[1, 2, 2.5, 5, 10]))
    axis.set_major_formatter(FuncFormatter(lambda value, _=None: f"{100 * value:.6g} %"))
