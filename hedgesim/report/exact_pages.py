"""Pages of what needs no random numbers: the exact engine beside the simulation, the laws, break-even premiums."""

import math
from collections.abc import Sequence

import numpy as np

from hedgesim.report import exact_charts, style
from hedgesim.report.exact_view import ExactFiguresShown, ExactView, gain_words
from hedgesim.report.facts import RunFacts
from hedgesim.report.listings import GUTTER_MM, new_sheet
from hedgesim.report.sheet import BOTTOM_MM, MARGIN_MM, TEXT_WIDTH_MM, Column, Sheet, line_height, wrap
from hedgesim.report.view import View
from hedgesim.study.money import money, money_with_error
from hedgesim.study.theory import Law

_TABLE_MM = 152.0
_MOST_BREAK_EVEN = 16
_ROW_MM, _LAW_ROW_MM, _BETWEEN_MM = 4.9, 4.6, 3.5
# Heading, head of the table and three lines.
_OPTIMA_MM = 28.0
_SMALL, _NOTE = 9.0, 8.5
# Objectives that agree to this fraction are told as equal: the curve itself is no closer.
_AS_GOOD = 5e-4
_GIVES = {"discretisation": "variance of discretisation", "floor": "variance of the floor", "cost": "mean cost"}


def exact(view: View, facts: RunFacts) -> list[Sheet]:
    """The exact curve and its optimum beside the simulated schedules, and how far the laws are off."""
    told = view.exact
    if told is None:
        return []
    sheet = new_sheet(view, facts, "exact", _title(view, told, facts.currency))
    width = TEXT_WIDTH_MM - _TABLE_MM - GUTTER_MM
    middle = sheet.top + (BOTTOM_MM - sheet.top) * 0.52
    bottom = BOTTOM_MM
    notes = [f"exact at {len(told.curve.trades)} values of N", told.curve.note] if told.curve is not None else []
    notes += ["open points: unequal intervals, beside the curve"] if exact_charts.uneven(view) else []
    if notes:
        words = style.start("; ".join(notes)) + "."
        bottom -= len(wrap(words, width, _NOTE)) * line_height(_NOTE) + 1.0
        sheet.text(MARGIN_MM, bottom + 0.5, words, size=_NOTE, width=width, colour=style.QUIET)
    if told.curve is not None:
        title = exact_charts.optimum_title(view, facts.currency)
        axes = sheet.chart(MARGIN_MM, sheet.top, width, middle - 2, title, pad=(18, 17))
        exact_charts.objective_curve(axes, view, currency=facts.currency)
    else:
        middle = sheet.top
        bottom = min(bottom, sheet.top + 100.0)
    axes = sheet.chart(MARGIN_MM, middle, width, bottom, exact_charts.cost_title(view), pad=(18, 17))
    exact_charts.cost_curve(axes, view, currency=facts.currency)
    left = MARGIN_MM + width + GUTTER_MM
    y = sheet.top
    if told.reason and told.figures is not None:
        y = sheet.text(left, y, f"No exact curve: {told.reason}.", width=_TABLE_MM) + 4.0
    if told.figures is not None:
        below = _laws_height(told) + (_OPTIMA_MM + _BETWEEN_MM if told.sensitivities else 0.0)
        y = _differences(sheet, view, told.figures, left, y, BOTTOM_MM - below - _BETWEEN_MM) + _BETWEEN_MM
    if told.sensitivities:
        y = _optima(sheet, told, left, y, facts.currency) + _BETWEEN_MM
    _laws(sheet, view, told, left, y)
    return [sheet]


def _title(view: View, told: ExactView, currency: str) -> str:
    """What the exact engine says of the optimum and of the chosen schedule, or that it says nothing."""
    if told.figures is None:
        return f"No exact figures: {told.reason}"
    start = "What the exact engine says: "
    curve, best = told.curve, view.best
    if curve is None or curve.best < 0:
        off = _largest(told.figures)
        if not math.isfinite(off):
            mean = money(float(told.figures.mean[best]), currency=currency)
            return f"{start}a mean of {mean} under {view.names[best]}"
        return f"{start}no simulated mean or std is off by more than {off:.1f} standard errors"
    n, least = int(curve.trades[curve.best]), float(curve.objective[curve.best])
    are = "intervals are" if n != 1 else "interval is"
    title = f"{start}{n:,} equal {are} best at an objective of {money(least, currency=currency)}"
    more = float(told.figures.objective[best]) - least
    if not view.varied or not math.isfinite(more):
        return title
    if abs(more) <= _AS_GOOD * abs(least):
        return f"{title}; {view.names[best]} is as good"
    size = money(abs(more), currency=currency)
    return f"{title}; {view.names[best]}: {size} {'more' if more >= 0.0 else 'less'}"


def _largest(figures: ExactFiguresShown) -> float:
    scores = np.abs(np.concatenate([figures.z_mean, figures.z_std]))
    return float(np.nanmax(scores)) if np.isfinite(scores).any() else math.nan


def _nearest_best(view: View, most: int) -> list[int]:
    """At most `most` schedules around the chosen one, in order of frequency."""
    first = max(0, min(view.best - most // 2, len(view.names) - most))
    return list(range(first, min(first + most, len(view.names))))


def _differences(sheet: Sheet, view: View, figures: ExactFiguresShown, left: float, top: float, bottom: float) -> float:
    """Simulated and exact mean and std, as many schedules as there is room for above `bottom`."""
    heads = line_height(style.CHART_TITLE) + 2 * line_height(_SMALL) + 2.2
    room = int((bottom - top - heads) / _ROW_MM)
    rows = _nearest_best(view, room if room >= len(view.names) else max(room - 1, 3))
    off = _largest(figures)
    head = "Simulated less exact"
    if math.isfinite(off):
        head += f": the largest of {2 * len(view.names)} is {off:.1f} standard errors"
    y = sheet.text(left, top, head, size=style.CHART_TITLE, bold=True, width=_TABLE_MM) + 1.0
    columns = [
        Column("schedule", [view.names[r] for r in rows], "left"),
        Column("simulated\nmean \u00b1 se", [money_with_error(view.mean[r], view.mean_se[r]) for r in rows]),
        Column("exact\nmean", [_like(figures.mean[r], view.mean[r], view.mean_se[r]) for r in rows]),
        Column("diff.,\nse", [_score(figures.z_mean[r]) for r in rows]),
        Column("simulated\nstd \u00b1 se", [money_with_error(view.std[r], view.std_se[r]) for r in rows]),
        Column("exact\nstd", [_like(figures.std[r], view.std[r], view.std_se[r]) for r in rows]),
        Column("diff.,\nse", [_score(figures.z_std[r]) for r in rows]),
    ]
    strong = [k for k, r in enumerate(rows) if r == view.best and view.varied]
    y = sheet.table(left, y, _TABLE_MM, columns, size=_SMALL, strong=strong, row_height=_ROW_MM)
    if len(rows) < len(view.names):
        note = f"{len(rows)} of {len(view.names)} schedules, around the chosen one; all of them in schedules.csv"
        y = sheet.text(left, y + 0.8, note, size=_NOTE, colour=style.QUIET)
    return y


def _like(value: float, simulated: float, error: float) -> str:
    """An exact amount with one figure more than its simulated twin, whose error sets the figures."""
    if not math.isfinite(simulated):
        return money(value)
    return money_with_error(value, error / 10.0 if math.isfinite(error) else error).partition(" (")[0]


def _score(value: float) -> str:
    if not math.isfinite(value):
        return "n/a"
    return "0.0" if abs(value) < 0.05 else f"{value:+.1f}"


def _optima(sheet: Sheet, told: ExactView, left: float, top: float, currency: str) -> float:
    """Optimum of the curve after each change, two changes a line."""
    now = None if told.curve is None else told.curve.trades[told.curve.best]
    head = "Where the optimum moves" + (f" from N = {now:,}" if now is not None else "") + f", objective in {currency}"
    y = sheet.text(left, top, head, size=style.CHART_TITLE, bold=True, width=_TABLE_MM) + 1.0
    columns = []
    for half in (told.sensitivities[0::2], told.sensitivities[1::2]):
        lines = range((len(told.sensitivities) + 1) // 2)
        full = [half[k] if k < len(half) else None for k in lines]
        columns += [
            Column("if", [s.change if s else "" for s in full], "left"),
            Column("best N", [("n/a" if s.best_trades < 0 else f"{s.best_trades:,}") if s else "" for s in full]),
            Column("objective", [money(s.objective) if s else "" for s in full]),
        ]
    return sheet.table(left, y, _TABLE_MM, columns, size=_NOTE, row_height=_ROW_MM)


def _laws_shown(told: ExactView) -> list[Law]:
    return [law for law in told.laws if law.holds or math.isfinite(told.off[law.name])]


def _laws_height(told: ExactView) -> float:
    """Millimetres that `_laws` takes."""
    lines = sum(len(wrap(text, _TABLE_MM, _NOTE)) for text in _law_notes(told))
    table = line_height(style.CHART_TITLE) + line_height(_NOTE) + 3.4 + _LAW_ROW_MM * len(_laws_shown(told))
    return table + lines * line_height(_NOTE)


def _laws(sheet: Sheet, view: View, told: ExactView, left: float, top: float) -> None:
    """How far each law is off for the chosen schedule; what the others lack, and what they assume, underneath."""
    shown = _laws_shown(told)
    head = f"How far the published laws are off for {style.clipped(view.names[view.best], 30)}"
    y = sheet.text(left, top, head, size=style.CHART_TITLE, bold=True, width=_TABLE_MM) + 1.0
    if shown:
        found = ["simulated" if law.quantity == "discretisation" or told.figures is None else "exact" for law in shown]
        columns = [
            Column("law", [law.name for law in shown], "left"),
            Column("gives", [_GIVES[law.quantity] for law in shown], "left"),
            Column("law / found", [_ratio(told.off[law.name]) for law in shown]),
            Column("found by", found, "left"),
            Column("assumptions", ["met" if law.holds else "not met" for law in shown], "left"),
        ]
        y = sheet.table(left, y, _TABLE_MM, columns, size=_NOTE, row_height=_LAW_ROW_MM) + 1.2
    for line in _law_notes(told):
        y = sheet.text(left, y, line, size=_NOTE, width=_TABLE_MM, colour=style.QUIET)


def _ratio(value: float) -> str:
    return f"{value:.3f}" if math.isfinite(value) else "n/a"


def _law_notes(told: ExactView) -> list[str]:
    """Which laws do not hold and why, where they come from, and what they assume."""
    shown = _laws_shown(told)
    lines = []
    amiss = _grouped([(law.reason, law.name) for law in told.laws if not law.holds])
    if amiss:
        lines.append("Not met: " + "; ".join(f"{names} - {why}" for why, names in amiss.items()) + ".")
    if any(not math.isfinite(told.off[law.name]) for law in shown):
        lines.append("n/a: no such variance or cost to compare with, or unequal intervals.")
    if shown:
        lines.append("Sources: " + "; ".join(f"{law.name}, {law.source}" for law in shown) + ".")
    assumed = _grouped([(a, law.name) for law in shown for a in law.assumptions])
    everywhere = _grouped([("", law.name) for law in shown]).get("")
    common = [a for a, names in assumed.items() if names == everywhere]
    own = _grouped([(names, a) for a, names in assumed.items() if names != everywhere])
    parts = [", ".join(common)] * bool(common) + [f"{names}: {told_apart}" for names, told_apart in own.items()]
    if parts:
        lines.append("Assumed: " + "; ".join(parts) + ".")
    return lines


def _grouped(pairs: Sequence[tuple[str, str]]) -> dict[str, str]:
    """First -> the seconds that come with it, in words."""
    found: dict[str, list[str]] = {}
    for key, name in pairs:
        found.setdefault(key, []).append(name)
    return {key: ", ".join(names) for key, names in found.items()}


def break_even(view: View, facts: RunFacts) -> list[Sheet]:
    """Premiums at which each schedule earns nothing, and the cushion that pays for its risk; the gain of scaling."""
    told = view.exact
    if told is None or not told.break_even:
        return []
    currency = facts.currency
    sheet = new_sheet(view, facts, "break_even", _break_even_title(view, told, currency))
    rows = _nearest_best(view, _MOST_BREAK_EVEN)
    here = [told.break_even[r] for r in rows]
    vols = exact_charts.in_vol(told.break_even)
    cushions = any(math.isfinite(row.cushion_amount) for row in told.break_even)
    columns = [Column("schedule", [row.schedule for row in here], "left")]
    if vols:
        columns += [
            Column("at vol", [_vol(row.sold_vol) for row in here]),
            Column("vol points\noff mark", [_points(row.vol_shift) for row in here]),
        ]
    columns.append(Column(f"more premium\nneeded, {currency}", [money(row.amount) for row in here]))
    if cushions and vols:
        columns.append(Column("cushion,\nvol points", [_points(row.cushion) for row in here]))
    if cushions:
        columns.append(Column(f"cushion,\n{currency}", [money(row.cushion_amount) for row in here]))
    width = 146.0
    y = sheet.text(
        MARGIN_MM,
        sheet.top,
        "Premiums for a mean P&L of zero" + (", and with a cushion" if cushions else ""),
        size=style.CHART_TITLE,
        bold=True,
        width=width,
    )
    strong = [k for k, r in enumerate(rows) if r == view.best and view.varied]
    y = sheet.table(MARGIN_MM, y + 1.0, width, columns, size=_SMALL, strong=strong, row_height=_ROW_MM) + 1.5
    for line in _break_even_notes(view, told, len(rows), cushions=cushions):
        y = sheet.text(MARGIN_MM, y, line, size=_SMALL, width=width, colour=style.QUIET) + 1.0
    gain = gain_words(told, view.names, view.best)
    if gain and view.varied:
        head = "What exact scaling is worth to the simulated tail"
        y = sheet.text(MARGIN_MM, y + 3.0, head, size=style.CHART_TITLE, bold=True, width=width) + 1.0
        sheet.text(MARGIN_MM, y, style.start(gain), size=_SMALL, width=width)
    left = MARGIN_MM + width + GUTTER_MM
    axes = sheet.chart(
        left,
        sheet.top,
        TEXT_WIDTH_MM - width - GUTTER_MM,
        min(BOTTOM_MM, sheet.top + 34.0 + 12.0 * max(len(rows), 6)),
        "At which vol premiums may be sold or bought" if vols else "What more premiums would have to bring",
        pad=(30, 19),
    )
    exact_charts.break_even_chart(axes, view, rows, currency=currency)
    return [sheet]


def _break_even_title(view: View, told: ExactView, currency: str) -> str:
    row = told.break_even[view.best]
    if math.isfinite(row.vol_shift):
        way = "below" if row.vol_shift < 0.0 else "above"
        return (
            f"Under {row.schedule} the book breaks even with premiums at {_vol(row.sold_vol)} vol, "
            f"{100 * abs(row.vol_shift):.2f} points {way} the mark"
        )
    size = money(abs(row.amount), currency=currency)
    if row.amount <= 0.0:
        return f"Under {row.schedule} the premiums may be {size} worse before the book loses on average"
    return f"Under {row.schedule} the premiums would have to be {size} better for the book to break even"


def _vol(value: float) -> str:
    return f"{100 * value:.2f} %" if math.isfinite(value) else "n/a"


def _points(value: float) -> str:
    return f"{100 * value:+.2f}" if math.isfinite(value) else "n/a"


def _break_even_notes(view: View, told: ExactView, shown: int, *, cushions: bool) -> list[str]:
    """What the columns mean, and why some are missing."""
    by_note: dict[str, list[str]] = {}
    for row in told.break_even:
        if row.note:
            by_note.setdefault(row.note, []).append(row.schedule)
    lines = [
        style.start(note) + (f" ({', '.join(names[:4])})" if len(names) < len(told.break_even) else "") + "."
        for note, names in by_note.items()
    ]
    lines.append(
        "Hedges and marks stay as they are: only premiums move, and the spread of P&L does not. A negative amount is "
        "what the premiums may be worse."
    )
    if cushions:
        lines.append(f"Cushion: the same for a mean P&L of {view.cost_of_risk:g} standard deviations.")
    if shown < len(view.names):
        lines.append(f"{shown} of {len(view.names)} schedules, around the chosen one; all of them in break_even.csv.")
    return lines
