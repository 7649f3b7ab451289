"""Reading an experiment file: YAML text to a validated experiment, with the place of every value."""

import hashlib
import os
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from hedgesim.errors import ExperimentError, Problem
from hedgesim.experiment.bookfile import BookFile, read_book
from hedgesim.experiment.fields import Fault, Section, described, faults_of, field_names
from hedgesim.experiment.nodes import KeyPath, Place, Tree, compose, write
from hedgesim.experiment.schema import Experiment, Position
from hedgesim.experiment.values import shown

MOST_BYTES = 64 * 1024 * 1024


@dataclass(frozen=True)
class Source:
    """Where every value of an experiment stands.

    Attributes
    ----------
    file : str
        The experiment file as named in messages.
    places : mapping of tuple to Place
        Place of the value at each path of keys and list indices.
    keys : mapping of tuple to Place
        Place of the key at each path.
    """

    file: str
    places: Mapping[KeyPath, Place] = field(repr=False)
    keys: Mapping[KeyPath, Place] = field(repr=False)

    def problem(self, path: KeyPath, message: str, advice: str = "", *, on_key: bool = False) -> Problem:
        """Word a problem with the value at `path`, or at the nearest enclosing one that was written.

        Parameters
        ----------
        path : tuple of str and int
            Keys and list indices from the top, such as ``("book", 0, "strike")``.
        message : str
            What is wrong.
        advice : str
            What would be right.
        on_key : bool
            Point at the key instead of the value.
        """
        for length in range(len(path), -1, -1):
            place = (self.keys if on_key else self.places).get(path[:length]) or self.places.get(path[:length])
            if place is not None:
                return Problem(place.file, place.line, place.column, dotted(path[place.hidden :]), message, advice)
        return Problem(self.file, None, None, dotted(path), message, advice)


@dataclass(frozen=True)
class Loaded:
    """A validated experiment with its origin.

    Attributes
    ----------
    experiment : Experiment
        The model, defaults filled in.
    source : Source
        Where each value was written, for problems that later stages find.
    path : Path
        The experiment file.
    digest : str
        SHA-256 (hex) of the bytes of the experiment file, of its book file when there is one, and of the overrides.
    """

    experiment: Experiment
    source: Source
    path: Path
    digest: str

    def beside(self, name: str) -> Path:
        """Find a file that the experiment names relative to itself."""
        return self.path.parent / name


def dotted(path: KeyPath) -> str:
    """Write a path of keys as ``book.0.strike``."""
    return ".".join(str(part) for part in path)


def load_experiment(path: str | os.PathLike[str], overrides: Sequence[str] = ()) -> Loaded:
    """Read and validate an experiment file.

    Parameters
    ----------
    path : path-like
        The YAML file.
    overrides : sequence of str
        ``path.to.key=value`` each; the value is YAML, list items are numbered from 0, later ones win.

    Returns
    -------
    Loaded
        The experiment, its source, path and digest.

    Raises
    ------
    ExperimentError
        With every problem found in the file, the overrides and the book file.
    """
    return _Reading(Path(path), overrides).finish()


def dump_experiment(experiment: Experiment, *, price_file: str | None = None) -> str:
    """Write an experiment as YAML that loads to an equal one: defaults written out, the book inline.

    Parameters
    ----------
    experiment : Experiment
        The experiment.
    price_file : str, optional
        Name for the price file in place of the one in the experiment, for a text that will stand in another folder.

    Returns
    -------
    str
        The YAML text.
    """
    data = _plain(experiment)
    if price_file is not None:
        data["paths"]["file"] = price_file
    return write(data)


def _plain(value: Any) -> Any:
    """Turn models into mappings, and durations, strikes and dates into text; options not given are left out."""
    match value:
        case Section():
            fields = {info.alias or name: getattr(value, name) for name, info in type(value).model_fields.items()}
            if fields.get("notional") is not None:
                del fields["multiplier"]
            kept = {key: one for key, one in fields.items() if one is not None or key in ("horizon", "limit")}
            return {key: _plain(one) for key, one in kept.items()}
        case dict():
            return {key: _plain(one) for key, one in value.items()}
        case list() | tuple():
            return [_plain(one) for one in value]
        case None | int() | float() | str():
            return value
    return str(value)


def _content(path: Path) -> tuple[bytes, str]:
    """Read a file, or say why it cannot be read."""
    try:
        if path.stat().st_size > MOST_BYTES:
            return b"", f"is larger than {MOST_BYTES // 2**20} MB"
        return path.read_bytes(), ""
    except OSError as error:
        return b"", f"cannot be read ({(error.strerror or str(error)).lower()})"


class _Reading:
    """The state of one reading: data, places and problems so far."""

    def __init__(self, path: Path, overrides: Sequence[str]) -> None:
        self.path, self.file = path, str(path)
        self.problems: list[Problem] = []
        self.spoilt: set[KeyPath] = set()
        self.book: BookFile | None = None
        self.hash = hashlib.sha256()
        content, reason = _content(self.path)
        if reason:
            raise ExperimentError([Problem(self.file, None, None, "", reason, "name an experiment file")])
        tree = self._compose(content)
        self.data: Any = tree.data
        self.places, self.keys = dict(tree.places), dict(tree.keys)
        self._take(tree)
        if not isinstance(self.data, dict):
            if not self.problems:
                what = "the file is empty" if self.data is None else f"{shown(self.data)} where keys are expected"
                self.problems.append(Problem(self.file, 1, 1, "", what, "begin with title: and market:"))
            raise ExperimentError(self.problems)
        for override in overrides:
            self.hash.update(b"\0set\0" + override.encode(errors="surrogateescape"))
            self._override(override)
        self._inline_book()

    def _compose(self, content: bytes) -> Tree:
        self.hash.update(content)
        try:
            return compose(content.decode("utf-8-sig"), file=self.file)
        except UnicodeDecodeError as error:
            line = content.count(b"\n", 0, error.start) + 1
            column = error.start - content.rfind(b"\n", 0, error.start)
            problem = Problem(self.file, line, column, "", "not UTF-8 text", "save the file in UTF-8")
            raise ExperimentError([problem]) from None

    def _take(self, tree: Tree, at: KeyPath = ()) -> None:
        for path, message, advice, place, unread in tree.faults:
            words = dotted((*at, *path)) if path is not None else ""
            self.problems.append(Problem(place.file, place.line, place.column, words, message, advice))
            if unread:
                self.spoilt.add((*at, *(path or ())))

    def _override(self, override: str) -> None:
        target, equals, written = override.partition("=")
        target = target.strip()
        place = Place(f"--set {target}", None, None)

        def wrong(message: str, advice: str) -> None:
            self.problems.append(Problem(place.file, None, None, target, message, advice))

        if not equals or not target:
            wrong("not path.to.key=value", "write it as --set costs.half_spread=3bp")
            return
        tree = compose(written, file=place.file, here=place)
        found = self._step_into(target.split("."), wrong)
        if found is None:
            return
        container, key, path = found
        for old in [p for p in self.places if p[: len(path)] == path]:
            self.places.pop(old)
            self.keys.pop(old, None)
        self.spoilt = {p for p in self.spoilt if p[: len(path)] != path}
        container[key] = tree.data
        if path == ("book",):
            self.book = None
        self.places.update({(*path, *below): place for below in tree.places} | {path: place})
        self.keys.update({(*path, *below): place for below in tree.keys} | {path: place})
        self._take(tree, path)

    def _step_into(self, words: list[str], wrong: Callable[[str, str], None]) -> tuple[Any, str | int, KeyPath] | None:
        """Walk to the container of the last key; keys that contain dots are matched whole, sections are created."""
        current: Any = self.data
        path: KeyPath = ()
        while True:
            if path == ("book",) and isinstance(current, str):
                self._inline_book()
                current = self.data["book"]
            if isinstance(current, list):
                if not words[0].isdecimal() or int(words[0]) >= len(current):
                    advice = f"items are numbered 0 to {len(current) - 1}" if current else "the list is empty"
                    wrong(f"no item {words[0]!r} in {dotted(path)}", advice)
                    return None
                key: str | int = int(words[0])
                words = words[1:]
            elif isinstance(current, dict):
                taken = next((n for n in range(len(words), 0, -1) if ".".join(words[:n]) in current), 1)
                key, words = ".".join(words[:taken]), words[taken:]
            else:
                wrong(f"{dotted(path)} is {shown(current)}, it has no keys", f"write --set {dotted(path)}=value")
                return None
            path = (*path, key)
            if not words:
                return current, key, path
            if isinstance(current, dict) and current.get(key) is None:
                current[key] = {}
            current = current[key]

    def _inline_book(self) -> None:
        named = self.data.get("book")
        if not isinstance(named, str):
            return
        file = self.path.parent / named
        known = {name: described(Position, name) for name in field_names(Position)}
        content, reason = _content(file)
        if reason:
            wrong = Source(self.file, self.places, self.keys).problem(("book",), f"{file} {reason}", "name a CSV file")
            self.problems.append(wrong)
            self.spoilt.add(("book",))
            self.data["book"] = []
            return
        self.hash.update(b"\0book\0" + content)
        book = read_book(content, shown_as=str(file), columns=known, required=("type", "strike", "expiry"))
        self.book = book
        self.problems.extend(book.problems)
        self.data["book"] = list(book.rows)
        if not book.rows:
            self.spoilt.add(("book",))
        for i, (row, line) in enumerate(zip(book.rows, book.lines, strict=True)):
            self.places[("book", i)] = Place(book.file, line, None, hidden=2)
            self.places.update({("book", i, name): Place(book.file, line, None, hidden=2) for name in row})

    def finish(self) -> Loaded:
        """Validate, and return the experiment or raise everything that is wrong."""
        source = Source(self.file, self.places, self.keys)
        experiment: Experiment | None = None
        try:
            experiment = Experiment.model_validate(self.data)
        except ValidationError as error:
            faults = [fault for fault in faults_of(error) if not self._follows(fault)]
            self.problems.extend(source.problem(f.path, f.message, f.advice, on_key=f.on_key) for f in faults)
        if experiment is not None and experiment.paths.source == "prices":
            file = self.path.parent / experiment.paths.file
            if not file.is_file():
                advice = "name a CSV file, relative to the experiment file"
                self.problems.append(source.problem(("paths", "file"), f"there is no file {file}", advice))
        if self.problems or experiment is None:
            raise ExperimentError(sorted(self.problems, key=self._order))
        return Loaded(experiment, source, self.path, self.hash.hexdigest())

    def _follows(self, fault: Fault) -> bool:
        """Say whether a fault only follows from one that is already reported."""
        if any(fault.path[: len(spoilt)] == spoilt for spoilt in self.spoilt):
            return True
        from_file = self.book is not None and len(fault.path) == 3 and fault.path[0] == "book"
        return from_file and fault.message == "missing" and self.book is not None and fault.path[2] in self.book.without

    def _order(self, problem: Problem) -> tuple[bool, str, int, int]:
        return (problem.file != self.file, problem.file, problem.line or 0, problem.column or 0)
