"""The price of risk: which schedule to run, what finer trading pays for, and how sure the choice is."""

from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from hedgesim.engine.ledger import Ledger
from hedgesim.market import Flags, Floats, Ints, frozen
from hedgesim.study.distribution import Distribution, shortfall_error_covariance
from hedgesim.study.projection import critical_value, error_covariance, members, project, weights
from hedgesim.study.settings import Settings

ES975_SHARE = 0.025
ONE_LIFE = "one life gives no distribution: no risk, no errors, and no choice between the schedules"


@dataclass(frozen=True)
class Estimates:
    """Mean cost and risk of every schedule with their joint error.

    Attributes
    ----------
    mean_cost, risk : by schedule
    covariance : (2 schedule, 2 schedule) of the errors, mean costs first, then risks
    joint : false when the covariance between the errors of mean costs and of risks is unknown; standard errors of
        combinations are then the sum of both parts, an upper bound
    """

    mean_cost: Floats
    risk: Floats
    covariance: Floats
    joint: bool

    def standard_error(self, on_cost: Floats, on_risk: Floats) -> float:
        """Standard error of on_cost . mean_cost + on_risk . risk."""
        n = len(self.mean_cost)
        if self.joint:
            both = np.concatenate([on_cost, on_risk])
            return float(np.sqrt(np.maximum(both @ self.covariance @ both, 0.0)))
        parts = (on_cost @ self.covariance[:n, :n] @ on_cost, on_risk @ self.covariance[n:, n:] @ on_risk)
        return float(sum(np.sqrt(np.maximum(parts, 0.0))))


@dataclass(frozen=True)
class Choice:
    """Schedules compared by mean cost + cost_of_risk x risk; arrays are by schedule.

    Attributes
    ----------
    mean_cost, mean_cost_se, risk, risk_se, objective, objective_se : figures and standard errors
    difference, difference_se : objective less that of the chosen schedule, with the paired standard error
    within_limit : risk at or below the limit; all true without a limit
    tied : cannot be told from the chosen schedule. Among the schedules within the limit (all of them when none is) the
        tied set holds the best with at least the stated confidence: each difference is held to a one-sided test at
        (1 - confidence) / (schedules - 1), after Gupta (1965, Technometrics 7, from memory) with Bonferroni's bound.
        Which schedules are within the limit is taken as estimated
    efficient : no schedule has less of mean cost or of risk without more of the other
    supported : best at some cost of risk
    next_finer : index of the efficient schedule with the next smaller risk, -1 where there is none
    price, price_se : extra mean cost per unit of risk removed by going there, nan where there is none
    best_from, best_to : the schedule is best at costs of risk between these, nan when not supported
    critical : standard errors that a difference must exceed to leave the tied set
    comparable : false with a single life, which has no risk: then nothing is chosen, and `chosen` is the schedule that
        trades most, as an example
    chosen : index of the best schedule within the limit; the one of least risk when none is
    limit_met : some schedule is within the limit, or there is none to meet
    warnings : what a reader of the choice must know
    """

    mean_cost: Floats
    mean_cost_se: Floats
    risk: Floats
    risk_se: Floats
    objective: Floats
    objective_se: Floats
    difference: Floats
    difference_se: Floats
    within_limit: Flags
    tied: Flags
    efficient: Flags
    supported: Flags
    next_finer: Ints
    price: Floats
    price_se: Floats
    best_from: Floats
    best_to: Floats
    critical: float
    comparable: bool
    chosen: int
    limit_met: bool
    warnings: tuple[str, ...]


def estimates(ledger: Ledger, schedules: Ints, distribution: Distribution, settings: Settings) -> Estimates:
    """Mean cost and risk of the schedules with indices `schedules`, with the joint covariance of their errors.

    Errors come from the resamples of the ledger; those of an es975 over independent paths from the influence of each
    path on it, with the mean cost of each path beside it where the ledger kept it.
    """
    source = "charges" if settings.mean == "costs" else "total"
    projection = project(ledger, weights(ledger, (source, "total")))
    mean_cost = -projection.mean[schedules, 0]
    resampled_cost = -projection.resampled_mean[:, schedules, 0]
    joint = True
    if settings.risk != "es975":
        variance = np.maximum(projection.cov[schedules, 1, 1], 0.0)
        resampled = np.maximum(projection.resampled_cov[:, schedules, 1, 1], 0.0)
        if settings.risk == "std":
            variance, resampled = np.sqrt(variance), np.sqrt(resampled)
        risk = variance
        covariance = error_covariance(ledger.replicates, np.concatenate([resampled_cost, resampled], axis=1))
    elif distribution.resampled_es975 is not None:
        risk = distribution.es975
        stacked = np.concatenate([resampled_cost, distribution.resampled_es975], axis=1)
        covariance = error_covariance(ledger.replicates, stacked)
    else:
        risk = distribution.es975
        per_path = _cost_by_path(ledger, schedules, source)
        joint = per_path is not None
        # Indexing copies, and totals may fill much of the memory.
        totals = ledger.totals if len(schedules) == len(ledger.totals) else ledger.totals[schedules]
        no_rows = np.empty((0, totals.shape[1]))
        covariance = shortfall_error_covariance(totals, ES975_SHARE, no_rows if per_path is None else per_path)
        if per_path is None:
            n = len(schedules)
            whole = np.zeros((2 * n, 2 * n))
            whole[:n, :n] = error_covariance(ledger.replicates, resampled_cost)
            whole[n:, n:] = covariance
            covariance = whole
    return Estimates(mean_cost=frozen(mean_cost), risk=frozen(risk), covariance=frozen(covariance), joint=joint)


def _cost_by_path(ledger: Ledger, schedules: Ints, source: str) -> Floats | None:
    if source == "total":
        return -ledger.totals[schedules]
    if ledger.detail is None:
        return None
    wanted = [c for c, name in enumerate(ledger.components) if name in members(ledger, source)]
    return np.asarray(-ledger.detail[schedules][:, :, wanted].sum(axis=(1, 2)))


def choose(ledger: Ledger, schedules: Ints, distribution: Distribution, settings: Settings) -> Choice:
    """Compare the schedules with indices `schedules` at the settings' cost of risk and limit."""
    figures = estimates(ledger, schedules, distribution, settings)
    comparable = ledger.count > 1
    if not comparable:
        figures = replace(figures, risk=frozen(np.full(len(schedules), np.nan)))
    n = len(schedules)
    unit, none = np.eye(n), np.zeros(n)
    cost_of_risk = settings.cost_of_risk
    objective = figures.mean_cost + cost_of_risk * figures.risk
    limit = settings.limit if comparable else None
    within = np.ones(n, dtype=bool) if limit is None else figures.risk <= limit
    limit_met = bool(within.any())
    candidates = np.flatnonzero(within) if limit_met else np.arange(n)
    # When none meets the limit, the choice and its ties are about risk alone.
    on_cost, on_risk = (1.0, cost_of_risk) if limit_met else (0.0, 1.0)
    score = on_cost * figures.mean_cost + on_risk * figures.risk
    chosen = int(candidates[np.argmin(score[candidates])]) if comparable else int(np.argmax(ledger.trades[schedules]))
    critical = critical_value(ledger.replicates, (1.0 - settings.confidence) / max(1, len(candidates) - 1))
    contrasts = unit - unit[chosen]
    tied = np.zeros(n, dtype=bool)
    for i in candidates:
        error = figures.standard_error(on_cost * contrasts[i], on_risk * contrasts[i])
        # An unknown error tells nothing apart.
        tied[i] = not score[i] - score[chosen] > critical * error
    efficient = _efficient(figures)
    supported, best_from, best_to = _supported(figures, efficient)
    next_finer, price, price_se = _prices(figures, efficient)
    risk_se = np.array([figures.standard_error(none, row) for row in unit])
    unknown = bool(np.isnan(risk_se).any())
    warnings: tuple[str, ...] = (ONE_LIFE,)
    if comparable:
        warnings = _warnings(settings, figures.risk, risk_se, critical, limit_met, unknown)
    return Choice(
        mean_cost=figures.mean_cost,
        mean_cost_se=frozen([figures.standard_error(row, none) for row in unit]),
        risk=figures.risk,
        risk_se=frozen(risk_se),
        objective=frozen(objective),
        objective_se=frozen([figures.standard_error(row, cost_of_risk * row) for row in unit]),
        difference=frozen(objective - objective[chosen]),
        difference_se=frozen([figures.standard_error(row, cost_of_risk * row) for row in contrasts]),
        within_limit=frozen(within, bool),
        tied=frozen(tied, bool),
        efficient=frozen(efficient, bool),
        supported=frozen(supported, bool),
        next_finer=frozen(next_finer, np.int64),
        price=frozen(price),
        price_se=frozen(price_se),
        best_from=frozen(best_from),
        best_to=frozen(best_to),
        critical=critical,
        comparable=comparable,
        chosen=chosen,
        limit_met=limit_met,
        warnings=warnings,
    )


def annual_hurdle(settings: Settings) -> float:
    """Annual return-to-risk ratio that a cost of risk over the life stands for; nan when the risk is a variance.

    A strategy that earns m a year at a risk of s times the square root of the years has, over T years, the ratio
    m T / (s sqrt(T)) = (m / s) sqrt(T). Hence cost_of_risk over the life = annual hurdle x sqrt(years), and this
    function returns cost_of_risk / sqrt(years).
    """
    if settings.risk == "variance" or settings.years <= 0.0:
        return float("nan")
    return settings.cost_of_risk / float(np.sqrt(settings.years))


def _efficient(figures: Estimates) -> Flags:
    """Not dominated; of schedules equal in both figures the first stands for all."""
    flags = np.zeros(len(figures.risk), dtype=bool)
    least = np.inf
    for i in np.lexsort((figures.risk, figures.mean_cost)):
        if figures.risk[i] < least:
            flags[i], least = True, figures.risk[i]
    return flags


def _by_falling_risk(figures: Estimates, efficient: Flags) -> list[int]:
    return [int(i) for i in np.argsort(-figures.risk, kind="stable") if efficient[i]]


def _supported(figures: Estimates, efficient: Flags) -> tuple[Flags, Floats, Floats]:
    """Corners of the lower convex hull and the costs of risk between which each is best."""
    n = len(figures.risk)
    hull: list[int] = []
    prices: list[float] = []
    for i in _by_falling_risk(figures, efficient):
        price = 0.0
        while hull:
            price = float(
                (figures.mean_cost[i] - figures.mean_cost[hull[-1]]) / (figures.risk[hull[-1]] - figures.risk[i])
            )
            if len(hull) == 1 or price > prices[-1]:
                break
            hull.pop()
            prices.pop()
        hull.append(i)
        prices.append(price)
    flags, low, high = np.zeros(n, dtype=bool), np.full(n, np.nan), np.full(n, np.nan)
    flags[hull] = True
    low[hull] = prices
    high[hull] = [*prices[1:], np.inf]
    return flags, low, high


def _prices(figures: Estimates, efficient: Flags) -> tuple[Ints, Floats, Floats]:
    """Extra mean cost per unit of risk removed between efficient neighbours, error by the delta method."""
    n = len(figures.risk)
    finer, price, error = np.full(n, -1, dtype=np.int64), np.full(n, np.nan), np.full(n, np.nan)
    order = _by_falling_risk(figures, efficient)
    for coarse, fine in pairwise(order):
        removed = figures.risk[coarse] - figures.risk[fine]
        finer[coarse] = fine
        price[coarse] = (figures.mean_cost[fine] - figures.mean_cost[coarse]) / removed
        step = (np.arange(n) == fine) * 1.0 - (np.arange(n) == coarse)
        error[coarse] = figures.standard_error(step / removed, price[coarse] * step / removed)
    return finer, price, error


def _warnings(
    settings: Settings, risk: Floats, risk_se: Floats, critical: float, limit_met: bool, unknown: bool
) -> tuple[str, ...]:
    found = []
    if settings.mean == "total":
        found.append("luck included: the mean is that of the total P&L, with the drift and volatility of these paths")
    if not limit_met:
        found.append(f"no schedule meets the risk limit of {settings.limit:g}; the one of least risk is shown")
    elif settings.limit is not None and (np.abs(risk - settings.limit) < critical * risk_se).any():
        found.append("a risk lies within its error of the limit; which schedules meet the limit is uncertain")
    if unknown:
        found.append("too few paths for standard errors: no schedule can be told from another")
    return tuple(found)
