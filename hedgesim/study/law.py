"""Power law of the removable variance: Var(gross at N trades) = floor + c N^-p, fitted by generalised least squares.

Points are correlated, since all schedules see the same paths; their covariance is estimated from the resamples of the
ledger. Least squares with an estimated covariance is regression on the contrasts that the law says are zero, whose
exact small-sample error is known: Rao (1967, Proc. Fifth Berkeley Symposium 1, from memory).

The fit is to removable variance itself, not to its logarithm: where it is small beside the floor, its noise is that of
Cov(discretisation, floor), which does not scale with the estimate, and weights in logs would favour high estimates.
"""

from dataclasses import dataclass
from typing import Literal

import numpy as np

from hedgesim.market import Floats, frozen

# Fewer resamples than this for each point leave the inverse of the estimated covariance useless.
_RESAMPLES_PER_POINT = 3
# A fit that independent data would beat this rarely is called a misfit.
_MISFIT_LEVEL = 0.01
_FEWEST_POINTS = 3
# Schedules left out for one reason that are named before the rest is counted.
_NAMED = 4
_FEWEST_POINTS_OFFSET = 5
_EXPONENT_RANGE = (0.05, 4.0)


@dataclass(frozen=True)
class Offset:
    """The check with a free floor: removable variance = offset + c N^-p.

    Attributes
    ----------
    value, value_se : what remains as N grows, beside the floor that the ledger states: zero if that floor is right
        and the law holds to the last point; in currency squared
    exponent, exponent_se : p when the floor is free
    """

    value: float
    value_se: float
    exponent: float
    exponent_se: float


@dataclass(frozen=True)
class PowerLaw:
    """Removable variance = c (N^-p - M^-p).

    M is infinite where the ledger states the floor, and the trades of the reference schedule where removable variance
    is measured against that schedule.

    Attributes
    ----------
    exponent, exponent_se : p and its standard error
    low, high : confidence interval of p
    coefficient : c, in currency squared
    coefficient_se : standard error of c
    covariance : of the errors of (c, p)
    reference : M
    chi2, dof, p_value : squared distance of the points from the law in units of their joint error, its degrees of
        freedom, and the chance of one as large if the law held; nan when there are too few resamples to say
    misfit : the points are off the law by more than their error, as the law is asymptotic and the points are not; the
        variances above are then scaled up by the F ratio of the fit, chi2 / dof but for the small-sample correction
    weighting : `joint` with the full covariance of the points, `single` with their variances only
    points : schedules fitted
    left_out : schedules not fitted, each with the reason
    offset : check with a free floor, None with fewer than five points or no minimum
    """

    exponent: float
    exponent_se: float
    low: float
    high: float
    coefficient: float
    coefficient_se: float
    covariance: Floats
    reference: float
    chi2: float
    dof: int
    p_value: float
    misfit: bool
    weighting: Literal["joint", "single"]
    points: tuple[str, ...]
    left_out: tuple[tuple[str, str], ...]
    offset: Offset | None

    def removable(self, trades: Floats) -> Floats:
        """Removable variance at `trades` equal intervals over the life."""
        shape, _ = _shape(np.asarray(trades, dtype=np.float64), self.exponent, self.reference)
        return self.coefficient * shape

    def removable_se(self, trades: Floats) -> Floats:
        """Standard error of `removable` from the errors of the fit."""
        shape, slope = _shape(np.asarray(trades, dtype=np.float64), self.exponent, self.reference)
        gradient = np.stack([shape, self.coefficient * slope])
        variance = np.einsum("in,ij,jn->n", gradient, self.covariance, gradient)
        return np.asarray(np.sqrt(np.maximum(variance, 0.0)))


@dataclass(frozen=True)
class Points:
    """Candidates for the fit; arrays are by schedule.

    Attributes
    ----------
    names : schedules
    trades : intervals over the life
    removable : removable variance
    resampled : (resample, schedule): the same in the resamples
    factor : of the resamples, see `Replicates`
    """

    names: tuple[str, ...]
    trades: Floats
    removable: Floats
    resampled: Floats
    factor: float


def fit_power_law(
    points: Points, *, confidence: float, reference: float, left_out: tuple[tuple[str, str], ...] = ()
) -> tuple[PowerLaw | None, str]:
    """Fit the law to `points`.

    Parameters
    ----------
    points : equal-interval schedules
    confidence : level of the interval of the exponent
    reference : trades of the schedule that removable variance is measured against, infinite when against the floor
    left_out : schedules already set aside, with reasons

    Returns
    -------
    The law and an empty string, or None and the reason why there is none
    """
    from scipy.special import fdtrc, stdtrit

    kept, refused = _admit(points, reference)
    left_out = left_out + refused
    n = len(kept)
    if n < _FEWEST_POINTS:
        why = f"; left out: {grouped_by_reason(left_out)}" if left_out else ""
        return None, f"a law needs {_FEWEST_POINTS} equal-interval schedules, {n} can be used{why}"
    resamples = len(points.resampled)
    joint = resamples >= _RESAMPLES_PER_POINT * n
    fit = _least_squares(points, kept, reference=reference, joint=joint, free_floor=False)
    if fit is None or fit.parameters[0] <= 0.0:
        return None, "removable variance does not fall with the number of trades beyond its noise"
    (coefficient, p), errors, chi2 = fit.parameters, fit.errors, fit.chi2
    freedom = resamples - 1.0
    p_value, misfit = float("nan"), False
    if joint:
        freedom = resamples - 1.0 - (n - 2)
        ratio = chi2 * (freedom + 1.0) / ((resamples - 1.0) * (n - 2))
        p_value = float(fdtrc(n - 2, freedom + 1.0, ratio))
        misfit = p_value < _MISFIT_LEVEL
        widening = _small_sample(chi2, resamples, n, 2)
        errors = errors * (max(widening, ratio) if misfit else widening)
    exponent_se = float(np.sqrt(errors[1, 1]))
    half = float(stdtrit(freedom, 0.5 + 0.5 * confidence)) * exponent_se
    return (
        PowerLaw(
            exponent=float(p),
            exponent_se=exponent_se,
            low=float(p) - half,
            high=float(p) + half,
            coefficient=float(coefficient),
            coefficient_se=float(np.sqrt(errors[0, 0])),
            covariance=frozen(errors),
            reference=reference,
            chi2=chi2 if joint else float("nan"),
            dof=n - 2,
            p_value=p_value,
            misfit=misfit,
            weighting="joint" if joint else "single",
            points=tuple(points.names[i] for i in kept),
            left_out=left_out,
            offset=_free_floor(points, kept) if joint and n >= _FEWEST_POINTS_OFFSET else None,
        ),
        "",
    )


def grouped_by_reason(left_out: tuple[tuple[str, str], ...]) -> str:
    """Names with their reasons in words, those of one reason together."""
    names: dict[str, list[str]] = {}
    for name, why in left_out:
        names.setdefault(why, []).append(name)
    return "; ".join(
        f"{', '.join(some[:_NAMED])}{f' and {len(some) - _NAMED} more' if len(some) > _NAMED else ''} - {why}"
        for why, some in names.items()
    )


def _admit(points: Points, reference: float) -> tuple[list[int], tuple[tuple[str, str], ...]]:
    """Indices of the points that can be fitted, and the others with reasons."""
    kept: list[int] = []
    refused: list[tuple[str, str]] = []
    for i, name in enumerate(points.names):
        same = next((points.names[j] for j in kept if points.trades[j] == points.trades[i]), None)
        if points.trades[i] < 2:
            refused.append((name, "does not rebalance"))
        elif points.trades[i] >= reference:
            refused.append((name, "is what removable variance is measured against"))
        elif same is not None:
            refused.append((name, f"as many intervals as {same}"))
        elif len(points.resampled) < 8:
            refused.append((name, "fewer than eight resamples, no standard error"))
        elif np.ptp(points.resampled[:, i]) == 0.0:
            refused.append((name, "no spread over the resamples, no standard error"))
        else:
            kept.append(i)
    return kept, tuple(refused)


def _small_sample(chi2: float, resamples: int, points: int, parameters: int) -> float:
    """Factor on the least-squares covariance for having estimated the weights (Rao 1967, from memory)."""
    freedom = resamples - 1.0
    return (1.0 + chi2 / freedom) * freedom / (freedom - (points - parameters))


def _shape(trades: Floats, p: float, reference: float) -> tuple[Floats, Floats]:
    """N^-p - M^-p and its derivative by p."""
    own, far = trades**-p, reference**-p
    log_far = np.log(reference) if np.isfinite(reference) else 0.0
    return own - far, far * log_far - own * np.log(trades)


@dataclass(frozen=True)
class _Fit:
    """Parameters (offset where free, c, p), their covariance at the weights used, and the squared distance."""

    parameters: Floats
    errors: Floats
    chi2: float


def _least_squares(points: Points, kept: list[int], *, reference: float, joint: bool, free_floor: bool) -> _Fit | None:
    """Minimum over p of the distance at the best linear parameters; None when it lies on the edge of the range."""
    from scipy.optimize import minimize_scalar

    trades = points.trades[kept]
    centred = points.resampled[:, kept] - points.resampled[:, kept].mean(axis=0)
    # In units of their errors: removable variances span decades.
    scale = np.sqrt(points.factor * np.square(centred).sum(axis=0))
    correlation = points.factor * (centred / scale).T @ (centred / scale)
    inverse = np.linalg.pinv(correlation, hermitian=True) if joint else np.eye(len(kept))
    seen, level = points.removable[kept] / scale, 1.0 / scale

    def linear(p: float) -> tuple[Floats, float]:
        shape = _shape(trades, p, reference)[0] / scale
        design = np.stack([level, shape] if free_floor else [shape], axis=1)
        best = np.linalg.solve(design.T @ inverse @ design, design.T @ inverse @ seen)
        residual = seen - design @ best
        return np.asarray(best), float(residual @ inverse @ residual)

    tried = np.geomspace(*_EXPONENT_RANGE, 40)
    nearest = int(np.argmin([linear(p)[1] for p in tried]))
    if nearest in (0, len(tried) - 1):
        return None
    bounds = (tried[nearest - 1], tried[nearest + 1])
    p = float(minimize_scalar(lambda x: linear(x)[1], bounds=bounds, method="bounded", options={"xatol": 1e-12}).x)
    best, chi2 = linear(p)
    shape, slope = (x / scale for x in _shape(trades, p, reference))
    gradient = np.stack([level, shape, best[-1] * slope] if free_floor else [shape, best[-1] * slope], axis=1)
    solve = np.linalg.solve(gradient.T @ inverse @ gradient, gradient.T @ inverse)
    return _Fit(np.append(best, p), np.asarray(solve @ correlation @ solve.T), chi2)


def _free_floor(points: Points, kept: list[int]) -> Offset | None:
    fit = _least_squares(points, kept, reference=float("inf"), joint=True, free_floor=True)
    if fit is None:
        return None
    errors = fit.errors * _small_sample(fit.chi2, len(points.resampled), len(kept), 3)
    return Offset(
        value=float(fit.parameters[0]),
        value_se=float(np.sqrt(errors[0, 0])),
        exponent=float(fit.parameters[2]),
        exponent_se=float(np.sqrt(errors[2, 2])),
    )
