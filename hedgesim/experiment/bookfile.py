"""A book of positions kept in a CSV file."""

import csv
import io
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from hedgesim.errors import Problem
from hedgesim.experiment.fields import nearest, unknown_key
from hedgesim.experiment.values import BadValueError, parse_scalar, shown


@dataclass(frozen=True)
class BookFile:
    """The rows of a CSV book before the values are checked.

    Attributes
    ----------
    file : str
        The file as named in messages.
    rows : sequence of dict
        One mapping of column to scalar a position; empty cells are left out.
    lines : sequence of int
        Line of the file, from 1, at which each position starts.
    without : frozenset of str
        Required columns that the file lacks and that `problems` reports once.
    problems : sequence of Problem
        What is wrong with the file itself: columns, row lengths, encoding.
    """

    file: str
    rows: Sequence[dict[str, Any]]
    lines: Sequence[int]
    without: frozenset[str]
    problems: Sequence[Problem]


def read_book(data: bytes, *, shown_as: str, columns: Mapping[str, str], required: Sequence[str]) -> BookFile:
    """Read a CSV book.

    Parameters
    ----------
    data : bytes
        The file's content: UTF-8, a line of column names, then a row a position; blank lines are skipped.
    shown_as : str
        The file as named in messages.
    columns : mapping of str to str
        Known columns and what each holds.
    required : sequence of str
        Columns without which no row can be valid.

    Returns
    -------
    BookFile
        The rows, with everything that is wrong with the file; unknown columns are left out of the rows.
    """
    problems: list[Problem] = []

    def wrong(line: int | None, column: str, message: str, advice: str) -> None:
        problems.append(Problem(shown_as, line, None, column, message, advice))

    def result(rows: Sequence[dict[str, Any]] = (), lines: Sequence[int] = (), without: Sequence[str] = ()) -> BookFile:
        return BookFile(shown_as, rows, lines, frozenset(without), problems)

    try:
        content = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        wrong(data.count(b"\n", 0, error.start) + 1, "", "not UTF-8 text", "save the file as CSV in UTF-8")
        return result()
    rows: list[dict[str, Any]] = []
    lines: list[int] = []
    reader = csv.reader(io.StringIO(content, newline=""), strict=True)
    end = 0
    header: list[str] = []
    lacking: list[str] = []
    try:
        for cells in reader:
            start, end = end + 1, reader.line_num
            cells = [cell.strip() for cell in cells]
            if not any(cells):
                continue
            if not header:
                header = cells
                lacking = _check_header(header, start, columns, required, wrong)
                continue
            if len(cells) > len(header):
                wrong(start, "", f"{len(cells)} cells under {len(header)} columns", "remove cells, or name the columns")
            row: dict[str, Any] = {}
            for name, cell in zip(header, cells, strict=False):
                if name in columns and name not in row and cell:
                    try:
                        # A name of digits stays a name: a cell cannot say by quotes that it is text.
                        row[name] = cell if name == "underlying" else parse_scalar(cell)
                    except BadValueError as bad:
                        wrong(start, name, bad.message, bad.advice)
            rows.append(row)
            lines.append(start)
    except csv.Error as error:
        wrong(reader.line_num, "", f"not CSV ({error})", "close every quote, and put text with a comma in quotes")
        return result()
    if not header:
        wrong(None, "", "the file is empty", f"begin with the columns {', '.join(required)}, quantity")
    elif not rows:
        wrong(None, "", "no position in it", "write a row for each position below the columns")
    return result(rows, lines, lacking)


def _check_header(
    header: Sequence[str],
    line: int,
    columns: Mapping[str, str],
    required: Sequence[str],
    wrong: Callable[[int | None, str, str, str], None],
) -> list[str]:
    meant = set()
    for i, name in enumerate(header):
        if not name:
            wrong(line, "", f"column {i + 1} has no name", "name it, or remove it")
        elif name not in columns:
            message, advice = unknown_key(name, list(columns))
            wrong(line, name, message.replace("key", "column", 1), advice.replace("keys here", "columns", 1))
            meant.add(nearest(name, columns))
        elif name in header[:i]:
            wrong(line, name, f"column {shown(name)} twice", "keep one of the two")
    present = set(header)
    lacking = [name for name in required if name not in present]
    if not {"quantity", "notional"} & present:
        lacking.append("quantity")
    for name in lacking:
        if name not in meant:
            wrong(line, name, "missing column", columns[name])
    return lacking
