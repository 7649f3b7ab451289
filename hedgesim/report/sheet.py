"""A page: an A4 landscape figure measured in millimetres from its top left corner, with text that wraps and tables."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import lru_cache
from typing import Literal

from matplotlib import font_manager
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Rectangle

from hedgesim.report import style

WIDTH_MM, HEIGHT_MM, MARGIN_MM = 297.0, 210.0, 14.0
TEXT_WIDTH_MM = WIDTH_MM - 2 * MARGIN_MM
BOTTOM_MM = HEIGHT_MM - 17.0
_MM_PER_POINT = 25.4 / 72
_LEADING = 1.42


@lru_cache(maxsize=4096)
def text_width(text: str, size: float, bold: bool = False) -> float:
    """Width of a line of `text` in millimetres at `size` points."""
    font = font_manager.get_font(
        font_manager.findfont(
            font_manager.FontProperties(family="DejaVu Sans", weight="bold" if bold else "normal"),
        )
    )
    font.set_size(size, 720)  # ten times the point grid, so that hinting does not round the width
    font.set_text(text, 0.0)
    return float(font.get_width_height()[0] / 64 / 10 * _MM_PER_POINT)


def line_height(size: float) -> float:
    """Distance of lines in millimetres at `size` points."""
    return size * _LEADING * _MM_PER_POINT


def wrap(text: str, width: float, size: float, bold: bool = False) -> list[str]:
    """`text` in lines no wider than `width` millimetres; a word that is too long by itself is broken."""
    lines: list[str] = []
    for paragraph in text.split("\n"):
        line = ""
        for word in paragraph.split():
            longer = f"{line} {word}" if line else word
            if text_width(longer, size, bold) <= width:
                line = longer
                continue
            if line:
                lines.append(line)
            while text_width(word, size, bold) > width and len(word) > 1:
                fit = max(
                    1, next(k for k in range(len(word), 0, -1) if k == 1 or text_width(word[:k], size, bold) <= width)
                )
                lines.append(word[:fit])
                word = word[fit:]
            line = word
        lines.append(line)
    return lines


def shorten(text: str, width: float, size: float, bold: bool = False) -> str:
    """`text` cut with an ellipsis to fit `width` millimetres."""
    if text_width(text, size, bold) <= width:
        return text
    fit = next((k for k in range(len(text) - 1, 0, -1) if text_width(text[:k] + "...", size, bold) <= width), 1)
    return text[:fit] + "..."


@dataclass(frozen=True)
class Column:
    """A column of a table: heading, cells, and where the cells stand."""

    heading: str
    cells: Sequence[str]
    align: Literal["left", "right"] = "right"


@dataclass
class Sheet:
    """One page of the pack.

    Attributes
    ----------
    name : file name of the picture, without ending; empty when the page goes to the PDF only
    title : the page's finding
    source : sample size and source, for the footer
    kicker : small line above the title
    figure : what is drawn
    top : where the next block starts, millimetres from the top
    """

    name: str
    title: str
    source: str
    kicker: str = ""
    figure: Figure = field(init=False)
    top: float = field(init=False, default=14.0)

    def __post_init__(self) -> None:
        """Set up the page and write its title."""
        self.figure = Figure(figsize=(WIDTH_MM / 25.4, HEIGHT_MM / 25.4), facecolor=style.PAPER)
        self.figure.add_artist(Rectangle((0, 1 - 3.2 / HEIGHT_MM), 1, 3.2 / HEIGHT_MM, color=style.ACCENT, lw=0))
        self.text(MARGIN_MM, 6.5, shorten(self.kicker, TEXT_WIDTH_MM, style.BODY), colour=style.QUIET, kind="kicker")
        size = style.PAGE_TITLE
        while size > 11 and len(wrap(self.title, TEXT_WIDTH_MM, size, True)) > (2 if size > 13 else 3):
            size -= 0.5
        self.top = self.text(
            MARGIN_MM, 12.0, self.title, size=size, bold=True, width=TEXT_WIDTH_MM, colour=style.ACCENT
        )
        self.top += 3.0

    def text(
        self,
        left: float,
        top: float,
        text: str,
        *,
        size: float = style.BODY,
        bold: bool = False,
        width: float = math.inf,
        colour: str = style.INK,
        align: Literal["left", "right", "center"] = "left",
        kind: str = "text",
    ) -> float:
        """Write `text` wrapped to `width`; the place below its last line comes back."""
        for line in wrap(text, width, size, bold):
            if line:
                self.figure.text(
                    left / WIDTH_MM,
                    1 - (top + 0.78 * line_height(size)) / HEIGHT_MM,
                    line,
                    fontsize=size,
                    fontweight="bold" if bold else "normal",
                    color=colour,
                    ha=align,
                    va="baseline",
                    gid=kind,
                )
            top += line_height(size)
        return top

    def axes(self, left: float, top: float, width: float, height: float) -> Axes:
        """Axes whose frame has this place and size; tick labels and axis names stand outside it."""
        return self.figure.add_axes(
            (left / WIDTH_MM, 1 - (top + height) / HEIGHT_MM, width / WIDTH_MM, height / HEIGHT_MM)
        )

    def chart(
        self, left: float, top: float, width: float, bottom: float, title: str, *, pad: tuple[float, float] = (17, 13)
    ) -> Axes:
        """Axes under a wrapped chart title, from `top` to `bottom`; `pad` keeps room at the left and below."""
        top = self.text(left, top, title, size=style.CHART_TITLE, bold=True, width=width, kind="chart title") + 2.5
        return self.axes(left + pad[0], top, width - pad[0], bottom - top - pad[1])

    def rule(self, left: float, top: float, width: float, *, colour: str = style.HAIR, weight: float = 0.6) -> None:
        """A horizontal line."""
        y = 1 - top / HEIGHT_MM
        self.figure.add_artist(Line2D([left / WIDTH_MM, (left + width) / WIDTH_MM], [y, y], color=colour, lw=weight))

    def table(
        self,
        left: float,
        top: float,
        width: float,
        columns: Sequence[Column],
        *,
        size: float = style.BODY,
        strong: Sequence[int] = (),
        row_height: float = 5.4,
    ) -> float:
        """Draw a table; rows in `strong` stand on a wash in bold. The place below comes back.

        Columns take the width of their widest cell; left-aligned cells are shortened when the table would not fit.
        """
        gap = 3.2
        widths = [
            max(
                max((text_width(line, size, True) for line in c.heading.split("\n")), default=0.0),
                max((text_width(cell, size, True) for cell in c.cells), default=0.0),
            )
            for c in columns
        ]
        over = sum(widths) + gap * len(columns) - width
        if over > 0:  # close up before names are cut
            closed = min(over / len(columns), gap - 2.0)
            gap -= closed
            over -= closed * len(columns)
        loose = [k for k, c in enumerate(columns) if c.align == "left"]
        for k in sorted(loose, key=lambda k: -widths[k]):
            give = min(max(over, 0.0), max(widths[k] - 18.0, 0.0))
            widths[k] -= give
            over -= give
        if over > 0:
            gap = max(gap - over / len(columns), 1.2)
        spare = min(max(-over, 0.0) / len(columns), 9.0)
        edges = [left]
        for w in widths:
            edges.append(edges[-1] + w + gap + spare)
        right_end = edges[-1]
        lines = max(c.heading.count("\n") + 1 for c in columns)
        head_height = lines * line_height(size) + 1.2

        def place(k: int) -> tuple[float, Literal["left", "right"]]:
            return (edges[k] + gap / 2, "left") if columns[k].align == "left" else (edges[k + 1] - gap / 2, "right")

        for k, column in enumerate(columns):
            x, align = place(k)
            heading = column.heading.split("\n")
            y = top + (lines - len(heading)) * line_height(size)
            for line in heading:
                y = self.text(x, y, line, size=size, colour=style.QUIET, align=align, kind="cell")
        top += head_height
        self.rule(left, top, right_end - left, colour=style.QUIET)
        rows = max(len(c.cells) for c in columns)
        for row in range(rows):
            if row in strong:
                self.figure.add_artist(
                    Rectangle(
                        (left / WIDTH_MM, 1 - (top + row_height) / HEIGHT_MM),
                        (right_end - left) / WIDTH_MM,
                        row_height / HEIGHT_MM,
                        color=style.WASH,
                        lw=0,
                        zorder=0,
                    )
                )
            for k, column in enumerate(columns):
                x, align = place(k)
                cell = shorten(column.cells[row], widths[k] + 0.1, size, row in strong)
                shift = (row_height - line_height(size)) / 2
                self.text(x, top + shift, cell, size=size, bold=row in strong, align=align, kind="cell")
            top += row_height
            self.rule(left, top, right_end - left, weight=0.3)
        return top

    def footer(self, text: str) -> None:
        """Write the source line and, at the right, `text` (experiment, date, page)."""
        y = HEIGHT_MM - 11.5
        self.rule(MARGIN_MM, y, TEXT_WIDTH_MM)
        room = TEXT_WIDTH_MM - text_width(text, style.SMALL) - 6.0
        self.text(
            WIDTH_MM - MARGIN_MM, y + 1.2, text, size=style.SMALL, colour=style.QUIET, align="right", kind="footer"
        )
        source = shorten(self.source, room, style.SMALL)
        self.text(MARGIN_MM, y + 1.2, source, size=style.SMALL, colour=style.QUIET, kind="footer")
