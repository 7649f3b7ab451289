"""Named sums of ledger components: their means, covariances and resampled twins."""

from dataclasses import dataclass

import numpy as np

from hedgesim.engine.ledger import DISCRETISATION, FLOOR, PNL_COMPONENTS, Ledger, Replicates
from hedgesim.market import Floats, Ints


@dataclass(frozen=True)
class Projection:
    """Moments of sums of components.

    Attributes
    ----------
    mean : (schedule, sum)
    cov : (schedule, sum, sum)
    resampled_mean : (resample, schedule, sum)
    resampled_cov : (resample, schedule, sum, sum)
    """

    mean: Floats
    cov: Floats
    resampled_mean: Floats
    resampled_cov: Floats


def is_cost(component: str) -> bool:
    """Whether the component is a cost kind."""
    return component == "costs" or component.startswith("costs.")


def members(ledger: Ledger, name: str) -> tuple[str, ...]:
    """Components of the ledger that make up `name`.

    `name` is a component, or `costs` (all cost kinds), `charges` (costs and funding), `gross` (all P&L before costs
    and funding), `floor` (what no schedule removes), `discretisation`, or `total`.
    """
    wanted = {
        "costs": [c for c in ledger.components if is_cost(c)],
        "charges": [c for c in ledger.components if is_cost(c) or c == "funding"],
        "gross": [c for c in ledger.components if c in PNL_COMPONENTS],
        "floor": [c for c in ledger.components if c in FLOOR],
        "discretisation": [c for c in ledger.components if c in DISCRETISATION],
        "total": list(ledger.components),
    }
    return tuple(wanted.get(name, [c for c in ledger.components if c == name]))


def weights(ledger: Ledger, names: tuple[str, ...], underlying: int | None = None) -> Floats:
    """Rows of zeros and ones, (name, underlying * component), that add up each name of `names`; see `members`."""
    rows = np.zeros((len(names), ledger.moments.mean.shape[-1]))
    for row, name in enumerate(names):
        rows[row, ledger.columns(members(ledger, name), underlying)] = 1.0
    return rows


def project(ledger: Ledger, rows: Floats) -> Projection:
    """Moments of the sums whose weights are `rows`, (sum, underlying * component)."""
    mean, cov = ledger.moments.mean, ledger.moments.cov
    resampled = ledger.replicates
    return Projection(
        mean=mean @ rows.T,
        cov=rows @ cov @ rows.T,
        resampled_mean=resampled.mean @ rows.T,
        resampled_cov=rows @ resampled.cov @ rows.T,
    )


def error_covariance(replicates: Replicates, values: Floats) -> Floats:
    """Covariance of the errors of statistics from their values in the resamples, (resample, statistic).

    The square roots of its diagonal are `replicates.spread(values)`; nan with fewer than eight resamples.
    """
    if len(values) < 8:
        return np.full((values.shape[1], values.shape[1]), np.nan)
    centred = values - values.mean(axis=0)
    return np.asarray(replicates.factor * centred.T @ centred)


def critical_value(replicates: Replicates, tail: float) -> float:
    """Standard errors that a true value is off with probability `tail`, on one side.

    Student's t with one degree of freedom less than there are groups for a jackknife, whose standard errors are
    themselves estimated from the groups; normal for a bootstrap, which may resample at will.
    """
    from scipy.special import ndtri, stdtrit

    if replicates.kind == "jackknife" and len(replicates.mean) > 1:
        return float(stdtrit(len(replicates.mean) - 1, 1.0 - tail))
    return float(ndtri(1.0 - tail))


def visible(ledger: Ledger, hidden: tuple[str, ...]) -> Ints:
    """Indices of the schedules that results show."""
    return np.array([i for i, name in enumerate(ledger.schedules) if name not in hidden], dtype=np.int64)
