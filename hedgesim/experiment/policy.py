"""What the desk decides: hedge, schedules, costs, study and report of the experiment file, as frozen models."""

from collections.abc import Mapping
from typing import Annotated, Any, Literal, Self, cast

from pydantic import Field, ValidationError, model_validator

from hedgesim.experiment.fields import (
    DURATION_JSON,
    NAME,
    Fault,
    Read,
    Section,
    number,
    per_underlying,
    raise_faults,
    text,
    unknown_key,
    unknown_value,
)
from hedgesim.experiment.values import BadValueError, Duration, parse_duration, shown

_Name = Annotated[str, NAME]
_VOL = number(above=0, most=5, percent=True)


def _read_hedge_vol(value: Any) -> float | str:
    if value in ("mark", "realised"):
        return str(value)
    if isinstance(value, str) and not value[:1].isdigit():
        message, advice = unknown_value(value, ["mark", "realised"])
        raise BadValueError(
            message, advice if advice.startswith("did") else "write mark, realised or a vol such as 20%"
        )
    return cast(float, _VOL.read(value))


class Hedge(Section):
    """What the delta is computed at and what is held at the start."""

    vol: Annotated[
        float | Literal["mark", "realised"],
        Read(_read_hedge_vol, {"anyOf": [{"enum": ["mark", "realised"]}, *_VOL.json["anyOf"]]}),
    ] = Field(
        default="mark", description="mark, realised or a vol a year, for every option without a hedge_vol of its own"
    )
    initial: Annotated[float | dict[str, float], per_underlying(number())] = Field(
        default=0.0, description="units of the underlying already held; one value or a value for each underlying"
    )
    remark: Literal["inception", "daily"] = Field(
        default="inception", description="when the hedge vol is taken from the mark_vol series: at inception, or daily"
    )


_LABEL = text(most=60)


class _Named(Section):
    name: Annotated[str, _LABEL] = Field(
        default="", description="name in the report; default the rule in words, as every 1h"
    )

    def default_name(self) -> str:
        """Say the rule in words."""
        raise NotImplementedError

    @model_validator(mode="after")
    def _give_name(self) -> Self:
        if not self.name:
            # A frozen model only refuses assignment from outside; here it is still being built.
            object.__setattr__(self, "name", self.default_name())
        return self


class Every(_Named):
    """Trade at equal intervals counted from the inception, or never again after the entry."""

    every: Annotated[
        Duration | Literal["never"],
        Read(
            lambda value: value if value == "never" else parse_duration(value, looks=True),
            {"anyOf": [{"const": "never"}, *DURATION_JSON["anyOf"]]},
        ),
    ] = Field(description="a duration, a number of looks such as 4 looks, or never")

    def default_name(self) -> str:
        """Say the rule in words."""
        return "entry only" if self.every == "never" else f"every {self.every}"


def _read_moments(value: Any) -> tuple[str, ...]:
    if not isinstance(value, list | tuple) or not value:
        raise BadValueError(f"{shown(value)} is not a list of moments", "write [open], [close] or [open, close]")
    for moment in value:
        if moment not in ("open", "close"):
            raise BadValueError(*unknown_value(moment, ["open", "close"]))
    if len(set(value)) < len(value):
        raise BadValueError("a moment is given twice", "write [open], [close] or [open, close]")
    return tuple(moment for moment in ("open", "close") if moment in value)


class At(_Named):
    """Trade at the open, at the close, or at both, of each trading day."""

    at: Annotated[
        tuple[Literal["open", "close"], ...],
        Read(
            _read_moments,
            {"type": "array", "minItems": 1, "uniqueItems": True, "items": {"enum": ["open", "close"]}},
        ),
    ] = Field(description="[open], [close] or [open, close] of each trading day")

    def default_name(self) -> str:
        """Say the rule in words."""
        return f"at {' and '.join(self.at)}"


class Trades(_Named):
    """Trade a number of times, equally spaced over the life."""

    trades: Annotated[int, number(least=1, most=10**7, whole=True)] = Field(
        description="number of trades, equally spaced over the life"
    )

    def default_name(self) -> str:
        """Say the rule in words."""
        return f"{self.trades} trade{'' if self.trades == 1 else 's'}"


Schedule = Every | At | Trades
_RULES: dict[str, type[Every] | type[At] | type[Trades]] = {"every": Every, "at": At, "trades": Trades}
_RULE_ADVICE = "write {every: 1h}, {at: [open, close]} or {trades: 12}"


def read_schedule(value: Any) -> Schedule:
    """Read a schedule by the one rule it has.

    Raises
    ------
    ValidationError
        When it has no rule, several, or faults.
    """
    if isinstance(value, Every | At | Trades):
        return value
    if not isinstance(value, Mapping):
        raise_faults("schedule", [Fault((), f"{shown(value)} is not a schedule", _RULE_ADVICE)])
    rules = [key for key in value if key in _RULES]
    if len(rules) > 1:
        raise_faults("schedule", [Fault((), f"has {' and '.join(rules)}", "keep one: make a schedule of each")])
    if rules:
        return _RULES[rules[0]].model_validate(value)
    unknown = [key for key in value if key != "name"]
    if not unknown:
        raise_faults("schedule", [Fault((), "has no rule", _RULE_ADVICE)])
    raise_faults("schedule", [Fault((key,), *unknown_key(key, [*_RULES, "name"]), on_key=True) for key in unknown])


class CostTerms(Section):
    """What a trade costs; all in the market's currency and at or above zero."""

    half_spread: Annotated[float, number(least=0, below=1, percent=True, such_as="2bp")] = Field(
        default=0.0, description="half the bid-offer spread, a fraction of the traded notional"
    )
    per_unit: Annotated[float, number(least=0)] = Field(
        default=0.0, description="currency per unit of the underlying traded"
    )
    per_trade: Annotated[float, number(least=0)] = Field(default=0.0, description="currency per ticket")


class Costs(CostTerms):
    """Costs of trading, with other terms for single underlyings."""

    by_underlying: dict[_Name, CostTerms] = Field(
        default_factory=dict, description="other terms for single underlyings; a term left out is as for all"
    )

    @classmethod
    def prepared(cls, data: Mapping[str, Any]) -> Mapping[str, Any]:
        """Give each underlying the general terms that it does not replace."""
        others = data.get("by_underlying")
        if not isinstance(others, Mapping):
            return data
        general = {key: data[key] for key in CostTerms.model_fields if data.get(key) is not None}
        try:
            CostTerms.model_validate(general)
        except ValidationError:
            return data  # the general terms report their own faults, once
        filled = {name: general | dict(own) if isinstance(own, Mapping) else own for name, own in others.items()}
        return {**data, "by_underlying": filled}

    def of(self, name: str) -> CostTerms:
        """Give the terms that hold for an underlying."""
        general = CostTerms(half_spread=self.half_spread, per_unit=self.per_unit, per_trade=self.per_trade)
        return self.by_underlying.get(name, general)


class Study(Section):
    """How schedules are compared."""

    mean: Literal["costs", "total"] = Field(
        default="costs", description="what mean is weighed against risk: costs or total"
    )
    risk: Literal["std", "variance", "es975"] = Field(
        default="std", description="std, variance, or es975: mean of the worst 2.5% as a positive loss"
    )
    cost_of_risk: Annotated[float, number(least=0)] = Field(
        default=0.5, description="currency of mean given up for one unit of risk"
    )
    limit: Annotated[float, number(above=0)] | None = Field(
        default=None, description="largest risk allowed, or null for none"
    )
    confidence: Annotated[float, number(above=0.5, below=1, percent=True, such_as="95%")] = Field(
        default=0.95, description="confidence of intervals and of the choice"
    )
    tolerance: Annotated[float, number(least=1e-10, most=1e-2, such_as="1e-6")] = Field(
        default=1e-6, description="of the exact engine, a fraction of the standard deviation of P&L"
    )


class Report(Section):
    """How the report is written."""

    currency: Annotated[str, text(pattern="[A-Z]{3}", advice="write three capital letters, such as EUR")] = Field(
        default="EUR", description="three-letter code of the currency that amounts are in"
    )
