"""The distribution of the total P&L under each schedule, with standard errors."""

from dataclasses import dataclass

import numpy as np

from hedgesim.engine.ledger import Ledger
from hedgesim.market import Floats, Ints, frozen

QUANTILE_LEVELS = (0.01, 0.05, 0.50, 0.95, 0.99)

# Below these counts the estimated error is an artefact: three totals always have the same sample kurtosis, and the
# spread of a tail cannot be read from a handful of losses.
_FEWEST_FOR_STD_ERROR = 4
_FEWEST_TAIL_LOSSES = 5

_BLOCK = 1 << 16


@dataclass(frozen=True)
class Distribution:
    """Figures of the total P&L, in discounted currency; arrays are by schedule.

    Attributes
    ----------
    mean, std : mean, and standard deviation with divisor n - 1 (nan for one path)
    skew, kurtosis : standardised third and fourth moments, 0 and 3 for a normal; nan when all totals are equal
    quantiles : (schedule, level), levels as in `QUANTILE_LEVELS`, linear between order statistics
    es95, es975 : mean of the worst 5 % and 2.5 % of totals, as a positive loss
    mean_se, std_se, es95_se, es975_se : standard errors, nan where there are too few totals to tell
    resampled_es975 : (resample, schedule) for bootstrap ledgers, else None
    """

    mean: Floats
    mean_se: Floats
    std: Floats
    std_se: Floats
    skew: Floats
    kurtosis: Floats
    quantiles: Floats
    es95: Floats
    es95_se: Floats
    es975: Floats
    es975_se: Floats
    resampled_es975: Floats | None


@dataclass(frozen=True)
class Tail:
    """The worst totals of one schedule.

    Attributes
    ----------
    threshold : the total at or below which the tail lies
    shortfall : mean of the tail as a positive loss
    shortfall_se : its standard error for independent paths
    """

    threshold: float
    shortfall: float
    shortfall_se: float


def tail(totals: Floats, share: float) -> Tail:
    """Mean loss of the worst `share` of `totals`, the last order statistic counted by its fraction.

    Notes
    -----
    With the threshold q at order statistic ceil(n share), the mean loss is -q + sum (q - x)^+ / (n share)
    (Rockafellar and Uryasev 2000, Journal of Risk 2). Its asymptotic variance is
    [Var(loss | tail) + (1 - share) (ES - VaR)^2] / (n share) (Manistre and Hancock 2005, North American Actuarial
    Journal 9, from memory), which is the variance of (q - x)^+ / share over n.
    """
    n = len(totals)
    size = n * share
    # n * share carries rounding: 2000 * 0.05 must be 100 losses, not 101.
    rank = min(n, max(1, int(np.ceil(size * (1.0 - 1e-12)))))
    lowest = np.partition(totals, rank - 1)[:rank]
    threshold = float(lowest.max())
    excess = threshold - lowest
    if size <= 1.0:
        return Tail(threshold, -threshold, float("nan"))
    shortfall = -threshold + float(excess.sum()) / size
    if rank < _FEWEST_TAIL_LOSSES:
        return Tail(threshold, shortfall, float("nan"))
    first, second = float(excess.sum()) / n, float(np.square(excess).sum()) / n
    return Tail(threshold, shortfall, float(np.sqrt(max(0.0, second - first * first) / n)) / share)


def shortfall_error_covariance(totals: Floats, share: float, others: Floats) -> Floats:
    """Joint covariance of the errors of means and shortfalls over independent paths.

    Parameters
    ----------
    totals : (schedule, path): the totals whose mean loss over the worst `share` is estimated
    share : share of the tail
    others : (row, path): per-path figures whose means are estimated beside them; may have no rows

    Returns
    -------
    (row + schedule, row + schedule): the rows of `others` first. Shortfalls enter through their influence values
    (q - x)^+ / share, see `tail`; paths are shared, so that errors of differences are paired.
    """
    thresholds = np.array([tail(row, share).threshold for row in totals])[:, None]
    n = totals.shape[1]
    size = len(others) + len(totals)
    shift = others.mean(axis=1, keepdims=True)
    first, second = np.zeros(size), np.zeros((size, size))
    for start in range(0, n, _BLOCK):
        cut = slice(start, start + _BLOCK)
        values = np.concatenate([others[:, cut] - shift, np.maximum(thresholds - totals[:, cut], 0.0) / share])
        first += values.sum(axis=1)
        second += values @ values.T
    return np.asarray((second - np.outer(first, first) / n) / (max(n - 1, 1) * n))


def distribution(ledger: Ledger, schedules: Ints) -> Distribution:
    """Distribution figures of the schedules with indices `schedules`.

    Notes
    -----
    For independent paths se(mean) = std / sqrt(n) and se(std) = sqrt((m4 - m2^2) / (4 m2 n)) with central moments m
    (delta method; Cramer 1946, Mathematical Methods of Statistics, section 27.4, from memory). Inceptions of a price
    history overlap: then all errors are spreads over the resamples that the ledger carries.
    """
    rows = [_figures(ledger.totals[i]) for i in schedules]
    errors = [_independent_errors(ledger.totals[i]) for i in schedules]
    resampled = None
    if ledger.resamples is not None:
        values = np.array([[_figures(ledger.totals[i][pick]) for i in schedules] for pick in ledger.resamples])
        values = values.reshape(-1, len(schedules), 4)
        errors = list(ledger.replicates.spread(values))
        resampled = frozen(values[:, :, 3])
    shape = [_shape(ledger.totals[i]) for i in schedules]
    mean, std, es95, es975 = np.array(rows).reshape(-1, 4).T
    mean_se, std_se, es95_se, es975_se = np.array(errors).reshape(-1, 4).T
    skew, kurtosis = np.array(shape).reshape(-1, 2).T
    return Distribution(
        mean=frozen(mean),
        mean_se=frozen(mean_se),
        std=frozen(std),
        std_se=frozen(std_se),
        skew=frozen(skew),
        kurtosis=frozen(kurtosis),
        quantiles=frozen([np.quantile(ledger.totals[i], QUANTILE_LEVELS) for i in schedules]),
        es95=frozen(es95),
        es95_se=frozen(es95_se),
        es975=frozen(es975),
        es975_se=frozen(es975_se),
        resampled_es975=resampled,
    )


def _figures(totals: Floats) -> list[float]:
    """Mean, std, es95, es975."""
    std = float(totals.std(ddof=1)) if len(totals) > 1 else float("nan")
    return [float(totals.mean()), std, tail(totals, 0.05).shortfall, tail(totals, 0.025).shortfall]


def _independent_errors(totals: Floats) -> list[float]:
    """Standard errors of `_figures` for independent paths."""
    n = len(totals)
    mean_se = float(totals.std(ddof=1)) / np.sqrt(n) if n > 1 else float("nan")
    std_se = float("nan")
    if n >= _FEWEST_FOR_STD_ERROR:
        squares = np.square(totals - totals.mean())
        m2 = float(squares.mean())
        std_se = float(np.sqrt(np.square(squares - m2).mean() / (4.0 * m2 * n))) if m2 > 0.0 else 0.0
    return [mean_se, std_se, tail(totals, 0.05).shortfall_se, tail(totals, 0.025).shortfall_se]


def _shape(totals: Floats) -> tuple[float, float]:
    """Skew and kurtosis."""
    centred = totals - totals.mean()
    m2 = float(np.square(centred).mean())
    # Equal totals leave only the rounding of their mean.
    if m2 <= (1e-14 * float(np.abs(totals).max())) ** 2:
        return float("nan"), float("nan")
    return float((centred**3).mean() / m2**1.5), float((centred**4).mean() / m2**2)
