"""YAML text to plain values, each with its line and column; the parts of YAML that surprise are refused."""

import re
from dataclasses import dataclass, field
from typing import Any, NamedTuple

import yaml

from hedgesim.experiment.values import BadValueError, parse_scalar, shortest

KeyPath = tuple[str | int, ...]
# Escapes such as "\ud83d\ude00" give the two halves of a character, which are no text to Python.
_HALF_CHARACTER = re.compile("[\ud800-\udfff]")
_HALF_ADVICE = ("an escape for half a character", "write the character itself")
MOST_DEPTH = 20
MOST_NODES = 1_000_000


@dataclass(frozen=True)
class Place:
    """Where a value stands: file, and line and column from 1; `hidden` leading parts of its path go unnamed."""

    file: str
    line: int | None
    column: int | None
    hidden: int = 0


class NodeFault(NamedTuple):
    """Something wrong with the text at a path (None: the text as a whole); `unread` when no value was taken there."""

    path: KeyPath | None
    message: str
    advice: str
    place: Place
    unread: bool


@dataclass
class Tree:
    """Values of a YAML document, the places of values and of keys, and what is wrong with the text."""

    data: Any = None
    places: dict[KeyPath, Place] = field(default_factory=dict)
    keys: dict[KeyPath, Place] = field(default_factory=dict)
    faults: list[NodeFault] = field(default_factory=list)


def compose(text: str, *, file: str, here: Place | None = None) -> Tree:
    """Read one YAML document.

    Parameters
    ----------
    text : str
        The document.
    file : str
        The file as named in messages.
    here : Place, optional
        One place for everything, for text that does not come from a file.

    Returns
    -------
    Tree
        Mappings as dict with text keys, sequences as list, scalars by `parse_scalar`; faults found on the way.
    """
    return _Composer(text, file, here).tree


class _StopReading(Exception):  # noqa: N818  (not an error: ends the reading after a fault is noted)
    pass


class _Composer:
    def __init__(self, text: str, file: str, here: Place | None) -> None:
        self.file, self.here, self.tree, self.count = file, here, Tree(), 0
        self.events = yaml.parse(text, Loader=yaml.SafeLoader)
        try:
            self._document()
        except _StopReading:
            self.tree.data = None
        except yaml.MarkedYAMLError as error:
            self.tree.data = None
            mark = error.problem_mark or error.context_mark
            self._fault(None, *_in_words(error), Place(file, mark.line + 1, mark.column + 1) if mark else None)
        except yaml.reader.ReaderError as error:
            self.tree.data = None
            before = text[: error.position]
            place = Place(file, before.count("\n") + 1, error.position - before.rfind("\n"))
            message = f"the character U+{ord(text[error.position]):04X} is not accepted"
            self._fault(None, message, "remove it", place)

    def _fault(
        self, path: KeyPath | None, message: str, advice: str, place: Place | None, *, unread: bool = False
    ) -> None:
        where = self.here or place or Place(self.file, 1, 1)
        self.tree.faults.append(NodeFault(path, message, advice, where, unread or path is None))

    def _place(self, event: Any) -> Place:
        return self.here or Place(self.file, event.start_mark.line + 1, event.start_mark.column + 1)

    def _document(self) -> None:
        next(self.events)
        event = next(self.events)
        if isinstance(event, yaml.StreamEndEvent):
            return
        self.tree.data = self._node(next(self.events), (), None)
        next(self.events)
        event = next(self.events)
        if isinstance(event, yaml.DocumentStartEvent):
            self._fault(None, "a second document", "keep one experiment a file: remove the ---", self._place(event))
            raise _StopReading

    def _node(self, event: Any, path: KeyPath, key: Place | None) -> Any:
        self.count += 1
        place = self._place(event)
        if len(path) > MOST_DEPTH or self.count > MOST_NODES:
            what = "nested too deeply" if len(path) > MOST_DEPTH else "too many values"
            advice = f"an experiment has at most {MOST_DEPTH} levels and {MOST_NODES} values"
            self._fault(None, what, advice, place)
            raise _StopReading
        below = key is not None and place.line != key.line and not isinstance(event, yaml.ScalarEvent)
        self.tree.places[path] = key if key is not None and below else place
        if isinstance(event, yaml.AliasEvent):
            self._fault(path, f"the alias *{event.anchor} is not accepted", "write the value out", place, unread=True)
            return None
        if event.anchor is not None:
            self._fault(path, f"the anchor &{event.anchor} is not accepted", "write the value without it", place)
        if event.tag is not None:
            tag = event.tag.replace("tag:yaml.org,2002:", "!!")
            self._fault(path, f"the tag {tag} is not accepted", "write the value without it", place, unread=True)
        if isinstance(event, yaml.ScalarEvent):
            return self._scalar(event, path, place)
        return self._mapping(path) if isinstance(event, yaml.MappingStartEvent) else self._sequence(path)

    def _scalar(self, event: Any, path: KeyPath, place: Place) -> Any:
        if _HALF_CHARACTER.search(event.value):
            self._fault(path, *_HALF_ADVICE, place, unread=True)
            return None
        if event.style is not None or event.tag is not None:
            return event.value
        try:
            return parse_scalar(event.value)
        except BadValueError as bad:
            self._fault(path, bad.message, bad.advice, place, unread=True)
            return None

    def _sequence(self, path: KeyPath) -> list[Any]:
        items: list[Any] = []
        while not isinstance(event := next(self.events), yaml.SequenceEndEvent):
            items.append(self._node(event, (*path, len(items)), None))
        return items

    def _mapping(self, path: KeyPath) -> dict[str, Any]:
        result: dict[str, Any] = {}
        while not isinstance(event := next(self.events), yaml.MappingEndEvent):
            place = self._place(event)
            if not isinstance(event, yaml.ScalarEvent):
                self._fault(None, "a key must be a word", "write key: value", place)
                raise _StopReading
            name = event.value
            if _HALF_CHARACTER.search(name):
                self._fault(None, *_HALF_ADVICE, place)
                raise _StopReading
            inner = (*path, name)
            if name == "<<" and event.style is None:
                self._fault(inner, "merging with << is not accepted", "write the keys out", place)
                self._skip(next(self.events))
                continue
            if event.tag is not None or event.anchor is not None:
                self._fault(inner, "a tag or an anchor on a key is not accepted", "write the key alone", place)
            if name in result:
                first = self.tree.keys[inner]
                at = f"line {first.line}" if first.line is not None else "here"
                self._fault(inner, f"key {name!r} twice", f"first given on {at}; keep one of the two", place)
                self._skip(next(self.events))
                continue
            self.tree.keys[inner] = place
            result[name] = self._node(next(self.events), inner, place)
        return result

    def _skip(self, event: Any) -> None:
        depth = 0
        while True:
            depth += isinstance(event, yaml.CollectionStartEvent) - isinstance(event, yaml.CollectionEndEvent)
            if depth == 0:
                return
            event = next(self.events)


def _in_words(error: yaml.MarkedYAMLError) -> tuple[str, str]:
    problem = error.problem or "not YAML"
    if "'\\t'" in problem:
        return "a tab where spaces are needed", "indent with spaces"
    if match := re.fullmatch(r"found character '(.)' that cannot start any token", problem):
        return f"a value cannot begin with {match[1]}", "put it in quotes"
    if "mapping values are not allowed" in problem:
        return "a ': ' where no key can stand", "line keys up, write one a line, and put text with a colon in quotes"
    context = f" {error.context}" if error.context else ""
    return f"{problem}{context}", "check indentation, brackets, quotes and the colon after each key"


class _Writer(yaml.SafeDumper):
    # Plain scalars are tagged as text and no resolver looks at them, so PyYAML neither tags nor quotes them by its
    # own (YAML 1.1) rules; _written decides on quotes by the rules that `compose` reads with.
    yaml_implicit_resolvers = {}  # noqa: RUF012

    def ignore_aliases(self, data: Any) -> bool:
        return True


def _written(writer: _Writer, value: Any) -> yaml.ScalarNode:
    if isinstance(value, str):
        quoted = value != value.strip() or not isinstance(parse_scalar(value), str) or value == "<<"
        return writer.represent_scalar("tag:yaml.org,2002:str", value, style='"' if quoted else None)
    text = "null" if value is None else shortest(value) if isinstance(value, float) else str(value)
    return writer.represent_scalar("tag:yaml.org,2002:str", text)


for _kind in (str, int, float, type(None)):
    _Writer.add_representer(_kind, _written)


def write(data: Any) -> str:
    """Write mappings, lists, text, numbers and None as YAML that `compose` reads back to equal values."""
    return yaml.dump(data, Dumper=_Writer, sort_keys=False, allow_unicode=True, width=120, default_flow_style=None)
