"""Pages of every kind of run, and what can be wrong with the texts on them."""

import re
from dataclasses import replace
from datetime import UTC, datetime
from functools import lru_cache

import numpy as np
import report_builder
from matplotlib.text import Text
from pypdf import PdfReader

from hedgesim.report.pack import build
from hedgesim.report.style import report_style
from hedgesim.report.view import view_of
from hedgesim.study import Settings, study

CREATED = datetime(2027, 3, 1, 17, 30, tzinfo=UTC)
KINDS = {
    "ten schedules": {"every": [1, 2, 3, 6, 9, 14, 21, 42, 63, 126]},
    "one schedule": {"every": [6]},
    "forty schedules": {"every": list(range(1, 41)), "paths": 1000},
    "price history": {"every": [1, 2, 3, 5, 10, 21, 63], "replayed": True, "paths": 120},
    "price history, every look not asked for": {"every": [2, 6, 21], "replayed": True, "paths": 60},
    "one inception": {"every": [1, 3, 21], "replayed": True, "paths": 1},
    "two underlyings": {"every": [1, 2, 6, 21, 63], "underlyings": ("CORVANE", "TESSOVAR"), "paths": 1500},
}
SETTINGS = Settings(
    mean="costs", risk="std", cost_of_risk=0.03, limit=None, confidence=0.95, years=0.25, currency="EUR"
)
_cache = {}


def made(kind, **changes):
    """Study and facts of one kind of run."""
    key = (kind, tuple(sorted(changes.items())))
    if key not in _cache:
        arguments = KINDS[kind]
        book = report_builder.ledger(**arguments)
        hidden = tuple(n for n in book.schedules if n == "every look" and 1 not in arguments["every"])
        settings = replace(SETTINGS, hidden=hidden, **changes)
        compiled = report_builder.compiled(arguments["every"])
        done = study(book, compiled, settings)
        if not arguments.get("replayed"):
            done = replace(done, exactness=report_builder.exactness(done))
        _cache[key] = done, report_builder.facts(book)
    return _cache[key]


def texts(figure):
    """Visible texts and their boxes in pixels; tick labels beyond the view limits are never drawn."""
    unseen = set()
    for axes in [*figure.axes, *(inset for outer in figure.axes for inset in outer.child_axes)]:
        for axis in (axes.xaxis, axes.yaxis):
            low, high = sorted(axis.get_view_interval())
            slack = 1e-9 * (high - low)
            for tick in [*axis.get_major_ticks(), *axis.get_minor_ticks()]:
                if not low - slack <= tick.get_loc() <= high + slack:
                    unseen |= {tick.label1, tick.label2}
    renderer = figure.canvas.get_renderer()
    shown = [t for t in figure.findobj(Text) if t.get_visible() and t.get_text().strip() and t not in unseen]
    return [(t, t.get_window_extent(renderer)) for t in shown]


def faults(figure):
    """Texts that leave the page or run into another."""
    figure.canvas.draw()
    found = []
    width, height = figure.bbox.width, figure.bbox.height
    boxes = texts(figure)
    for text, box in boxes:
        if box.x0 < 0 or box.y0 < 0 or box.x1 > width or box.y1 > height:
            found.append(f"off the page: {text.get_text()!r}")
        if text.get_gid() != "footer" and box.y0 < height * 11.5 / 210:
            found.append(f"in the footer: {text.get_text()!r}")
        if text.get_fontsize() < 8.5:
            found.append(f"too small: {text.get_text()!r}")
    # The box of a line reaches beyond its ink by the leading; a point of shared edge is no overlap.
    x0, y0, x1, y1 = np.array([box.extents for _, box in boxes]).T
    across = np.minimum.outer(x1, x1) - np.maximum.outer(x0, x0)
    down = np.minimum.outer(y1, y1) - np.maximum.outer(y0, y0)
    for a, b in np.argwhere(np.triu((across > 1.0) & (down > 2.0), k=1)):
        found.append(f"overlap: {boxes[a][0].get_text()!r} and {boxes[b][0].get_text()!r}")
    return found


def sheets_of(kind, *, facts_changes=None, **changes):
    """Pages of one kind of run, each with its faults."""
    results, facts = made(kind, **changes)
    facts = replace(facts, **(facts_changes or {}))
    with report_style():
        sheets = build(view_of(results, facts.ledger), facts, created=CREATED)
        return sheets, [faults(sheet.figure) for sheet in sheets]


@lru_cache
def plain_sheets(kind):
    return sheets_of(kind)


def page_texts(folder):
    """Text of each page of the PDF, white space evened out."""
    return [re.sub(r"\s+", " ", page.extract_text()) for page in PdfReader(folder / "report.pdf").pages]


def cells_of(sheet):
    return [t.get_text() for t in sheet.figure.texts if t.get_gid() == "cell"]


def words_of(sheet):
    return " ".join(t.get_text() for t in sheet.figure.texts)
