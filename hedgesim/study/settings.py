"""What the desk asks of a study."""

from dataclasses import dataclass
from typing import Literal

MeanKind = Literal["costs", "total"]
RiskKind = Literal["std", "variance", "es975"]


@dataclass(frozen=True)
class Settings:
    """How schedules are compared.

    Attributes
    ----------
    mean : `costs`: the price of a schedule is its mean costs and funding; `total`: minus its mean total P&L
    risk : `std` or `variance` of the total P&L, or `es975`, the mean of its worst 2.5 % as a positive loss
    cost_of_risk : expected P&L that the desk gives up to be rid of one unit of risk over the life of the book
    limit : largest risk allowed, in the unit of the risk, or None
    confidence : level of intervals and of the tied set, between 0 and 1
    years : calendar years of the life of the book
    currency : code printed before amounts of money, or empty
    hidden : schedules that the engine added only for reference; they appear in no result
    equal_looks : all looks are equally long in variance years, which the asymptotic law needs
    tolerance : of the exact engine, relative to the standard deviation of the P&L
    """

    mean: MeanKind
    risk: RiskKind
    cost_of_risk: float
    limit: float | None
    confidence: float
    years: float
    currency: str = ""
    hidden: tuple[str, ...] = ()
    equal_looks: bool = True
    tolerance: float = 1e-6
