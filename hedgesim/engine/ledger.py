"""The ledger: additive P&L components and trading totals of every path and schedule, kept as moments and totals.

Signs: money received is positive, all P&L is discounted to the inception. A component's column in a moment matrix is
`underlying * len(components) + component`.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from hedgesim.market import Floats, Ints

# In the order of the P&L identity; a ledger holds those that apply to its engine.
PNL_COMPONENTS = (
    "premium_edge",
    "revaluation",
    "vol_gap",
    "sampling",
    "vol_gap_seen",
    "vol_mark",
    "jump",
    "lag",
    "remainder",
)
COST_COMPONENTS = ("costs.spread", "costs.commission", "costs.tickets")
FLOOR = ("premium_edge", "revaluation", "vol_gap", "vol_mark", "jump")
DISCRETISATION = ("sampling", "lag", "remainder")


@dataclass(frozen=True)
class Moments:
    """Mean and covariance of the components.

    Attributes
    ----------
    mean : (schedule, underlying * component)
    cov : (schedule, underlying * component, underlying * component), divided by n - 1
    """

    mean: Floats
    cov: Floats


@dataclass(frozen=True)
class Replicates:
    """The same moments in resamples, for standard errors of anything computed from moments.

    se(f) = sqrt(factor * sum_r (f_r - mean f)^2): factor (R-1)/R for a delete-one-group jackknife over R groups of
    paths (Efron and Stein 1981, Annals of Statistics 9), 1/(R-1) for a bootstrap with R resamples (Efron 1979,
    Annals of Statistics 7). Schedules share each resample, so errors of differences are paired.

    Attributes
    ----------
    mean : (resample, schedule, underlying * component)
    cov : (resample, schedule, underlying * component, underlying * component)
    factor : see above
    kind : how the resamples were made
    """

    mean: Floats
    cov: Floats
    factor: float
    kind: Literal["jackknife", "bootstrap"]

    def standard_error(self, statistic: Callable[[Moments], NDArray[np.float64]]) -> Floats:
        """Standard error of `statistic(moments)`, an array; nan with fewer than eight resamples."""
        if len(self.mean) < 8:
            blank = Moments(np.zeros(self.mean.shape[1:]), np.zeros(self.cov.shape[1:]))
            with np.errstate(all="ignore"):
                return np.full(np.shape(statistic(blank)), np.nan)
        return self.spread(np.array([statistic(Moments(m, c)) for m, c in zip(self.mean, self.cov, strict=True)]))

    def spread(self, values: Floats) -> Floats:
        """Standard error from the statistic's values in the resamples, along axis 0."""
        if len(values) < 8:
            return np.full(values.shape[1:], np.nan)
        centred = values - values.mean(axis=0)
        return np.asarray(np.sqrt(self.factor * np.square(centred).sum(axis=0)))


@dataclass(frozen=True)
class Watch:
    """What the desk sees between trades, from the first `paths` paths; arrays are by schedule.

    Attributes
    ----------
    paths : paths (or inceptions) watched
    delta_mean, delta_p99 : mean and 99 % quantile over looks and paths of |hedge + reference delta| x price after
        any trade at the look, summed over underlyings, in undiscounted currency
    day_std : standard deviation of daily P&L, book at mark, in discounted currency
    day_worst : mean over paths of the worst day of the life (a negative number is a loss)
    """

    paths: int
    delta_mean: Floats
    delta_p99: Floats
    day_std: Floats
    day_worst: Floats


@dataclass(frozen=True)
class Ledger:
    """Result of an engine.

    Attributes
    ----------
    engine : `simulate` or `replay`
    schedules, underlyings, components : names, in array order
    count : paths or inceptions
    moments, replicates : see there
    totals : (schedule, path): total P&L of the book
    trades, turnover : by schedule: mean number of trades and mean traded notional a path, summed over underlyings;
        entry and unwinding included; notional is discounted to the inception as its spread is
    reference : index of the schedule that trades at every look, or -1 when there is none
    watch : residual delta and daily P&L
    resamples : (resample, path) indices behind bootstrap replicates, None for a jackknife
    detail : (schedule, underlying, component, path), or None when only moments were kept
    trades_detail, turnover_detail : (schedule, path), or None
    below_look : variance below the look for price histories, E[(1/6) sum g^2 R^4], else nan
    """

    engine: Literal["simulate", "replay"]
    schedules: tuple[str, ...]
    underlyings: tuple[str, ...]
    components: tuple[str, ...]
    count: int
    moments: Moments
    replicates: Replicates
    totals: Floats
    trades: Floats
    turnover: Floats
    reference: int
    watch: Watch
    resamples: Ints | None = None
    detail: Floats | None = None
    trades_detail: Floats | None = None
    turnover_detail: Floats | None = None
    below_look: float = float("nan")

    def columns(self, names: tuple[str, ...], underlying: int | None = None) -> Ints:
        """Columns of the moment matrices that belong to the components in `names` (a cost kind by its full name)."""
        width = len(self.components)
        rows = range(len(self.underlyings)) if underlying is None else (underlying,)
        found = [u * width + c for u in rows for c, name in enumerate(self.components) if name in names]
        return np.array(found, dtype=np.int64)


@dataclass(frozen=True)
class Story:
    """One path under one schedule, look by look, for the explained examples.

    Attributes
    ----------
    label : what makes the path worth showing
    path : number of the path, or of the inception
    schedule : name
    t : calendar years, (look,)
    price : (underlying, look)
    hedge : (underlying, look): units held after the look
    target : (underlying, look): minus the reference delta
    components : name -> cumulative P&L by look, underlyings summed, `total` included (book at mark, costs paid so far)
    """

    label: str
    path: int
    schedule: str
    t: Floats
    price: Floats
    hedge: Floats
    target: Floats
    components: dict[str, Floats]
