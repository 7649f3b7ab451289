"""A study: everything computed over one ledger."""

from dataclasses import dataclass

from hedgesim.engine.ledger import Ledger
from hedgesim.market import Floats, frozen
from hedgesim.schedules import Compiled
from hedgesim.study.breakdown import Breakdown, Variances, breakdown, variances
from hedgesim.study.choice import Choice, choose
from hedgesim.study.distribution import Distribution, distribution
from hedgesim.study.exactness import Exactness
from hedgesim.study.frequency import Frequency, frequency
from hedgesim.study.projection import visible
from hedgesim.study.settings import Settings


class StudyError(ValueError):
    """A ledger that cannot be studied."""


@dataclass(frozen=True)
class Study:
    """Results over one ledger; arrays of all parts are by shown schedule, in the order of `schedules`.

    Attributes
    ----------
    engine : `simulate` or `replay`
    schedules, underlyings : names
    count : paths or inceptions
    settings : what was asked
    distribution, breakdown, variances, frequency, choice : the parts
    trades, turnover : mean number of trades and mean traded notional a path
    delta_mean, delta_p99, day_std, day_worst : what the desk sees between trades, see `Watch`
    warnings : what a reader must know
    exactness : what needs no random numbers, None for price histories
    """

    engine: str
    schedules: tuple[str, ...]
    underlyings: tuple[str, ...]
    count: int
    settings: Settings
    distribution: Distribution
    breakdown: Breakdown
    variances: Variances
    frequency: Frequency
    choice: Choice
    trades: Floats
    turnover: Floats
    delta_mean: Floats
    delta_p99: Floats
    day_std: Floats
    day_worst: Floats
    warnings: tuple[str, ...]
    exactness: Exactness | None = None


def study(ledger: Ledger, schedules: Compiled, settings: Settings, *, exactness: Exactness | None = None) -> Study:
    """Study `ledger`.

    Parameters
    ----------
    ledger : of any engine
    schedules : the time-based rules behind its schedules, matched by name; a schedule without one is not time-based
    settings : what the desk asks
    exactness : of the same ledger and schedules, where there is one

    Raises
    ------
    StudyError
        when the ledger holds no schedule to show
    """
    shown = visible(ledger, settings.hidden)
    if len(shown) == 0:
        raise StudyError("the ledger holds no schedule to show - list at least one schedule")
    figures = distribution(ledger, shown)
    spread = variances(ledger, shown)
    law = frequency(ledger, shown, spread, compiled=schedules, settings=settings)
    choice = choose(ledger, shown, figures, settings)
    warnings = list(choice.warnings)
    if law.law is not None and law.law.misfit:
        warnings.append(
            "at this precision the variances bend away from a single power of the number of trades, which holds for "
            "many trades only: the error of the exponent is widened"
        )
    return Study(
        engine=ledger.engine,
        schedules=tuple(ledger.schedules[i] for i in shown),
        underlyings=ledger.underlyings,
        count=ledger.count,
        settings=settings,
        distribution=figures,
        breakdown=breakdown(ledger, shown),
        variances=spread,
        frequency=law,
        choice=choice,
        trades=frozen(ledger.trades[shown]),
        turnover=frozen(ledger.turnover[shown]),
        delta_mean=frozen(ledger.watch.delta_mean[shown]),
        delta_p99=frozen(ledger.watch.delta_p99[shown]),
        day_std=frozen(ledger.watch.day_std[shown]),
        day_worst=frozen(ledger.watch.day_worst[shown]),
        warnings=tuple(warnings),
        exactness=exactness,
    )
