"""Pages that list: every schedule with its errors; market, book, method, versions and hashes."""

import math

from hedgesim.report import style
from hedgesim.report.facts import CAUTION, RunFacts
from hedgesim.report.sheet import BOTTOM_MM, MARGIN_MM, TEXT_WIDTH_MM, Column, Sheet, line_height, wrap
from hedgesim.report.view import View, source_line
from hedgesim.study.money import money, money_with_error

GUTTER_MM = 12.0
_ROW_MM = 5.4
_MOST_POSITIONS = 300


def new_sheet(view: View, facts: RunFacts, name: str, title: str) -> Sheet:
    """An empty page of the pack."""
    return Sheet(name, title, source_line(view, facts), facts.title)


def all_cautions(view: View, facts: RunFacts) -> tuple[str, ...]:
    """The standing caution, the caller's and the study's, each once."""
    return tuple(dict.fromkeys((CAUTION, *facts.cautions, *view.warnings)))


def drawn_of(view: View, *most: int) -> str:
    """For the footer of charts that have room for `most` schedules each: how many of all they draw."""
    n = len(view.names)
    drawn = [str(min(m, n)) for m in most]
    return f"; drawn: {' and '.join(drawn)} of {n}" if n > min(most) else ""


def root(variance: float) -> float:
    """Standard deviation of a variance; nan for one estimated below zero."""
    return math.sqrt(variance) if variance >= 0 else math.nan


def count(value: float) -> str:
    """A number of trades."""
    return f"{value:,.0f}" if math.isfinite(value) else "n/a"


def schedule_tables(view: View, facts: RunFacts) -> list[Sheet]:
    """Every schedule with its errors, as many pages as it takes."""
    sheets = []
    per = int((BOTTOM_MM - 45) / _ROW_MM)
    n = len(view.names)
    for start in range(0, n, per):
        rows = range(start, min(start + per, n))
        span = f" ({start + 1} to {start + len(rows)} of {n})" if n > per else ""
        sheet = new_sheet(
            view,
            facts,
            "",
            f"All schedules, rare to frequent{span}: amounts per life in {facts.currency}, \u00b1 1 se",
        )
        columns = [
            Column("schedule", [view.names[r] for r in rows], "left"),
            Column("trades", [count(view.trades[r]) for r in rows]),
            Column("mean P&L", [money_with_error(view.mean[r], view.mean_se[r]) for r in rows]),
            Column(view.cost_name, [money_with_error(view.cost[r], view.cost_se[r]) for r in rows]),
        ]
        spread = [
            Column("std", [money_with_error(view.std[r], view.std_se[r]) for r in rows]),
            Column("p01", [money(view.p01[r]) for r in rows]),
            Column("p05", [money(view.p05[r]) for r in rows]),
            Column("ES 97.5 %", [money_with_error(view.es975[r], view.es975_se[r]) for r in rows]),
            Column("std gross", [money(root(view.gross[r])) for r in rows]),
            Column("std floor", [money(root(view.floor[r])) for r in rows]),
            Column("removable", [style.share_with_error(view.share[r], view.share_se[r]) for r in rows]),
        ]
        columns += spread if view.varied else []
        sheet.table(
            MARGIN_MM,
            sheet.top,
            TEXT_WIDTH_MM,
            columns,
            size=9.0,
            strong=[k for k, r in enumerate(rows) if r == view.best and view.varied],
        )
        sheets.append(sheet)
    return sheets


def _first(lines: tuple[str, ...]) -> tuple[str, ...]:
    if len(lines) <= _MOST_POSITIONS:
        return lines
    more = len(lines) - _MOST_POSITIONS
    return (*lines[:_MOST_POSITIONS], f"and {more:,} more positions, all of them in the experiment's book")


def inputs(view: View, facts: RunFacts) -> list[Sheet]:
    """Market, book, method, versions, seed and hashes in two columns, as many pages as it takes."""
    seed = "none drawn" if facts.seed is None else str(facts.seed)
    blocks = [
        ("Market", facts.market_lines),
        ("Book", _first(facts.book_lines)),
        ("Method", facts.method_lines),
        ("Sample", (source_line(view, facts), f"seed: {seed}")),
        ("Cautions", all_cautions(view, facts)),
        ("Versions", tuple(f"{k} {v}" for k, v in facts.versions.items())),
        ("Hashes", tuple(f"{k}: {v}" for k, v in facts.hashes.items())),
    ]
    half = (TEXT_WIDTH_MM - GUTTER_MM) / 2
    lines: list[tuple[str, bool, int]] = []
    for heading, body in blocks:
        if body:
            wrapped = [wrap(entry, half, 9.0) for entry in body]
            # A heading stays with the first entry under it.
            lines.append((heading, True, 1 + min(len(wrapped[0]), 4)))
            for parts in wrapped:
                lines += [(part, False, min(len(parts) - k, 4)) for k, part in enumerate(parts)]
            lines.append(("", False, 1))
    sheets: list[Sheet] = []
    step, column, y = line_height(9.0), 2, 0.0
    for text, is_heading, together in lines:
        if column == 2 or y + step * together > BOTTOM_MM:
            column = (column + 1) % 2 if column != 2 else 0
            if column == 0:
                sheets.append(
                    new_sheet(view, facts, "", "Inputs, method and versions" + (", continued" if sheets else ""))
                )
            y = sheets[-1].top
        sheets[-1].text(
            MARGIN_MM + column * (half + GUTTER_MM),
            y,
            text,
            size=9.0,
            bold=is_heading,
            colour=style.ACCENT if is_heading else style.INK,
        )
        y += step
    return sheets
