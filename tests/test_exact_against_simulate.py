"""The exact engine against the simulating engine: random experiments, agreement in standard errors."""

import numpy as np
import pytest
from scipy import stats
from simulate_cases import random_experiment

from hedgesim.engine.exact import exact
from hedgesim.engine.ledger import COST_COMPONENTS, FLOOR
from hedgesim.engine.simulate import simulate

EXPERIMENTS = 60


def experiment(seed):
    # Own vols, futures and yields, drift, all costs, both settlements, units held, premiums off model; a quarter of
    # them end before the last expiry.
    return random_experiment(1000 + seed, underlyings=1, early_horizon=seed % 4 == 3)


def scores(seed, count, tolerance):
    """z scores of mean and std of every schedule, (schedule, 2)."""
    case = experiment(seed)
    figures = exact(**case, tolerance=tolerance).figures
    totals = simulate(**case, count=count).totals
    deviation = totals - totals.mean(axis=1, keepdims=True)
    m2, m4 = (deviation**2).mean(axis=1), (deviation**4).mean(axis=1)
    mean = (totals.mean(axis=1) - figures.mean) / np.sqrt(m2 / count)
    std = (np.sqrt(m2) - figures.std) / np.sqrt((m4 - m2 * m2) / (4 * m2 * count))
    return np.stack([mean, std], axis=1)


def check_sixty_experiments(count, tolerance):
    z = np.array([scores(seed, count, tolerance) for seed in range(EXPERIMENTS)])
    # 600 normal scores exceed 4 once in 26 suites like this one.
    assert np.abs(z).max() < 4
    # Schedules of an experiment share their paths: one of each is an independent sample of 60.
    one = z[np.arange(EXPERIMENTS), np.arange(EXPERIMENTS) % z.shape[1]]
    assert (np.abs(one.mean(axis=0)) < 3 / np.sqrt(EXPERIMENTS)).all()
    low, high = stats.chi2.ppf([0.0005, 0.9995], EXPERIMENTS)
    assert ((low < (one**2).sum(axis=0)) & ((one**2).sum(axis=0) < high)).all()


def test_sixty_random_experiments_agree_with_200_000_paths():
    # A standard error of the mean is 2.2e-3 standard deviations here: 1e-4 is out of its sight.
    check_sixty_experiments(200_000, 1e-4)


@pytest.mark.slow
def test_sixty_random_experiments_agree_with_two_million_paths():
    check_sixty_experiments(2_000_000, 2e-5)


@pytest.mark.parametrize("seed", range(4))
def test_every_second_moment_agrees_with_the_ledger(seed):
    case = experiment(seed)
    figures = exact(**case, tolerance=1e-4).figures
    ledger = simulate(**case, count=100_000)
    floor, costs = ledger.columns(FLOOR), ledger.columns(COST_COMPONENTS)
    gross = np.setdiff1d(np.arange(ledger.moments.cov.shape[1]), costs)

    def check(name, statistic):
        z = (statistic(ledger.moments) - getattr(figures, name)) / np.maximum(
            ledger.replicates.standard_error(statistic), 1e-6 * figures.std
        )
        assert np.abs(z).max() < 4.5, name

    def mean(rows):
        return lambda m: m.mean[:, rows].sum(axis=1)

    def square(a, b):
        return lambda m: m.cov[:, a][:, :, b].sum(axis=(1, 2))

    # 63 groups: a jackknife error is itself known to 9 %, hence 4.5 for 4.
    check("mean_gross", mean(gross))
    check("mean_floor", mean(floor))
    check("mean_costs", mean(costs))
    check("variance_gross", square(gross, gross))
    check("variance_floor", square(floor, floor))
    check("variance_costs", square(costs, costs))
    check("covariance_gross_floor", square(gross, floor))
    check("covariance_costs_gross", square(costs, gross))


def test_uncorrelated_underlyings_add():
    case = random_experiment(7, underlyings=2)
    case["source"] = type(case["source"])(
        case["source"].realised_vol, case["source"].drift, np.eye(2), case["source"].seed
    )
    figures = exact(**case, tolerance=1e-4).figures
    totals = simulate(**case, count=200_000).totals
    deviation = totals - totals.mean(axis=1, keepdims=True)
    m2, m3, m4 = ((deviation**p).mean(axis=1) for p in (2, 3, 4))
    n = totals.shape[1]
    assert (np.abs(totals.mean(axis=1) - figures.mean) < 4 * np.sqrt(m2 / n)).all()
    assert (np.abs(m2 - figures.variance) < 4 * np.sqrt((m4 - m2**2) / n)).all()
    # Groups of paths give the errors of the third and fourth moments.
    groups = deviation.reshape(len(m2), 100, -1)
    for power, moment, told in ((3, m3, figures.third), (4, m4, figures.fourth)):
        error = (groups**power).mean(axis=2).std(axis=1) / 10
        assert (np.abs(moment - told) < 4.5 * error).all()
