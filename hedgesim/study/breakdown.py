"""What the P&L is made of: means, spreads and covariance shares of the components, and the parts of its variance."""

from dataclasses import dataclass, fields

import numpy as np

from hedgesim.engine.ledger import PNL_COMPONENTS, Ledger
from hedgesim.market import Floats, Ints, frozen
from hedgesim.study.projection import is_cost, project, weights

BOOK = "all"


@dataclass(frozen=True)
class Breakdown:
    """Components by schedule and underlying, in discounted currency; costs are negative.

    Attributes
    ----------
    underlyings : names, and last `all`, the book
    components : P&L components, `costs` and its kinds `costs.x`, `funding` where there is any, `total`
    mean, mean_se, std : (schedule, underlying, component)
    share : Cov(component, total of the book) / Var(total of the book), (schedule, underlying, component); over the
        components of `all`, cost kinds and total aside, it adds to one. Single shares may be negative or exceed one
    """

    underlyings: tuple[str, ...]
    components: tuple[str, ...]
    mean: Floats
    mean_se: Floats
    std: Floats
    share: Floats


def breakdown(ledger: Ledger, schedules: Ints) -> Breakdown:
    """Component table of the schedules with indices `schedules`.

    Standard errors of means are std / sqrt(n) for independent paths, and spreads over resamples for price histories.
    """
    components = (
        *(c for c in ledger.components if c in PNL_COMPONENTS),
        "costs",
        *(c for c in ledger.components if is_cost(c) and c != "costs"),
        *(c for c in ledger.components if c == "funding"),
        "total",
    )
    places: list[int | None] = [*range(len(ledger.underlyings)), None]
    rows = np.concatenate([weights(ledger, components, underlying) for underlying in places])
    cov = ledger.moments.cov[schedules]
    std = np.sqrt(np.maximum(np.einsum("gk,skl,gl->sg", rows, cov, rows), 0.0))
    with_total = rows @ cov @ rows[-1]
    var_total = with_total[:, -1:]
    share = np.divide(with_total, var_total, out=np.full_like(with_total, np.nan), where=var_total > 0.0)
    if ledger.resamples is None:
        mean_se = std / np.sqrt(ledger.count)
    else:
        mean_se = ledger.replicates.spread(ledger.replicates.mean[:, schedules] @ rows.T)
    shape = (len(schedules), len(places), len(components))
    return Breakdown(
        underlyings=(*ledger.underlyings, BOOK),
        components=components,
        mean=frozen((ledger.moments.mean[schedules] @ rows.T).reshape(shape)),
        mean_se=frozen(mean_se.reshape(shape)),
        std=frozen(std.reshape(shape)),
        share=frozen(share.reshape(shape)),
    )


@dataclass(frozen=True)
class VarianceParts:
    """Variances and covariances of the book's P&L in discounted currency squared; arrays are by schedule.

    Price histories know no floor and no discretisation: these are nan, and `removable` is measured against the
    schedule that trades at every look, nan when there is none.

    Attributes
    ----------
    discretisation, floor, costs : variances; costs include funding
    discretisation_floor, discretisation_costs, floor_costs : covariances
    gross, total : variances before and after costs and funding
    removable : Var(gross) - Var(floor), what trading more would remove
    """

    discretisation: Floats
    floor: Floats
    costs: Floats
    discretisation_floor: Floats
    discretisation_costs: Floats
    floor_costs: Floats
    gross: Floats
    removable: Floats
    total: Floats

    def take(self, schedules: Ints) -> "VarianceParts":
        """The parts of some schedules; leading axes, if any, are resamples."""
        return VarianceParts(*(frozen(getattr(self, f.name)[..., schedules]) for f in fields(self)))


@dataclass(frozen=True)
class Variances:
    """Variance parts with their errors.

    Attributes
    ----------
    value, error : the parts and their standard errors, by schedule
    resampled : the parts in each resample, (resample, schedule)
    removable_share : removable / gross variance
    removable_share_se : its standard error
    std_gross, std_floor : standard deviations, by schedule
    floor_known : false for price histories
    reference_known : removable is measured at all
    below_look : for price histories an estimate of the variance that trading between the looks would remove, else nan
    """

    value: VarianceParts
    error: VarianceParts
    resampled: VarianceParts
    removable_share: Floats
    removable_share_se: Floats
    std_gross: Floats
    std_floor: Floats
    floor_known: bool
    reference_known: bool
    below_look: float


def variances(ledger: Ledger, schedules: Ints) -> Variances:
    """Variance parts of the schedules with indices `schedules`, errors from the ledger's resamples."""
    names = ("discretisation", "floor", "charges", "gross", "total")
    projection = project(ledger, weights(ledger, names))
    floor_known = "vol_gap_seen" not in ledger.components
    value = _parts(projection.cov, floor_known, ledger.reference).take(schedules)
    resampled = _parts(projection.resampled_cov, floor_known, ledger.reference).take(schedules)
    spread = ledger.replicates.spread
    error = VarianceParts(*(frozen(spread(getattr(resampled, f.name))) for f in fields(resampled)))
    return Variances(
        value=value,
        error=error,
        resampled=resampled,
        removable_share=frozen(_ratio(value.removable, value.gross)),
        removable_share_se=frozen(spread(_ratio(resampled.removable, resampled.gross))),
        std_gross=frozen(np.sqrt(np.maximum(value.gross, 0.0))),
        std_floor=frozen(np.sqrt(np.maximum(value.floor, 0.0))),
        floor_known=floor_known,
        reference_known=floor_known or ledger.reference >= 0,
        below_look=ledger.below_look,
    )


def _parts(cov: Floats, floor_known: bool, reference: int) -> VarianceParts:
    """Parts from covariances (..., schedule, sum, sum) of discretisation, floor, charges, gross, total."""
    unknown = np.full(cov.shape[:-2], np.nan)
    gross = cov[..., 3, 3]
    if floor_known:
        removable = gross - cov[..., 1, 1]
    else:
        removable = gross - gross[..., reference, None] if reference >= 0 else unknown

    def split(i: int, j: int) -> Floats:
        return cov[..., i, j] if floor_known else unknown

    return VarianceParts(
        discretisation=split(0, 0),
        floor=split(1, 1),
        costs=cov[..., 2, 2],
        discretisation_floor=split(0, 1),
        discretisation_costs=split(0, 2),
        floor_costs=split(1, 2),
        gross=gross,
        removable=removable,
        total=cov[..., 4, 4],
    )


def _ratio(part: Floats, whole: Floats) -> Floats:
    return np.divide(part, whole, out=np.full_like(part, np.nan), where=whole > 0.0)
