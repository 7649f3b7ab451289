"""What can go wrong, in words the person at the keyboard can act on."""

from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong in an input file or on the command line.

    Attributes
    ----------
    file : str
        File as the user named it, or ``--set path.to.key`` for a value given on the command line.
    line, column : int or None
        Position counted from 1; None where there is none (a missing file, the command line, the cells of a CSV row).
    path : str
        Dotted path of the key, such as ``book.0.strike``; for a CSV book the column name; empty for the whole file.
    message : str
        What is wrong.
    advice : str
        What would be right; may be empty.
    """

    file: str
    line: int | None
    column: int | None
    path: str
    message: str
    advice: str = ""

    def __str__(self) -> str:
        """Write the problem as ``file:line:column: path: what is wrong - what would be right``."""
        place = ":".join([self.file, *(str(n) for n in (self.line, self.column) if n is not None)])
        already_named = self.file == f"--set {self.path}"
        where = place if already_named or not self.path else f"{place}: {self.path}"
        return f"{where}: {self.message} - {self.advice}" if self.advice else f"{where}: {self.message}"


class ExperimentError(Exception):
    """An experiment, or a file it names, is wrong; nothing has been run or written.

    Parameters
    ----------
    problems : sequence of Problem
        Every problem found, in the order in which they are to be shown.
    """

    def __init__(self, problems: Sequence[Problem]) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class RunError(Exception):
    """A valid experiment could not be carried out; the message says why and what to do."""
