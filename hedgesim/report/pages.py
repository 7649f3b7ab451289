"""The pages of the pack, in reading order; each builds its sheets from a view of the study and the facts of the run."""

import math
from collections.abc import Sequence

import numpy as np

from hedgesim.report import figures, frequency_chart, outcomes, style, tradeoff
from hedgesim.report.exact_pages import break_even, exact
from hedgesim.report.facts import RunFacts
from hedgesim.report.listings import GUTTER_MM, all_cautions, count, drawn_of, inputs, new_sheet, root, schedule_tables
from hedgesim.report.sheet import BOTTOM_MM, MARGIN_MM, TEXT_WIDTH_MM, Column, Sheet, line_height, wrap
from hedgesim.report.view import Share, View, mark_of
from hedgesim.study.money import money, money_with_error, percent

_FIRST_PAGE_ROWS, _PRICE_ROWS = 12, 20
# Components are sums over looks: beside the largest, anything this small is rounding.
_ROUNDING = 1e-9


def finding(view: View, facts: RunFacts) -> list[Sheet]:
    """The one sentence, the key table, what the cost of risk means, and the cautions."""
    sheet = new_sheet(view, facts, "finding", view.sentence)
    rows = _closest(view, _FIRST_PAGE_ROWS)
    cautions = all_cautions(view, facts)
    small = style.BODY - 0.5
    lines = [wrap(f"- {text}", TEXT_WIDTH_MM, small) for text in cautions]
    kept, used = 0, 0.0
    for block in lines:
        if kept and used + len(block) * line_height(small) > 42:
            break
        used += len(block) * line_height(small)
        kept += 1
    top_of_cautions = BOTTOM_MM - used - 8
    table_width = 196.0
    below = sheet.table(
        MARGIN_MM,
        sheet.top,
        table_width,
        key_columns(view, rows),
        strong=[k for k, r in enumerate(rows) if r == view.best and view.varied],
    )
    note = f"Amounts per life in {facts.currency}, discounted to the start."
    if len(rows) < len(view.names):
        note += f" {len(rows)} of {len(view.names)} schedules, those nearest the best; all of them on the table pages."
    below = sheet.text(MARGIN_MM, below + 1.5, note, size=9.0, colour=style.QUIET, width=table_width)
    left = MARGIN_MM + table_width + GUTTER_MM
    width = TEXT_WIDTH_MM - table_width - GUTTER_MM
    y = sheet.top
    for heading, body in _reading(view):
        y = sheet.text(left, y, heading, bold=True, colour=style.ACCENT, width=width)
        y = sheet.text(left, y, body, size=9.0, width=width) + 2.5
    width_mm = table_width - 17.0
    under = figures.ticks_depth(view, rows, width_mm) + 8.5
    if np.isfinite(view.objective[rows]).all() and top_of_cautions - below - under > 36.0:
        title = tradeoff.objective_title(view)
        axes = sheet.chart(MARGIN_MM, below + 3, table_width, top_of_cautions - 3, title, pad=(17, under))
        tradeoff.objective_bars(axes, view, rows, currency=facts.currency, width_mm=width_mm)
    y = max(top_of_cautions, below + 6)
    sheet.rule(MARGIN_MM, y - 1.5, TEXT_WIDTH_MM, colour=style.ACCENT)
    y = sheet.text(MARGIN_MM, y, "Cautions", bold=True, colour=style.ACCENT)
    for k, text in enumerate(cautions[:kept]):
        last = k == kept - 1 and kept < len(cautions)
        y = sheet.text(
            MARGIN_MM, y, f"- {text}" + (" (more on the inputs pages)" if last else ""), size=small, width=TEXT_WIDTH_MM
        )
    return [sheet]


def _closest(view: View, most: int) -> list[int]:
    """The schedules nearest the best by objective, in order of frequency."""
    if len(view.names) <= most:
        return list(range(len(view.names)))
    distance = np.where(np.isfinite(view.objective), view.objective, np.inf)
    distance = np.where(np.arange(len(distance)) == view.best, -np.inf, distance)
    return sorted(int(k) for k in np.argsort(distance, kind="stable")[:most])


def _reading(view: View) -> list[tuple[str, str]]:
    if not view.varied:
        return [("One inception", "One outcome per schedule: no variance, no errors and no law.")]
    parts = [("What the cost of risk says", view.cost_of_risk_words)]
    ties = [view.names[k] for k in range(len(view.names)) if view.tied[k] and k != view.best]
    if ties:
        shown = ", ".join(ties[:6]) + (f" and {len(ties) - 6} more" if len(ties) > 6 else "")
        parts.append(
            (
                "How sure",
                f"At {percent(view.confidence)} confidence the data cannot tell {view.names[view.best]} from {shown}.",
            )
        )
    elif len(view.names) > 1 and np.isfinite(view.objective_se).any():
        parts.append(("How sure", f"At {percent(view.confidence)} confidence no other schedule is as good."))
    if view.law is not None:
        parts.append(("Law", frequency_chart.law_title(view) + "."))
    else:
        parts.append(("Law", style.whole_clauses(view.law_note, 260)))
    return parts


def key_columns(view: View, rows: Sequence[int]) -> list[Column]:
    """The columns that a decision needs; a single inception has outcomes only."""
    if not view.varied:
        return [
            Column("schedule", [view.names[r] for r in rows], "left"),
            Column("trades", [count(view.trades[r]) for r in rows]),
            Column(view.cost_name.replace("mean ", ""), [money(view.cost[r]) for r in rows]),
            Column("P&L", [money(view.mean[r]) for r in rows]),
        ]
    amount = money if view.risk_name != "variance" else _large
    return [
        Column("schedule", [view.names[r] for r in rows], "left"),
        Column("trades", [count(view.trades[r]) for r in rows]),
        Column(view.cost_name.replace(" ", "\n", 1), [money(view.cost[r]) for r in rows]),
        Column("std of P&L\n\u00b1 1 se", [money_with_error(view.std[r], view.std_se[r]) for r in rows]),
        Column("ES\n97.5 %", [money(view.es975[r]) for r in rows]),
        Column("removable\nshare", [style.share_with_error(view.share[r], view.share_se[r]) for r in rows]),
        Column("objective", [amount(view.objective[r]) for r in rows]),
        Column("", [mark_of(view, r) for r in rows], "left"),
    ]


def _large(value: float) -> str:
    return f"{value:.3g}"


def variance(view: View, facts: RunFacts) -> list[Sheet]:
    """Variance against the rebalancing interval, beside the frequency law."""
    if not view.varied:
        return []
    half = (TEXT_WIDTH_MM - GUTTER_MM) / 2
    title = "What trading more removes, and what it cannot"
    if view.floor[view.best] > _ROUNDING * view.gross[view.best]:
        floor = money(root(view.floor[view.best]), currency=facts.currency)
        title = f"What trading more removes, and the {floor} of standard deviation that it cannot"
    if facts.replayed:
        title = (
            "What trading more removes: on a price history the floor is unknown, the reference is trading at every look"
        )
    sheet = new_sheet(view, facts, "variance", title)
    axes = sheet.chart(MARGIN_MM, sheet.top, half, BOTTOM_MM, figures.stack_title(view), pad=(17, 44))
    figures.variance_stack(axes, view, currency=facts.currency, width_mm=half - 17)
    left = MARGIN_MM + half + GUTTER_MM
    axes = sheet.chart(left, sheet.top, half, BOTTOM_MM, frequency_chart.law_title(view), pad=(17, 44))
    frequency_chart.frequency_law(axes, view, currency=facts.currency)
    theory = frequency_chart.theory_note(view)
    note = theory + style.whole_clauses(view.law_note, 300 - len(theory))
    if math.isfinite(view.below_look):
        unseen = money(root(view.below_look), currency=facts.currency)
        note += f" Below the look an estimated std of {unseen} stays unseen."
    if note:
        sheet.text(left, BOTTOM_MM - 15.0, note, size=9.0, width=half, colour=style.QUIET)
    return [sheet]


def shares(view: View, facts: RunFacts) -> list[Sheet]:
    """Covariance shares by schedule, and the breakdown of the chosen schedule by underlying."""
    sheet = new_sheet(
        view, facts, "shares", "Where the variance of P&L comes from" if view.varied else "Where the P&L comes from"
    )
    names = list(dict.fromkeys(s.underlying for s in view.shares if s.underlying != "all"))
    table_width = 104.0
    width = TEXT_WIDTH_MM - table_width - GUTTER_MM
    axes = sheet.chart(MARGIN_MM, sheet.top, width, BOTTOM_MM, figures.shares_title(view), pad=(30, 26))
    figures.covariance_shares(axes, view, currency=facts.currency)
    sheet.source += drawn_of(view, figures.most_rows(axes))
    left = MARGIN_MM + width + GUTTER_MM
    heading = f"{view.names[view.best]}: mean, spread and share of each component"
    y = sheet.text(left, sheet.top, heading, size=style.CHART_TITLE, bold=True, width=table_width) + 1.5
    y = sheet.table(
        left,
        y,
        table_width,
        _share_columns(_worth_showing(view, "all"), view.best),
        size=9.0,
        row_height=5.0,
    )
    room = int((BOTTOM_MM - y - 22) / 5.0)
    if len(names) > 1 and room > 2:
        rows = [s for name in names for s in _worth_showing(view, name) if "." not in s.component]
        totals = [s for s in rows if s.component == "total"]
        shown = rows if len(rows) <= room else totals[:room]
        y = sheet.text(left, y + 4, "The same by underlying", size=style.CHART_TITLE, bold=True) + 1.0
        sheet.table(
            left,
            y,
            table_width,
            [Column("underlying", [s.underlying for s in shown], "left"), *_share_columns(shown, view.best)],
            size=9.0,
            row_height=5.0,
        )
    return [sheet]


def _worth_showing(view: View, underlying: str) -> list[Share]:
    """Rows of the breakdown that are more than rounding; cost kinds only when there are several."""
    best = view.best
    rows = [s for s in view.shares if s.underlying == underlying]
    noise = _ROUNDING * max(float(np.nanmax([np.abs(s.mean[best]), s.std[best]])) for s in rows)
    rows = [s for s in rows if s.component == "total" or not (abs(s.mean[best]) <= noise and not s.std[best] > noise)]
    kinds = sum("." in s.component for s in rows)
    return [s for s in rows if "." not in s.component or kinds > 1]


def _share_columns(rows: Sequence[Share], best: int) -> list[Column]:
    noise = _ROUNDING * max((float(np.nan_to_num(s.std[best])) for s in rows), default=0.0)
    columns = [
        Column("component", [style.words(s.component) for s in rows], "left"),
        Column("mean \u00b1 1 se", [money_with_error(s.mean[best], s.mean_se[best]) for s in rows]),
    ]
    if all(np.isnan(s.std[best]) for s in rows):
        return columns
    return [
        *columns,
        Column("std", [money(0.0 if s.std[best] < noise else s.std[best]) for s in rows]),
        Column("share", [percent(s.share[best]) for s in rows]),
    ]


def distribution(view: View, facts: RunFacts) -> list[Sheet]:
    """P&L densities and their loss tails."""
    half = (TEXT_WIDTH_MM - GUTTER_MM) / 2
    currency, totals = facts.currency, facts.ledger.totals
    sheet = new_sheet(view, facts, "distribution", "How a life can end")
    axes = sheet.chart(MARGIN_MM, sheet.top, half, BOTTOM_MM, outcomes.ridge_title(view, currency), pad=(28, 30))
    outcomes.ridges(axes, view, totals, currency=currency)
    axes = sheet.chart(
        MARGIN_MM + half + GUTTER_MM,
        sheet.top,
        half,
        BOTTOM_MM,
        outcomes.exceedance_title(view, currency),
        pad=(19, 30),
    )
    sheet.source += drawn_of(view, outcomes.MOST_RIDGES, outcomes.MOST_LINES)
    outcomes.exceedance(axes, view, totals, currency=currency)
    return [sheet]


def price_of_risk(view: View, facts: RunFacts) -> list[Sheet]:
    """Cost against risk, and the price list of the efficient schedules."""
    if not view.varied:
        return []
    table_width = 118.0
    width = TEXT_WIDTH_MM - table_width - GUTTER_MM
    sheet = new_sheet(view, facts, "cost_and_risk", "What a schedule costs against the risk it leaves")
    axes = sheet.chart(
        MARGIN_MM, sheet.top, width, BOTTOM_MM, tradeoff.cost_risk_title(view, facts.currency), pad=(19, 30)
    )
    tradeoff.cost_risk(axes, view, currency=facts.currency)
    left = MARGIN_MM + width + GUTTER_MM
    y = (
        sheet.text(
            left,
            sheet.top,
            "Price list: cost of the next unit of risk removed",
            size=style.CHART_TITLE,
            bold=True,
            width=table_width,
        )
        + 1.5
    )
    place = next((k for k, s in enumerate(view.steps) if s.schedule == view.names[view.best]), 0)
    first = max(0, min(place - _PRICE_ROWS // 2, len(view.steps) - _PRICE_ROWS))
    steps = view.steps[first : first + _PRICE_ROWS]
    columns = [
        Column("schedule", [s.schedule for s in steps], "left"),
        Column("extra cost per unit of risk\nremoved by the next row", [_price(s.price, s.price_se) for s in steps]),
        Column("best for a cost\nof risk in", [_range(s.best_from, s.best_to) for s in steps]),
    ]
    y = sheet.table(
        left,
        y,
        table_width,
        columns,
        size=9.0,
        strong=[k for k, s in enumerate(steps) if s.schedule == view.names[view.best]],
        row_height=5.0,
    )
    if len(view.steps) > len(steps):
        y = sheet.text(
            left,
            y + 1,
            f"{len(steps)} of {len(view.steps)} efficient schedules, around the chosen one",
            size=9.0,
            colour=style.QUIET,
        )
    sheet.text(left, y + 3, view.cost_of_risk_words, size=9.0, width=table_width)
    return [sheet]


def _price(value: float, error: float) -> str:
    return money_with_error(value, error) if math.isfinite(value) else ""


def _range(low: float, high: float) -> str:
    if not (math.isfinite(low) or math.isfinite(high)):
        return "never"
    return f"{low:.3g} to {high:.3g}" if math.isfinite(high) else f"above {low:.3g}"


def history(view: View, facts: RunFacts) -> list[Sheet]:
    """P&L of each inception over the price history."""
    totals = facts.ledger.totals
    if not facts.replayed or totals.shape[1] < 2:
        return []
    sheet = new_sheet(view, facts, "rolling", "The same book started again and again on the price history")
    axes = sheet.chart(
        MARGIN_MM,
        sheet.top,
        TEXT_WIDTH_MM,
        BOTTOM_MM,
        outcomes.rolling_title(view, totals, facts.currency),
        pad=(19, 26),
    )
    outcomes.rolling(axes, view, totals, facts.inceptions, currency=facts.currency)
    return [sheet]


def stories(view: View, facts: RunFacts) -> list[Sheet]:
    """One ordinary and one bad path, a page each."""
    sheets = []
    half = (TEXT_WIDTH_MM - GUTTER_MM) / 2
    names = facts.ledger.underlyings
    told = facts.stories[:1] if len(facts.inceptions) == 1 else facts.stories
    for k, story in enumerate(told):
        marks = facts.marks[k] if k < len(facts.marks) else ()
        sheet = new_sheet(view, facts, f"path_{k + 1}", outcomes.story_title(story, facts.currency))
        middle = sheet.top + (BOTTOM_MM - sheet.top) * 0.45
        faint = ", strikes and expiries faint" if marks else ""
        labelled = story.path < len(facts.inceptions)
        start = f" from {facts.inceptions[story.path]}" if labelled else f" of path {story.path:,}"
        price = sheet.chart(MARGIN_MM, sheet.top, half, middle, f"Price{start}{faint}", pad=(19, 3))
        outcomes.story_price(price, story, marks, names, currency=facts.currency)
        title = outcomes.hedge_title(story)
        hedge = sheet.chart(MARGIN_MM, middle + 2, half, BOTTOM_MM, title, pad=(19, 30))
        outcomes.story_hedge(hedge, story, names)
        end = float(story.components["total"][-1]) if "total" in story.components else math.nan
        pnl = sheet.chart(
            MARGIN_MM + half + GUTTER_MM,
            sheet.top,
            half,
            BOTTOM_MM,
            f"P&L by component adds up to {money(end, currency=facts.currency)}",
            pad=(19, 30),
        )
        outcomes.story_pnl(pnl, story, currency=facts.currency)
        sheets.append(sheet)
    return sheets


def all_pages(view: View, facts: RunFacts) -> list[Sheet]:
    """The whole pack in reading order."""
    makers = (
        finding,
        price_of_risk,
        variance,
        exact,
        break_even,
        shares,
        distribution,
        history,
        stories,
        schedule_tables,
        inputs,
    )
    return [sheet for make in makers for sheet in make(view, facts)]
