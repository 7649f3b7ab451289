"""How variance and cost move with the number of rebalances."""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from hedgesim.engine.ledger import Ledger
from hedgesim.market import Floats, Ints, frozen
from hedgesim.schedules import Compiled
from hedgesim.study.breakdown import Variances
from hedgesim.study.law import Points, PowerLaw, fit_power_law
from hedgesim.study.projection import project, weights
from hedgesim.study.settings import Settings


@dataclass(frozen=True)
class Frequency:
    """Time-based schedules and the law through them; arrays are by time-based schedule.

    Attributes
    ----------
    rows : indices of the time-based schedules among those of the study
    trades : hedge intervals over the life
    interval_years : usual interval, calendar years
    equal : all intervals equally long in variance years
    asymptotic_discretisation, asymptotic_removable : the 1/N lines that Var(discretisation) and removable variance tend
        to at many trades, in currency squared; nan for price histories and unequal looks
    asymptotic_discretisation_se, asymptotic_removable_se : their standard errors
    cost_exponent, cost_exponent_se : growth of mean costs and funding with trades, the slope in logs from the next
        coarser equal schedule: near 1/2 for a spread, 1 for tickets; entry and unwinding hold it down at few trades
    law : None when there is none, for `reason`
    reason : why there is no law, else empty
    """

    rows: Ints
    trades: Floats
    interval_years: Floats
    equal: tuple[bool, ...]
    asymptotic_discretisation: Floats
    asymptotic_discretisation_se: Floats
    asymptotic_removable: Floats
    asymptotic_removable_se: Floats
    cost_exponent: Floats
    cost_exponent_se: Floats
    law: PowerLaw | None
    reason: str


def frequency(
    ledger: Ledger, schedules: Ints, variances: Variances, *, compiled: Compiled, settings: Settings
) -> Frequency:
    """Variance against frequency of the schedules with indices `schedules`; those not in `compiled` are not time-based.

    Notes
    -----
    Within a look every hedge leaves the same sampling and remainder, whose variance and covariance with the floor are
    of order 1/looks (Bertsimas, Kogan and Lo 2000, J. Financial Economics 55). Times looks/N they give the lines:
    Var(sampling) for the discretisation, and Var(sampling) + 2 Cov(sampling + remainder, floor) for what is removable.
    """
    place = {name: i for i, name in enumerate(compiled.names)}
    names = [ledger.schedules[i] for i in schedules]
    rows = np.array([i for i, name in enumerate(names) if name in place], dtype=np.int64)
    at = np.array([place[names[i]] for i in rows], dtype=np.int64)
    trades = compiled.intervals[at].astype(np.float64)
    equal = [bool(e) for e in compiled.equal[at]]
    lines, errors = _asymptotic(ledger, schedules[rows], trades, compiled, settings)
    exponent, exponent_se = _cost_exponents(ledger, schedules[rows], trades, equal)
    law, reason = _law(ledger, rows, names, trades, equal, variances, compiled, settings)
    return Frequency(
        rows=frozen(rows, np.int64),
        trades=frozen(trades),
        interval_years=frozen(compiled.interval_years[at]),
        equal=tuple(equal),
        asymptotic_discretisation=frozen(lines[0]),
        asymptotic_discretisation_se=frozen(errors[0]),
        asymptotic_removable=frozen(lines[1]),
        asymptotic_removable_se=frozen(errors[1]),
        cost_exponent=frozen(exponent),
        cost_exponent_se=frozen(exponent_se),
        law=law,
        reason=reason,
    )


def _asymptotic(
    ledger: Ledger, schedules: Ints, trades: Floats, compiled: Compiled, settings: Settings
) -> tuple[Floats, Floats]:
    if "sampling" not in ledger.components or not settings.equal_looks:
        unknown = np.full((2, len(trades)), np.nan)
        return unknown, unknown
    looks = compiled.trades_at.shape[1] - 1
    projection = project(ledger, weights(ledger, ("sampling", "remainder", "floor")))

    def lines(cov: Floats) -> Floats:
        own = cov[..., schedules, 0, 0]
        tilt = 2.0 * (cov[..., schedules, 0, 2] + cov[..., schedules, 1, 2])
        return np.asarray(np.stack([own, own + tilt], axis=-2) * (looks / trades))

    return lines(projection.cov), ledger.replicates.spread(lines(projection.resampled_cov))


def _cost_exponents(ledger: Ledger, schedules: Ints, trades: Floats, equal: list[bool]) -> tuple[Floats, Floats]:
    """Slope of log mean cost in log trades between neighbouring equal schedules."""
    value, error = np.full(len(trades), np.nan), np.full(len(trades), np.nan)
    projection = project(ledger, weights(ledger, ("charges",)))
    cost, resampled = -projection.mean[schedules, 0], -projection.resampled_mean[:, schedules, 0]
    order = [int(i) for i in np.argsort(trades, kind="stable") if equal[i] and cost[i] > 0.0]
    for coarse, fine in pairwise(order):
        step = np.log(trades[fine] / trades[coarse])
        if step <= 0.0:
            continue
        value[fine] = np.log(cost[fine] / cost[coarse]) / step
        if (resampled[:, [coarse, fine]] > 0.0).all():
            error[fine] = ledger.replicates.spread(np.log(resampled[:, fine] / resampled[:, coarse]) / step)
    return value, error


def _law(
    ledger: Ledger,
    rows: Ints,
    names: list[str],
    trades: Floats,
    equal: list[bool],
    variances: Variances,
    compiled: Compiled,
    settings: Settings,
) -> tuple[PowerLaw | None, str]:
    if not variances.reference_known:
        return None, "no schedule trades at every look, so that removable variance is not measured"
    reference = float("inf")
    if not variances.floor_known:
        name = ledger.schedules[ledger.reference]
        at = compiled.names.index(name) if name in compiled.names else -1
        reference = float(compiled.intervals[at] if at >= 0 else compiled.trades_at.shape[1] - 1)
    used = [i for i in range(len(rows)) if equal[i]]
    pick = rows[used]
    points = Points(
        names=tuple(names[i] for i in pick),
        trades=trades[used],
        removable=variances.value.removable[pick],
        resampled=variances.resampled.removable[:, pick],
        factor=ledger.replicates.factor,
    )
    apart = tuple((names[rows[i]], "intervals do not divide the life") for i in range(len(rows)) if not equal[i])
    return fit_power_law(points, confidence=settings.confidence, reference=reference, left_out=apart)
