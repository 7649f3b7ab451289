"""What the exact engine and the published laws say beside a simulated ledger.

Without random numbers: the figures of the shown schedules, a dense curve over the number of trades with its optimum and
what moves it, and the premiums at which each schedule breaks even.
"""

import time
from dataclasses import dataclass, replace

import numpy as np

from hedgesim.book import Book, expiry_looks
from hedgesim.costs import CostTerms
from hedgesim.engine.exact import ExactFigures, ExactResult, ExactUnavailable, exact
from hedgesim.engine.ledger import Ledger
from hedgesim.market import Floats, Ints, LookGrid, Market, frozen
from hedgesim.paths.gbm import Gbm
from hedgesim.schedules import Compiled, Schedule, compile_schedules
from hedgesim.study.break_even import BreakEven, break_even
from hedgesim.study.choice import ES975_SHARE
from hedgesim.study.distribution import QUANTILE_LEVELS, Distribution, tail
from hedgesim.study.settings import Settings
from hedgesim.study.theory import Law, laws

__all__ = [
    "CURVE_TOLERANCE",
    "SCALED_QUANTILES",
    "Agreement",
    "BreakEven",
    "Curve",
    "Exactness",
    "Gain",
    "Sensitivity",
    "exactly_scaled",
    "exactness",
]

# Points of the curve, before those that fall on the same number of trades are merged.
_CURVE_POINTS = 30
# The curve is for a chart and its optimum: relative tolerance on the standard deviation, unless a looser one is asked.
CURVE_TOLERANCE = 1e-4
# Points on either side of the optimum that are worked off anew for a changed market.
_NEIGHBOURS = 2
_VOL_CHANGE, _DRIFT_CHANGE, _COST_FACTORS = 0.02, 0.05, (0.5, 2.0)
_FEWEST_GROUPS, _FEWEST_IN_GROUP, _USUAL_GROUP = 64, 200, 1000
SCALED_QUANTILES = ("p01", "p05", "es975")


@dataclass(frozen=True)
class Agreement:
    """Exact figures of the total P&L of the shown schedules, discounted currency; arrays are by shown schedule.

    Attributes
    ----------
    mean, std : exact
    mean_error, std_error : the exact engine's own error estimates
    z_mean, z_std : (simulated - exact) over the simulated standard error; nan where that is unknown or zero
    figures : every exact figure, see there
    """

    mean: Floats
    std: Floats
    mean_error: Floats
    std_error: Floats
    z_mean: Floats
    z_std: Floats
    figures: ExactFigures


@dataclass(frozen=True)
class Curve:
    """Exact curve over N equal hedge intervals of the life; arrays are by point, N ascending.

    Attributes
    ----------
    trades : N, from 1 to every look
    mean_cost : mean price of trading as the settings count it, a positive amount of currency
    std : of the total P&L
    gross, floor, removable : variances before costs, as in `ExactFigures`
    objective : mean cost + cost_of_risk x risk; nan where the risk has no exact figure
    best : index of the smallest objective, -1 where there is none
    note : what a reader must know, else empty
    """

    trades: Ints
    mean_cost: Floats
    std: Floats
    gross: Floats
    floor: Floats
    removable: Floats
    objective: Floats
    best: int
    note: str


@dataclass(frozen=True)
class Sensitivity:
    """Optimum of the same curve after one change.

    Attributes
    ----------
    change : in words; hedge vols and marks stay as they are
    best_trades : N of the smallest objective, -1 where the exact engine cannot tell
    objective : there, nan where unknown
    """

    change: str
    best_trades: int
    objective: float


@dataclass(frozen=True)
class Gain:
    """What scaling the totals to their exact mean and std is worth.

    Attributes
    ----------
    quantile_ratio : (schedule, quantile) effective paths gained: (standard error before / after)^2, quantiles as in
        `SCALED_QUANTILES`; below 1 it does harm, nan where nothing varies
    ratio_error : its standard error, for normal errors
    note : how it was measured
    """

    quantile_ratio: Floats
    ratio_error: Floats
    note: str


@dataclass(frozen=True)
class Exactness:
    """Everything that needs no random numbers.

    Attributes
    ----------
    agreement, curve : None where the exact engine cannot answer, for `reason`
    sensitivities : of the optimum of the curve; empty without one
    break_even : by shown schedule; empty without exact figures
    laws : published laws, each saying whether it holds for this experiment
    gain : None without exact figures or with too few paths, see `notes`
    reason : one line on what is missing and why, else empty
    seconds : wall-clock time of all this
    notes : what else a reader must know
    """

    agreement: Agreement | None
    curve: Curve | None
    sensitivities: tuple[Sensitivity, ...]
    break_even: tuple[BreakEven, ...]
    laws: tuple[Law, ...]
    gain: Gain | None
    reason: str
    seconds: float
    notes: tuple[str, ...] = ()


@dataclass(frozen=True)
class _Experiment:
    """What the engines read, schedules aside."""

    market: Market
    book: Book
    grid: LookGrid
    source: Gbm
    costs: CostTerms

    def exact(self, compiled: Compiled, tolerance: float, threads: int | None) -> ExactResult:
        """Figures of those schedules."""
        return exact(
            market=self.market,
            book=self.book,
            grid=self.grid,
            source=self.source,
            costs=self.costs,
            compiled=compiled,
            tolerance=tolerance,
            threads=threads,
        )


def exactness(
    ledger: Ledger,
    shown: Ints,
    distribution: Distribution,
    *,
    market: Market,
    book: Book,
    grid: LookGrid,
    compiled: Compiled,
    source: Gbm,
    costs: CostTerms,
    settings: Settings,
    threads: int | None = None,
) -> Exactness:
    """Everything that needs no random numbers, for a simulated ledger.

    Parameters
    ----------
    ledger : of `simulate`
    shown : indices of the schedules to show
    distribution : of those schedules
    market, book, grid, compiled, source, costs : the experiment, as for `simulate`
    settings : what the desk asks; `tolerance` is that of the shown schedules, the curve is worked off to
        `CURVE_TOLERANCE` at the closest
    threads : worker threads, default one a core; results do not depend on it

    Notes
    -----
    What the exact engine refuses is left out and said in `reason`; the laws are there all the same.
    """
    start = time.monotonic()
    experiment = _Experiment(market, book, grid, source, costs)
    theory = laws(market=market, book=book, grid=grid, source=source, costs=costs)
    agreement, curve, reason = None, None, ""
    sensitivities: tuple[Sensitivity, ...] = ()
    level: tuple[BreakEven, ...] = ()
    gain: Gain | None = None
    notes: tuple[str, ...] = ()
    try:
        found = experiment.exact(_only(compiled, [ledger.schedules[i] for i in shown]), settings.tolerance, threads)
        agreement = _agreement(found, distribution)
        level = break_even(
            market=market, book=book, names=found.schedules, mean=agreement.mean, std=agreement.std, settings=settings
        )
        gain, notes = _gain(ledger, shown, agreement)
        curve, figures = _curve(experiment, settings, threads)
        sensitivities = _sensitivities(experiment, curve, figures, settings, threads)
    except ExactUnavailable as unavailable:
        reason = str(unavailable)
    return Exactness(
        agreement=agreement,
        curve=curve,
        sensitivities=sensitivities,
        break_even=level,
        laws=theory,
        gain=gain,
        reason=reason,
        seconds=time.monotonic() - start,
        notes=notes,
    )


def exactly_scaled(distribution: Distribution, agreement: Agreement) -> Floats:
    """Sampled p01, p05 and es975 of totals shifted and scaled to the exact mean and std, (schedule, 3).

    The first two are totals, the third is a positive loss, as in `Distribution`.
    """
    p01, p05 = (distribution.quantiles[:, QUANTILE_LEVELS.index(level)] for level in (0.01, 0.05))
    sampled = np.stack([p01, p05, -distribution.es975], axis=1)
    stretch = np.divide(agreement.std, distribution.std, out=np.ones_like(agreement.std), where=distribution.std > 0.0)
    scaled = agreement.mean[:, None] + (sampled - distribution.mean[:, None]) * stretch[:, None]
    return np.asarray(scaled * [1.0, 1.0, -1.0])


def _only(compiled: Compiled, names: list[str]) -> Compiled:
    missing = [name for name in names if name not in compiled.names]
    if missing:
        raise ExactUnavailable(f"{missing[0]}: the exact engine answers for time-based schedules only")
    rows = [compiled.names.index(name) for name in names]
    return Compiled(
        names=tuple(names),
        trades_at=compiled.trades_at[rows],
        intervals=compiled.intervals[rows],
        interval_years=compiled.interval_years[rows],
        equal=compiled.equal[rows],
    )


def _agreement(found: ExactResult, distribution: Distribution) -> Agreement:
    figures, error = found.figures, found.error

    def score(simulated: Floats, told: Floats, se: Floats) -> Floats:
        return frozen(np.divide(simulated - told, se, out=np.full(len(told), np.nan), where=se > 0.0))

    return Agreement(
        mean=figures.mean,
        std=frozen(figures.std),
        mean_error=error["mean"],
        std_error=error["std"],
        z_mean=score(distribution.mean, figures.mean, distribution.mean_se),
        z_std=score(distribution.std, figures.std, distribution.std_se),
        figures=figures,
    )


def _evenly(experiment: _Experiment, trades: Ints) -> Compiled:
    rules = [Schedule(f"{n} trade{'' if n == 1 else 's'}", "trades", float(n)) for n in trades]
    return compile_schedules(rules, experiment.grid, expiry_looks(experiment.book))


def _priced(figures: ExactFigures, settings: Settings, costs: float = 1.0) -> tuple[Floats, Floats, Floats]:
    """Mean cost, variance and objective with all costs times `costs`: the hedge does not depend on what it costs."""
    paid = costs * figures.mean_costs
    mean_cost = -paid if settings.mean == "costs" else -(figures.mean_gross + paid)
    extra = 2.0 * (costs - 1.0) * figures.covariance_costs_gross + (costs**2 - 1.0) * figures.variance_costs
    variance = np.maximum(figures.variance + extra, 0.0)
    risk = {"std": np.sqrt(variance), "variance": variance}.get(settings.risk, np.full(len(variance), np.nan))
    return mean_cost, variance, mean_cost + settings.cost_of_risk * risk


def _curve(experiment: _Experiment, settings: Settings, threads: int | None) -> tuple[Curve, ExactFigures]:
    looks = experiment.grid.looks
    trades = np.unique(np.round(np.geomspace(1, looks, _CURVE_POINTS)).astype(np.int64))
    tolerance = max(settings.tolerance, CURVE_TOLERANCE)
    figures = experiment.exact(_evenly(experiment, trades), tolerance, threads).figures
    mean_cost, _, objective = _priced(figures, settings)
    notes = [f"curve to {tolerance:g} of the standard deviation"]
    if settings.risk == "es975":
        notes.append("expected shortfall has no exact figure: the curve has no objective and no optimum")
    elif settings.limit is not None:
        notes.append("the optimum of the curve leaves the risk limit aside")
    known = bool(np.isfinite(objective).all())
    curve = Curve(
        trades=frozen(trades, np.int64),
        mean_cost=frozen(mean_cost),
        std=frozen(figures.std),
        gross=figures.variance_gross,
        floor=figures.variance_floor,
        removable=frozen(figures.removable),
        objective=frozen(objective),
        best=int(np.argmin(objective)) if known else -1,
        note="; ".join(notes),
    )
    return curve, figures


def _sensitivities(
    experiment: _Experiment, curve: Curve, figures: ExactFigures, settings: Settings, threads: int | None
) -> tuple[Sensitivity, ...]:
    if curve.best < 0:
        return ()
    source, found = experiment.source, []
    for change in (-_VOL_CHANGE, _VOL_CHANGE):
        vol = source.realised_vol + change
        # Prices that stand still say nothing about the optimum.
        if (vol > 0.0).all():
            moved = replace(experiment, source=replace(source, realised_vol=frozen(vol)))
            words = f"realised vol {100 * change:+g} points"
            found.append(_moved_optimum(words, moved, curve, settings, threads))
    for factor in _COST_FACTORS:
        objective = _priced(figures, settings, factor)[2]
        best = int(np.argmin(objective))
        found.append(Sensitivity(f"costs x {factor:g}", int(curve.trades[best]), float(objective[best])))
    for change in (-_DRIFT_CHANGE, _DRIFT_CHANGE):
        moved = replace(experiment, source=replace(source, drift=frozen(source.drift + change)))
        found.append(_moved_optimum(f"drift {100 * change:+g} points", moved, curve, settings, threads))
    return tuple(found)


def _moved_optimum(
    change: str, moved: _Experiment, curve: Curve, settings: Settings, threads: int | None
) -> Sensitivity:
    """Optimum near that of the curve: the window slides until it has its smallest objective inside."""
    known: dict[int, float] = {}
    best, last = curve.best, len(curve.trades) - 1
    tolerance = max(settings.tolerance, CURVE_TOLERANCE)
    while True:
        window = range(max(0, best - _NEIGHBOURS), min(last, best + _NEIGHBOURS) + 1)
        fresh = [i for i in window if i not in known]
        if fresh:
            try:
                figures = moved.exact(_evenly(moved, curve.trades[fresh]), tolerance, threads).figures
            except ExactUnavailable:
                return Sensitivity(change, -1, float("nan"))
            known |= dict(zip(fresh, _priced(figures, settings)[2].tolist(), strict=True))
        lowest = min(known, key=known.__getitem__)
        if lowest == best:
            return Sensitivity(change, int(curve.trades[best]), known[best])
        best = lowest


def _gain(ledger: Ledger, shown: Ints, agreement: Agreement) -> tuple[Gain | None, tuple[str, ...]]:
    """Spread over groups of paths of the sampled figures as they are, and scaled to the exact mean and std."""
    if ledger.count < _FEWEST_GROUPS * _FEWEST_IN_GROUP:
        fewest = _FEWEST_GROUPS * _FEWEST_IN_GROUP
        return None, (f"the gain of exact scaling is not measured: that takes {fewest:,} paths",)
    groups = max(_FEWEST_GROUPS, ledger.count // _USUAL_GROUP)
    size = ledger.count // groups
    ratio, error = np.full((2, len(shown), len(SCALED_QUANTILES)), np.nan)
    for row, i in enumerate(shown):
        totals = ledger.totals[i, : groups * size].reshape(groups, size)
        std = totals.std(axis=1, ddof=1)
        if not (std > 0.0).all():
            continue
        low = np.quantile(totals, (0.01, 0.05), axis=1)
        before = np.stack([*low, [-tail(group, ES975_SHARE).shortfall for group in totals]])
        stretch = agreement.std[row] / std
        after = agreement.mean[row] + (before - totals.mean(axis=1)) * stretch
        ratio[row] = before.var(axis=1) / after.var(axis=1)
        together = np.array([np.corrcoef(a, b)[0, 1] for a, b in zip(before, after, strict=True)])
        # Pitman (1939) and Morgan (1939), Biometrika 31, from memory: variances of correlated normal samples.
        error[row] = ratio[row] * np.sqrt(4.0 * (1.0 - together**2) / (groups - 1))
    note = f"measured over {groups} groups of {size:,} paths"
    return Gain(quantile_ratio=frozen(ratio), ratio_error=frozen(error), note=note), ()
