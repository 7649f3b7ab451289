"""Power law of the removable variance: Var(gross at N trades) = floor + c N^-p, fitted by generalised least squares.

Points are correlated, since all schedules see the same paths; their covariance is estimated from the resamples of the
ledger. Least squares with an estimated covariance is regression on the contrasts that the law says are zero, whose
exact small-sample error is known: Rao (1967, Proc. Fifth Berkeley Symposium 1, from memory).
"""

from dataclasses import dataclass
from typing import Literal

import numpy as np

from hedgesim.market import Floats

# Fewer resamples than this for each point leave the inverse of the estimated covariance useless.
_RESAMPLES_PER_POINT = 3
# A fit that independent data would beat this rarely is called a misfit.
_MISFIT_LEVEL = 0.01
_FEWEST_POINTS = 3
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
    log_covariance : covariance of the errors of (log c, p)
    reference : M
    chi2, dof, p_value : squared distance of the points from the law in units of their joint error, its degrees of
        freedom, and the chance of one as large if the law held; nan when there are too few resamples to say
    misfit : the points are off the law by more than their error; the errors above are then scaled up by
        sqrt(chi2 / dof), as the law is asymptotic and the points are not
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
    log_covariance: Floats
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
        return np.asarray(self.coefficient * (trades**-self.exponent - self.reference**-self.exponent))

    def removable_se(self, trades: Floats) -> Floats:
        """Standard error of `removable` from the errors of the fit."""
        far = self.reference**-self.exponent
        log_far = np.log(self.reference) if np.isfinite(self.reference) else 0.0
        by_exponent = self.coefficient * (far * log_far - trades**-self.exponent * np.log(trades))
        gradient = np.stack([self.removable(trades), by_exponent])
        variance = np.einsum("in,ij,jn->n", gradient, self.log_covariance, gradient)
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
        why = "".join(f"; {name}: {reason}" for name, reason in left_out)
        return None, f"a law needs {_FEWEST_POINTS} equal-interval schedules, {n} can be used{why}"
    trades, log_removable = points.trades[kept], np.log(points.removable[kept])
    resampled = np.log(points.resampled[:, kept])
    resamples = len(resampled)
    covariance = _covariance(resampled, points.factor)
    joint = resamples >= _RESAMPLES_PER_POINT * n
    inverse = np.asarray(np.linalg.pinv(covariance, hermitian=True) if joint else np.diag(1.0 / np.diag(covariance)))

    log_c, p = _fit_logs(trades, log_removable, inverse, reference)
    shape, slope = _shape(trades, p, reference)
    design = np.stack([np.ones(n), slope], axis=1)
    residual = log_removable - log_c - shape
    solve = np.linalg.inv(design.T @ inverse @ design) @ design.T @ inverse
    errors = solve @ covariance @ solve.T
    freedom = resamples - 1.0
    chi2, p_value, misfit = float("nan"), float("nan"), False
    if joint:
        chi2 = float(residual @ inverse @ residual)
        errors = errors * _small_sample(chi2, resamples, n, 2)
        freedom = resamples - 1.0 - (n - 2)
        p_value = float(fdtrc(n - 2, freedom + 1.0, chi2 * (freedom + 1.0) / ((resamples - 1.0) * (n - 2))))
        misfit = p_value < _MISFIT_LEVEL
        if misfit:
            errors = errors * max(1.0, chi2 / (n - 2))
    exponent_se = float(np.sqrt(errors[1, 1]))
    half = float(stdtrit(freedom, 0.5 + 0.5 * confidence)) * exponent_se
    coefficient = float(np.exp(log_c))
    return (
        PowerLaw(
            exponent=p,
            exponent_se=exponent_se,
            low=p - half,
            high=p + half,
            coefficient=coefficient,
            coefficient_se=coefficient * float(np.sqrt(errors[0, 0])),
            log_covariance=errors,
            reference=reference,
            chi2=chi2,
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


def _admit(points: Points, reference: float) -> tuple[list[int], tuple[tuple[str, str], ...]]:
    """Indices of the points that can be fitted, and the others with reasons."""
    kept: list[int] = []
    refused: list[tuple[str, str]] = []
    resampled = points.resampled
    error = np.sqrt(np.diag(_covariance(resampled, points.factor))) if len(resampled) >= 8 else None
    for i, name in enumerate(points.names):
        same = next((points.names[j] for j in kept if points.trades[j] == points.trades[i]), None)
        if points.trades[i] < 2:
            refused.append((name, "does not rebalance"))
        elif points.trades[i] >= reference:
            refused.append((name, "is what removable variance is measured against"))
        elif same is not None:
            refused.append((name, f"as many intervals as {same}"))
        elif error is None:
            refused.append((name, "fewer than eight resamples, no standard error"))
        elif not points.removable[i] > 2.0 * error[i] or not (resampled[:, i] > 0.0).all():
            refused.append((name, "removable variance within two standard errors of zero"))
        elif error[i] == 0.0:
            refused.append((name, "no spread over the resamples, no standard error"))
        else:
            kept.append(i)
    return kept, tuple(refused)


def _covariance(values: Floats, factor: float) -> Floats:
    centred = values - values.mean(axis=0)
    return np.asarray(factor * centred.T @ centred)


def _small_sample(chi2: float, resamples: int, points: int, parameters: int) -> float:
    """Factor on the least-squares covariance for having estimated the weights (Rao 1967, from memory)."""
    freedom = resamples - 1.0
    return (1.0 + chi2 / freedom) * freedom / (freedom - (points - parameters))


def _shape(trades: Floats, p: float, reference: float) -> tuple[Floats, Floats]:
    """log(N^-p - M^-p) and its derivative by p."""
    own, far = trades**-p, reference**-p
    log_far = np.log(reference) if np.isfinite(reference) else 0.0
    return np.log(own - far), (far * log_far - own * np.log(trades)) / (own - far)


def _fit_logs(trades: Floats, log_removable: Floats, inverse: Floats, reference: float) -> tuple[float, float]:
    """The fit of log c and p by Gauss-Newton steps; linear, hence one step, when the reference is infinite."""
    p = 1.0
    for _ in range(50):
        shape, slope = _shape(trades, p, reference)
        design = np.stack([np.ones(len(trades)), slope], axis=1)
        _, step = np.linalg.solve(design.T @ inverse @ design, design.T @ inverse @ (log_removable - shape))
        step = float(np.clip(step, -0.5 * p, 2.0))
        p += step
        if abs(step) <= 1e-12 * p:
            break
    shape, _ = _shape(trades, p, reference)
    row = inverse.sum(axis=0)
    return float(row @ (log_removable - shape) / row.sum()), p


def _free_floor(points: Points, kept: list[int]) -> Offset | None:
    """Three-parameter fit; None when the squared distance has no minimum inside the range of exponents."""
    from scipy.optimize import minimize_scalar

    size, trades = points.removable[kept], points.trades[kept]
    covariance = _covariance(points.resampled[:, kept] / size, points.factor)
    inverse = np.linalg.pinv(covariance, hermitian=True)
    ones = np.ones(len(kept))

    def linear(p: float) -> tuple[Floats, float]:
        design = np.stack([ones, trades**-p], axis=1) / size[:, None]
        best = np.linalg.solve(design.T @ inverse @ design, design.T @ inverse @ ones)
        residual = ones - design @ best
        return np.asarray(best), float(residual @ inverse @ residual)

    found = minimize_scalar(lambda p: linear(p)[1], bounds=_EXPONENT_RANGE, method="bounded", options={"xatol": 1e-9})
    p = float(found.x)
    if min(p - _EXPONENT_RANGE[0], _EXPONENT_RANGE[1] - p) < 1e-3:
        return None
    (offset, c), chi2 = linear(p)
    power = trades**-p
    design = np.stack([ones, power, -c * power * np.log(trades)], axis=1) / size[:, None]
    errors = np.linalg.inv(design.T @ inverse @ design) * _small_sample(chi2, len(points.resampled), len(kept), 3)
    return Offset(
        value=float(offset),
        value_se=float(np.sqrt(errors[0, 0])),
        exponent=p,
        exponent_se=float(np.sqrt(errors[2, 2])),
    )
