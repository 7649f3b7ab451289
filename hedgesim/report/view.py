"""A study as the pages read it: schedules from rare to frequent trading, every figure beside its error."""

from dataclasses import dataclass

import numpy as np

from hedgesim.engine.ledger import Ledger
from hedgesim.market import Floats
from hedgesim.report.exact_view import ExactView, exact_view
from hedgesim.report.facts import RunFacts
from hedgesim.report.style import schedule_shades
from hedgesim.study.distribution import QUANTILE_LEVELS
from hedgesim.study.findings import cost_of_risk_words, sentence
from hedgesim.study.law import PowerLaw, grouped_by_reason
from hedgesim.study.studies import Study

_RISK_NAMES = {"std": "standard deviation", "variance": "variance", "es975": "ES 97.5 %"}


@dataclass(frozen=True)
class Share:
    """A row of the breakdown: one component of one underlying, or of the book (`all`); arrays are by schedule."""

    underlying: str
    component: str
    mean: Floats
    mean_se: Floats
    std: Floats
    share: Floats


@dataclass(frozen=True)
class PriceStep:
    """From an efficient schedule to the next finer one (empty at the end): what a unit of risk removed costs."""

    schedule: str
    finer: str
    price: float
    price_se: float
    best_from: float
    best_to: float


@dataclass(frozen=True)
class View:
    """Everything the pages show of a study; arrays are by schedule, rare to frequent, nan where not known.

    Attributes
    ----------
    names, colours : schedule, and its shade
    rows : place of each schedule in `Ledger.totals`
    trades : mean number of trades a path
    intervals : hedge intervals over the life, N of the law
    mean, mean_se, std, std_se, es975, es975_se, p01, p05 : of the P&L, in currency; es as a positive loss
    cost, cost_se, cost_name : the price of a schedule as the choice counts it, positive when it is paid
    gross, floor, removable, removable_se, share, share_se, total, total_se : variances, in currency squared; share is
        removable over gross; removable is gross less floor, for a price history gross less `reference_gross`
    reference_gross : for a price history the gross variance of the schedule that trades at every look, nan otherwise
    below_look : for a price history the estimated variance below the look
    equal : the schedule hedges at equal intervals, so that it stands on lines over N
    fitted : the schedule belongs to the frequency law
    asymptotic : 1/N line that the removable variance tends to
    risk, risk_se, risk_name, objective, objective_se : as the choice counts them
    tied, efficient, within : flags
    best : row of the chosen schedule
    law, law_note : the fitted law, and what was left out of it or why there is none
    shares : breakdown rows
    steps : price list, from coarse to fine
    exact : what needs no random numbers, None for price histories
    """

    names: tuple[str, ...]
    colours: tuple[str, ...]
    rows: tuple[int, ...]
    trades: Floats
    intervals: Floats
    mean: Floats
    mean_se: Floats
    std: Floats
    std_se: Floats
    es975: Floats
    es975_se: Floats
    p01: Floats
    p05: Floats
    cost: Floats
    cost_se: Floats
    cost_name: str
    gross: Floats
    floor: Floats
    removable: Floats
    removable_se: Floats
    share: Floats
    share_se: Floats
    total: Floats
    total_se: Floats
    reference_gross: float
    below_look: float
    equal: tuple[bool, ...]
    fitted: tuple[bool, ...]
    asymptotic: Floats
    risk: Floats
    risk_se: Floats
    risk_name: str
    objective: Floats
    objective_se: Floats
    tied: tuple[bool, ...]
    efficient: tuple[bool, ...]
    within: tuple[bool, ...]
    best: int
    law: PowerLaw | None
    law_note: str
    shares: tuple[Share, ...]
    steps: tuple[PriceStep, ...]
    sentence: str
    cost_of_risk_words: str
    cost_of_risk: float
    confidence: float
    warnings: tuple[str, ...]
    exact: ExactView | None = None

    @property
    def varied(self) -> bool:
        """Whether there is a spread of outcomes at all: a single inception has none."""
        return bool(np.isfinite(self.std).any())

    @property
    def book_shares(self) -> list[Share]:
        """Rows of the book that add up to the total: no cost kinds, no total."""
        return [s for s in self.shares if s.underlying == "all" and "." not in s.component and s.component != "total"]

    def pick(self, most: int) -> list[int]:
        """At most `most` schedules for a chart: the chosen one, both ends, and an even spread between."""
        n = len(self.names)
        if n <= most:
            return list(range(n))
        keep = {0, n - 1, self.best}
        for k in np.linspace(0, n - 1, most).round().astype(int):
            if len(keep) < most:
                keep.add(int(k))
        return sorted(keep)


def view_of(study: Study, ledger: Ledger) -> View:
    """Put the schedules of `study` in order of frequency; `ledger` is the one that was studied."""
    d, v, c, f = study.distribution, study.variances, study.choice, study.frequency
    n = len(study.schedules)
    intervals, asymptotic, years = np.full(n, np.nan), np.full(n, np.nan), np.zeros(n)
    intervals[f.rows], asymptotic[f.rows], years[f.rows] = f.trades, f.asymptotic_removable, f.interval_years
    equal = np.zeros(n, dtype=bool)
    equal[f.rows] = f.equal
    order = np.lexsort((np.arange(n), -years, np.where(np.isfinite(intervals), intervals, study.trades)))
    names = tuple(study.schedules[k] for k in order)
    p01, p05 = (d.quantiles[order, QUANTILE_LEVELS.index(level)] for level in (0.01, 0.05))
    reference_gross = float("nan")
    if not v.floor_known and v.reference_known:
        reference_gross = float((v.value.gross - v.value.removable)[0])
    b = study.breakdown
    return View(
        names=names,
        colours=tuple(schedule_shades(n)),
        rows=tuple(ledger.schedules.index(name) for name in names),
        trades=study.trades[order],
        intervals=intervals[order],
        mean=d.mean[order],
        mean_se=d.mean_se[order],
        std=d.std[order],
        std_se=d.std_se[order],
        es975=d.es975[order],
        es975_se=d.es975_se[order],
        p01=p01,
        p05=p05,
        cost=c.mean_cost[order],
        cost_se=c.mean_cost_se[order],
        cost_name="mean cost" if study.settings.mean == "costs" else "minus mean P&L",
        gross=v.value.gross[order],
        floor=v.value.floor[order],
        removable=v.value.removable[order],
        removable_se=v.error.removable[order],
        share=v.removable_share[order],
        share_se=v.removable_share_se[order],
        total=v.value.total[order],
        total_se=v.error.total[order],
        reference_gross=reference_gross,
        below_look=v.below_look,
        equal=tuple(bool(x) for x in equal[order]),
        fitted=tuple(f.law is not None and name in f.law.points for name in names),
        asymptotic=asymptotic[order],
        risk=c.risk[order],
        # A standard deviation has one error on all pages: that from every path, not from groups of them.
        risk_se=(study.distribution.std_se if study.settings.risk == "std" else c.risk_se)[order],
        risk_name=_RISK_NAMES[study.settings.risk],
        objective=c.objective[order],
        objective_se=c.objective_se[order],
        tied=tuple(bool(x) for x in c.tied[order]),
        efficient=tuple(bool(x) for x in c.efficient[order]),
        within=tuple(bool(x) for x in c.within_limit[order]),
        best=int(np.flatnonzero(order == c.chosen)[0]),
        law=f.law,
        law_note=_law_note(f.law, f.reason),
        shares=tuple(
            Share(underlying, component, *(a[order, i, k] for a in (b.mean, b.mean_se, b.std, b.share)))
            for i, underlying in enumerate(b.underlyings)
            for k, component in enumerate(b.components)
        ),
        steps=_steps(study),
        sentence=sentence(study),
        cost_of_risk_words=cost_of_risk_words(study),
        cost_of_risk=study.settings.cost_of_risk,
        confidence=study.settings.confidence,
        warnings=study.warnings,
        exact=exact_view(study, order),
    )


def _steps(study: Study) -> tuple[PriceStep, ...]:
    c = study.choice
    order = [int(k) for k in np.argsort(-c.risk, kind="stable") if c.efficient[k]]
    return tuple(
        PriceStep(
            schedule=study.schedules[k],
            finer=study.schedules[c.next_finer[k]] if c.next_finer[k] >= 0 else "",
            price=float(c.price[k]),
            price_se=float(c.price_se[k]),
            best_from=float(c.best_from[k]),
            best_to=float(c.best_to[k]),
        )
        for k in order
    )


def _law_note(law: PowerLaw | None, reason: str) -> str:
    if law is None:
        return f"No law is fitted: {reason}." if reason else "No law is fitted."
    parts = [f"Fit over {len(law.points)} schedules"]
    if np.isfinite(law.chi2):
        parts.append(f"chi-squared {law.chi2:.3g} on {law.dof} degrees of freedom")
    if law.misfit:
        parts.append("the points bend away from it, its error is widened")
    if law.left_out:
        parts.append(f"left out: {grouped_by_reason(law.left_out)}")
    return "; ".join(parts) + "."


def mark_of(view: View, row: int) -> str:
    """`chosen`, `tied` and `efficient` in words for a table; nothing is chosen from a single inception."""
    if not view.varied:
        return ""
    marks = ["chosen"] if row == view.best else ["tied"] if view.tied[row] else []
    if view.efficient[row] and row != view.best:
        marks.append("efficient")
    if not view.within[row]:
        marks.append("over limit")
    return ", ".join(marks)


def source_line(view: View, facts: RunFacts) -> str:
    """Sample size and source for a footer."""
    count = facts.ledger.count
    if facts.replayed:
        what = "inception on the price history" if count == 1 else "inceptions on the price history"
        errors = "no errors from one inception" if count == 1 else "errors: block bootstrap, 1 se"
    else:
        what, errors = "simulated path" + "s" * (count != 1), "errors: 1 se"
    return f"{count:,} {what}, {len(view.names)} schedule{'s' * (len(view.names) != 1)}; {errors}"
