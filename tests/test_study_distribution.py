"""Distribution figures and their standard errors."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from ledger_builder import build_ledger
from scipy.stats import norm

from hedgesim.study.distribution import distribution, shortfall_error_covariance, tail


def ledger_of(totals, **options):
    totals = np.atleast_2d(totals)
    return build_ledger(totals[:, None, None, :], components=("lag",), **options)


def figures(totals, **options):
    ledger = ledger_of(totals, **options)
    return distribution(ledger, np.arange(len(ledger.schedules)))


def test_shortfall_of_a_normal_is_density_over_share():
    # McNeil, Frey and Embrechts (2005), Quantitative Risk Management, example 2.18 (from memory): ES = mu + sd phi(z)/share.
    totals = np.random.default_rng(11).normal(5.0, 3.0, 400_000)
    d = figures(totals)
    for share, found, error in ((0.05, d.es95[0], d.es95_se[0]), (0.025, d.es975[0], d.es975_se[0])):
        z = norm.ppf(share)
        expected = -5.0 + 3.0 * norm.pdf(z) / share
        assert abs(found - expected) < 4 * error


def test_shortfall_error_of_a_normal_has_its_closed_form():
    n, share = 400_000, 0.05
    totals = np.random.default_rng(12).standard_normal(n)
    z = -norm.ppf(share)
    es = norm.pdf(z) / share
    variance_in_tail = 1.0 + z * es - es**2
    expected = np.sqrt((variance_in_tail + (1 - share) * (es - z) ** 2) / (n * share))
    # The tail holds 20,000 losses: their variance is known to about 2 %, its root to 1 %; four times that.
    assert tail(totals, share).shortfall_se == pytest.approx(expected, rel=0.04)


@pytest.mark.parametrize(
    ("count", "share", "expected"),
    [
        (30, 0.05, (30 + 0.5 * 29) / 1.5),
        (40, 0.05, (40 + 39) / 2),
        (10, 0.05, 10.0),
        (100, 0.025, (100 + 99 + 0.5 * 98) / 2.5),
    ],
)
def test_last_order_statistic_counts_by_its_fraction(count, share, expected):
    totals = -np.random.default_rng(1).permutation(np.arange(1.0, count + 1))
    assert tail(totals, share).shortfall == pytest.approx(expected, rel=1e-14)


def test_whole_number_of_tail_losses_is_not_upset_by_rounding():
    # 0.05 x 2000 is 100.00000000000001 in some orders of rounding; the threshold must be loss 100.
    totals = -np.arange(2000.0)
    assert tail(totals, 0.05).threshold == -1900.0


def test_skew_and_kurtosis_of_two_point_totals():
    # Bernoulli p: skew (1-2p)/sqrt(pq), kurtosis 3 + (1-6pq)/(pq).
    totals = np.repeat([0.0, 1.0], [75, 25])
    d = figures(totals, groups=10)
    assert d.skew[0] == pytest.approx(0.5 / np.sqrt(0.1875))
    assert d.kurtosis[0] == pytest.approx(3 + (1 - 6 * 0.1875) / 0.1875)


def test_stated_errors_match_the_spread_over_fresh_samples():
    rng = np.random.default_rng(5)
    samples = [figures(np.maximum(rng.standard_normal(2000) + 0.3, -1.0) ** 3, groups=8) for _ in range(400)]
    for name in ("mean", "std", "es95", "es975"):
        spread = np.std([getattr(d, name)[0] for d in samples], ddof=1)
        stated = np.sqrt(np.mean([getattr(d, f"{name}_se")[0] ** 2 for d in samples]))
        # The spread of 400 values is known to 1/sqrt(800) = 3.5 %; four of them, and 3 % for n = 2000 not being infinite.
        assert stated == pytest.approx(spread, rel=0.17)


def test_bootstrap_errors_are_near_the_analytic_ones_for_independent_paths():
    rng = np.random.default_rng(6)
    n, resamples = 2000, 400
    totals = rng.standard_normal((2, n))
    picks = rng.integers(0, n, (resamples, n))
    boot, plain = figures(totals, resamples=picks), figures(totals)
    # A spread over 400 resamples is known to 3.5 %; four of them, with room for the smooth tail's own bootstrap error.
    for name in ("mean_se", "std_se"):
        np.testing.assert_allclose(getattr(boot, name), getattr(plain, name), rtol=0.14)
    for name in ("es95_se", "es975_se"):
        np.testing.assert_allclose(getattr(boot, name), getattr(plain, name), rtol=0.25)
    assert boot.resampled_es975.shape == (resamples, 2)


def test_two_paths_have_a_spread_but_no_error_of_it():
    d = figures([1.0, 3.0], groups=0)
    assert d.std[0] == pytest.approx(np.sqrt(2.0))
    assert d.mean_se[0] == pytest.approx(1.0)
    assert d.es95[0] == d.es975[0] == -1.0
    assert np.isnan([d.std_se[0], d.es95_se[0], d.es975_se[0]]).all()


def test_one_path_has_no_spread():
    d = figures([2.5], groups=0)
    assert d.mean[0] == 2.5
    assert np.isnan([d.std[0], d.mean_se[0], d.std_se[0], d.skew[0]]).all()


def test_equal_totals_have_no_shape():
    d = figures(np.full(1000, 0.1), groups=10)
    assert d.std[0] == pytest.approx(0.0, abs=1e-15)
    assert d.es975[0] == -0.1
    assert np.isnan(d.skew[0])
    assert np.isnan(d.kurtosis[0])


def test_quantiles_are_in_order_and_interpolate():
    d = figures(np.arange(101.0), groups=10)
    np.testing.assert_allclose(d.quantiles[0], [1, 5, 50, 95, 99])


def test_shortfall_covariance_pairs_schedules_and_costs():
    rng = np.random.default_rng(8)
    n = 200_000  # several blocks of paths
    common = rng.standard_normal(n)
    totals = np.stack([common, 2.0 * common, rng.standard_normal(n)])
    cov = shortfall_error_covariance(totals, 0.025, common[None, :])
    error = np.sqrt(np.diag(cov))
    assert error[0] == pytest.approx(common.std(ddof=1) / np.sqrt(n), rel=1e-9)
    assert error[1] == pytest.approx(tail(totals[0], 0.025).shortfall_se, rel=1e-4)
    # Twice the same paths: the shortfall doubles, and the errors move as one.
    assert cov[1, 2] == pytest.approx(2 * cov[1, 1], rel=1e-9)
    # Independent totals: correlation zero within four of its errors 1/sqrt(n).
    assert abs(cov[1, 3] / (error[1] * error[3])) < 4 / np.sqrt(n)
    # A lower mean goes with a larger shortfall.
    assert cov[0, 1] < 0


@settings(max_examples=60, deadline=None)
@given(
    hnp.arrays(np.float64, st.integers(2, 200), elements=st.floats(-1e6, 1e6, allow_nan=False, width=32)),
    st.floats(-1e3, 1e3),
    st.floats(0.1, 10.0),
)
def test_shortfall_is_coherent(totals, shift, scale):
    narrow, wide = tail(totals, 0.025).shortfall, tail(totals, 0.05).shortfall
    room = 1e-9 * (1.0 + np.abs(totals).max() + abs(shift)) * (1 + scale)
    assert narrow >= wide - room
    assert -totals.mean() - room <= wide <= -totals.min() + room
    assert tail(scale * totals + shift, 0.05).shortfall == pytest.approx(scale * wide - shift, abs=room)
