"""How one field of the experiment is read, and how everything wrong with a section is told at once."""

import difflib
import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple, NoReturn, Self

from pydantic import (
    BaseModel,
    ConfigDict,
    GetCoreSchemaHandler,
    GetJsonSchemaHandler,
    ModelWrapValidatorHandler,
    ValidationError,
    model_validator,
)
from pydantic_core import CoreSchema, InitErrorDetails, PydanticCustomError, core_schema

from hedgesim.experiment import values
from hedgesim.experiment.nodes import KeyPath
from hedgesim.experiment.values import BadValueError, shown

_KIND = "experiment_fault"
DURATION_JSON: dict[str, Any] = {
    "anyOf": [
        {"type": "number", "exclusiveMinimum": 0},
        {"type": "string", "pattern": r"^[0-9.]+([eE][-+]?[0-9]+)?\s*((min|h|d|w|y|looks?)|/\s*[0-9.]+)$"},
    ]
}
_PERCENT_JSON = {"type": "string", "pattern": r"^[-+]?(\.[0-9]+|[0-9][0-9_]*(\.[0-9]*)?)([eE][-+]?[0-9]+)?\s*(%|bp)$"}


class Fault(NamedTuple):
    """Something wrong at a path below a section; `on_key` when the key rather than its value is wrong."""

    path: KeyPath
    message: str
    advice: str
    on_key: bool = False


def raise_faults(title: str, faults: Iterable[Fault]) -> NoReturn:
    """Raise all `faults` as one pydantic ValidationError, which an enclosing section merges with its own."""
    lines = [
        InitErrorDetails(
            type=PydanticCustomError(
                _KIND, "{message} - {advice}", {"message": f.message, "advice": f.advice, "on_key": f.on_key}
            ),
            loc=f.path,
            input=None,
        )
        for f in faults
    ]
    raise ValidationError.from_exception_data(title, lines)


def faults_of(error: ValidationError, section: type[BaseModel] | None = None) -> list[Fault]:
    """Put the errors of one section into words a trader reads."""
    faults = []
    for detail in error.errors(include_url=False):
        path = detail["loc"]
        on_key = bool(path) and path[-1] == "[key]"
        path = path[:-1] if on_key else path
        if detail["type"] == _KIND:
            context = detail["ctx"]
            faults.append(Fault(path, context["message"], context["advice"], on_key or context["on_key"]))
        else:
            message, advice, unknown = _in_words(detail, path, section)
            faults.append(Fault(path, message, advice, on_key or unknown))
    mistyped = {nearest(str(f.path[-1]), field_names(section)) for f in faults if f.on_key and len(f.path) == 1}
    return [f for f in faults if not (f.message == "missing" and len(f.path) == 1 and f.path[0] in mistyped)]


def _in_words(detail: Any, path: KeyPath, section: type[BaseModel] | None) -> tuple[str, str, bool]:
    value, kind = detail["input"], detail["type"]
    key = str(path[-1]) if path else ""
    if kind == "extra_forbidden":
        return (*unknown_key(key, field_names(section)), True)
    if kind == "missing":
        return "missing", described(section, key), False
    if kind == "literal_error":
        choices = re.findall(r"'([^']*)'", detail["ctx"]["expected"])
        return (*unknown_value(value, choices), False)
    if value is None:
        return "empty", "give a value or delete the line", False
    if kind in ("model_type", "model_attributes_type", "dict_type", "mapping_type"):
        return f"{shown(value)} where keys are expected", "write key: value below it", False
    if kind in ("list_type", "tuple_type"):
        return f"{shown(value)} where a list is expected", "write one item a line, each after a dash", False
    if kind == "too_short":
        return "nothing in it", described(section, key), False
    return f"{shown(value)}: {detail['msg'].lower()}", described(section, key), False


def nearest(word: str, known: Iterable[str]) -> str | None:
    """Find the known word closest to `word`, or None when none is close."""
    by_folded = {name.lower(): name for name in known}
    found = difflib.get_close_matches(word.lower(), by_folded, n=1, cutoff=0.6)
    return by_folded[found[0]] if found else None


def unknown_key(key: str, known: Sequence[str]) -> tuple[str, str]:
    """Word the message and the advice for a key that does not exist."""
    close = nearest(key, known)
    return f"unknown key {key!r}", f"did you mean {close!r}?" if close else f"the keys here are {', '.join(known)}"


def unknown_name(name: str, known: Sequence[str]) -> tuple[str, str]:
    """Word the message and the advice for an underlying that the market does not have."""
    close = nearest(name, known)
    message = f"unknown underlying {name!r}"
    if not known:
        return message, "define it under market.underlyings"
    return message, f"did you mean {close!r}?" if close else f"market.underlyings has {', '.join(known)}"


def unknown_value(value: object, choices: Sequence[str]) -> tuple[str, str]:
    """Word the message and the advice for a value outside a list of choices."""
    close = nearest(value, choices) if isinstance(value, str) else None
    advice = f"did you mean {close!r}?" if close else f"write {' or '.join(choices)}"
    return ("empty" if value is None else f"unknown value {shown(value)}"), advice


def field_names(section: type[BaseModel] | None) -> list[str]:
    """Name the keys of a section as the experiment file has them."""
    if section is None:
        return []
    return [field.alias or name for name, field in section.model_fields.items()]


def described(section: type[BaseModel] | None, key: str) -> str:
    """Give the description of a key of a section, or nothing."""
    if section is None:
        return ""
    return next((f.description or "" for name, f in section.model_fields.items() if (f.alias or name) == key), "")


class Section(BaseModel):
    """A mapping of the experiment file: strict, closed and frozen; everything wrong in it is reported together."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, allow_inf_nan=False)

    @classmethod
    def prepared(cls, data: Mapping[str, Any]) -> Mapping[str, Any]:
        """Fill in what follows from the rest of the section before it is validated."""
        return data

    @classmethod
    def more_faults(cls, data: Mapping[str, Any], given: frozenset[str], section: Self | None) -> Iterable[Fault]:
        """Find faults that concern several keys.

        Parameters
        ----------
        data : mapping
            The section as read.
        given : frozenset of str
            Keys with a value, known keys that a mistyped key resembles included.
        section : Section or None
            The validated section; None when a field of it is wrong.
        """
        return ()

    @model_validator(mode="wrap")
    @classmethod
    def _report_together(cls, data: Any, handler: ModelWrapValidatorHandler[Self]) -> Self:
        if isinstance(data, cls):
            return handler(data)
        section, faults = None, []
        if isinstance(data, Mapping):
            data = cls.prepared(data)
        try:
            section = handler(data)
        except ValidationError as error:
            faults = faults_of(error, cls)
        if isinstance(data, Mapping):
            known = field_names(cls)
            given = {key for key, value in data.items() if value is not None}
            given |= {close for key in given.difference(known) if (close := nearest(key, known))}
            faults.extend(cls.more_faults(data, frozenset(given), section))
        if faults or section is None:
            raise_faults(cls.__name__, faults)
        return section


@dataclass(frozen=True, eq=False)
class Read:
    """Annotation of a field that a function of `values` reads; `json` is its JSON schema."""

    read: Callable[[Any], object]
    json: Mapping[str, Any]

    def __call__(self, value: Any) -> Any:
        """Read a value, turning a BadValueError into an error pydantic collects."""
        try:
            return self.read(value)
        except BadValueError as problem:
            raise PydanticCustomError(
                _KIND,
                "{message} - {advice}",
                {"message": problem.message, "advice": problem.advice, "on_key": False},
            ) from None

    def __get_pydantic_core_schema__(self, source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
        """Validate by `read` alone."""
        # Durations, strikes and dates are written as text; pydantic would write out their attributes.
        as_written = core_schema.plain_serializer_function_ser_schema(
            lambda value: value if isinstance(value, int | float | str | dict | tuple) else str(value)
        )
        return core_schema.no_info_plain_validator_function(self, serialization=as_written)

    def __get_pydantic_json_schema__(self, schema: CoreSchema, handler: GetJsonSchemaHandler) -> dict[str, Any]:
        """Give the JSON schema of what `read` accepts."""
        return dict(self.json)


def number(
    *,
    above: float | None = None,
    least: float | None = None,
    below: float | None = None,
    most: float | None = None,
    percent: bool = False,
    whole: bool = False,
    nonzero: bool = False,
    such_as: str = "22%",
) -> Read:
    """Annotate a numeric field with its bounds.

    Parameters
    ----------
    above, least : float, optional
        Lower bound, excluded or included.
    below, most : float, optional
        Upper bound, excluded or included.
    percent : bool
        Whether percentages and basis points are accepted.
    whole : bool
        Whether the number must be whole.
    nonzero : bool
        Whether zero is refused.
    such_as : str
        How a percentage would be written here; its unit is used when a bare number looks like one.
    """
    low, high = (above if above is not None else least), (below if below is not None else most)

    def written(bound: float) -> str:
        return str(bound) if isinstance(bound, int) else values.shortest(bound)

    def words() -> str:
        parts = []
        if low is not None:
            parts.append(f"{'above' if above is not None else 'of at least'} {written(low)}")
        if high is not None:
            parts.append(f"{'below' if below is not None else 'at most'} {written(high)}")
        return " and ".join(parts)

    def inside(x: float) -> bool:
        return not (
            (above is not None and x <= above)
            or (least is not None and x < least)
            or (below is not None and x >= below)
            or (most is not None and x > most)
        )

    def read(value: Any) -> float:
        x = (
            values.parse_whole(value)
            if whole
            else values.parse_fraction(value)
            if percent
            else values.parse_number(value)
        )
        if nonzero and x == 0:
            raise BadValueError("0 is not accepted", "write a number other than 0")
        if inside(x):
            return x
        unit, per_one, name = ("bp", 10_000, "basis points") if such_as.endswith("bp") else ("%", 100, "a percentage")
        if percent and not isinstance(value, str) and abs(x) > 1 and inside(x / per_one):
            raise BadValueError(f"{shown(value)} looks like {name}", f"write {shown(value)}{unit}")
        as_written = value if isinstance(value, str) else shown(value)
        example = f", such as {such_as}" if percent else ""
        kind = "whole number" if whole else "number"
        raise BadValueError(f"{as_written} is out of range", f"write a {kind} {words()}{example}")

    bounds = {"exclusiveMinimum": above, "minimum": least, "exclusiveMaximum": below, "maximum": most}
    json: dict[str, Any] = {"type": "integer" if whole else "number"}
    json |= {key: bound for key, bound in bounds.items() if bound is not None}
    if nonzero:
        json["not"] = {"const": 0}
    return Read(read, {"anyOf": [json, _PERCENT_JSON]} if percent else json)


def per_underlying(item: Read) -> Read:
    """Annotate a field that is one value, or a mapping of one value per underlying."""

    def read(value: Any) -> Any:
        if not isinstance(value, Mapping):
            return item(value)
        faults, result = [], {}
        for name, one in value.items():
            try:
                result[name] = item.read(one)
            except BadValueError as problem:
                faults.append(Fault((name,), problem.message, problem.advice))
        if not value:
            faults.append(Fault((), "no underlying in it", "write one value for all, or a value for each underlying"))
        if faults:
            raise_faults("per underlying", faults)
        return result

    return Read(read, {"anyOf": [dict(item.json), {"type": "object", "additionalProperties": dict(item.json)}]})


def text(*, most: int = 200, pattern: str = "", advice: str = "") -> Read:
    """Annotate a field that is one line of text."""

    def read(value: Any) -> str:
        if value is None:
            raise BadValueError("empty", "give a text or delete the line")
        if not isinstance(value, str):
            raise BadValueError(
                f"{shown(value)} is not text", "write text; put it in quotes when it looks like a number"
            )
        if not value.strip() or not value.isprintable() or len(value) > most:
            raise BadValueError(f"{shown(value)} is not a line of text", f"write 1 to {most} printable characters")
        if pattern and not re.fullmatch(pattern, value):
            raise BadValueError(f"{shown(value)} is not accepted", advice)
        return value

    return Read(
        read,
        {"type": "string", "minLength": 1, "maxLength": most} | ({"pattern": f"^(?:{pattern})$"} if pattern else {}),
    )


_NAME_TEXT = text(
    most=64,
    pattern=r"(?!all$)[^\W_][\w.&/-]*",
    advice="write letters, digits and . & / - _, beginning with a letter or digit; 'all' is taken",
)
# Without the pattern, so that editors take any name as a key of a mapping of underlyings.
NAME = Read(_NAME_TEXT.read, {"type": "string", "minLength": 1, "maxLength": 64})


@dataclass(frozen=True, eq=False)
class OrJson:
    """Annotation of a field whose short form has its own JSON schema beside the long one."""

    short: Mapping[str, Any]

    def __get_pydantic_json_schema__(self, schema: CoreSchema, handler: GetJsonSchemaHandler) -> dict[str, Any]:
        """Give the long form or the short form."""
        return {"anyOf": [handler(schema), dict(self.short)]}
