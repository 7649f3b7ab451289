"""Component table and variance parts."""

import numpy as np
import pytest
from ledger_builder import HEDGED, build_ledger, hedge_calls

from hedgesim.study.breakdown import breakdown, variances

COMPONENTS = ("revaluation", "vol_gap", "sampling", "lag", "remainder", "costs.spread", "costs.tickets", "funding")


def mixed_ledger(*, underlyings=("CORVANE", "TALLOW"), paths=960, seed=3, **options):
    rng = np.random.default_rng(seed)
    u, c = len(underlyings), len(COMPONENTS)
    mix = rng.normal(size=(u * c, u * c))
    detail = np.einsum("kl,sln->skn", mix, rng.standard_normal((3, u * c, paths))) + rng.normal(size=(3, u * c, 1))
    return build_ledger(detail.reshape(3, u, c, paths), components=COMPONENTS, underlyings=underlyings, **options)


def replayed(*, reference, seed=4, paths=800):
    rng = np.random.default_rng(seed)
    seen = rng.standard_normal(paths)
    lag = np.array([2.0, 1.0, 0.0])[:, None] * rng.standard_normal((3, paths))
    cost = np.abs(rng.standard_normal((3, paths)))
    detail = np.stack([np.broadcast_to(seen, (3, paths)), lag, -cost], axis=1)[:, None]
    picks = rng.integers(0, paths, (200, paths))
    return build_ledger(
        detail,
        components=("vol_gap_seen", "lag", "costs.spread"),
        resamples=picks,
        reference=reference,
        engine="replay",
        below_look=0.125,
    )


def test_components_add_to_the_total_and_shares_to_one():
    ledger = mixed_ledger()
    b = breakdown(ledger, np.arange(3))
    single = [i for i, name in enumerate(b.components) if name != "total" and not name.startswith("costs.")]
    np.testing.assert_allclose(b.mean[:, -1, single].sum(axis=1), ledger.totals.mean(axis=1), rtol=1e-10)
    np.testing.assert_allclose(b.share[:, -1, single].sum(axis=1), 1.0, rtol=1e-10)
    np.testing.assert_allclose(b.std[:, -1, -1], ledger.totals.std(axis=1, ddof=1), rtol=1e-10)
    assert b.components[-1] == "total"
    assert b.underlyings == ("CORVANE", "TALLOW", "all")


def test_underlyings_add_to_the_book():
    b = breakdown(mixed_ledger(), np.arange(3))
    np.testing.assert_allclose(b.mean[:, :2].sum(axis=1), b.mean[:, 2], rtol=1e-10)
    np.testing.assert_allclose(b.share[:, :2].sum(axis=1), b.share[:, 2], atol=1e-12)


def test_cost_kinds_add_to_costs():
    b = breakdown(mixed_ledger(), np.arange(3))
    at = b.components.index
    kinds = [at("costs.spread"), at("costs.tickets")]
    np.testing.assert_allclose(b.mean[:, :, kinds].sum(axis=2), b.mean[:, :, at("costs")], rtol=1e-10)
    np.testing.assert_allclose(b.share[:, :, kinds].sum(axis=2), b.share[:, :, at("costs")], atol=1e-12)


def test_component_figures_are_those_of_the_paths():
    ledger = mixed_ledger()
    b = breakdown(ledger, np.arange(3))
    book = ledger.totals[1]
    vol_gap = ledger.detail[1, 1, 1]
    place = 1, 1, b.components.index("vol_gap")
    assert b.mean[place] == pytest.approx(vol_gap.mean(), rel=1e-10)
    assert b.std[place] == pytest.approx(vol_gap.std(ddof=1), rel=1e-10)
    assert b.share[place] == pytest.approx(np.cov(vol_gap, book)[0, 1] / book.var(ddof=1), rel=1e-9)
    assert b.mean_se[place] == pytest.approx(vol_gap.std(ddof=1) / np.sqrt(960), rel=1e-10)


def test_costs_row_is_there_without_costs_and_funding_is_not():
    ledger = build_ledger(
        np.random.default_rng(1).normal(size=(1, 1, 2, 100)), components=("vol_gap", "lag"), groups=10
    )
    b = breakdown(ledger, np.arange(1))
    assert b.components == ("vol_gap", "lag", "costs", "total")
    assert b.mean[0, -1, 2] == 0.0


def test_constant_total_has_no_shares():
    ledger = build_ledger(np.zeros((1, 1, 1, 64)), components=("lag",), groups=8)
    b = breakdown(ledger, np.arange(1))
    assert np.isnan(b.share).all()


def test_jackknife_of_a_mean_is_the_spread_of_group_means():
    # For a mean, the delete-one-group jackknife is exactly the variance of the group means over their number.
    ledger = mixed_ledger()
    groups = ledger.totals[0].reshape(32, -1).mean(axis=1)
    found = ledger.replicates.standard_error(lambda m: m.mean.sum(axis=1))
    assert found[0] == pytest.approx(groups.std(ddof=1) / np.sqrt(32), rel=1e-9)


def test_jackknife_error_of_removable_matches_fresh_samples():
    parts = [variances(_reshuffled(seed), np.arange(3)) for seed in range(300)]
    spread = np.std([p.value.removable for p in parts], axis=0, ddof=1)
    stated = np.sqrt(np.mean([p.error.removable**2 for p in parts], axis=0))
    # 300 samples: 1/sqrt(600) = 4.1 %, four of them.
    np.testing.assert_allclose(stated, spread, rtol=0.17)


def _reshuffled(seed):
    """Fresh normal components with one fixed covariance."""
    mix = np.random.default_rng(3).normal(size=(8, 8))
    draws = np.random.default_rng(1000 + seed).standard_normal((3, 8, 640))
    return build_ledger((mix @ draws)[:, None], components=COMPONENTS)


def test_variance_parts_add_to_the_total():
    v = variances(mixed_ledger(), np.arange(3)).value
    added = v.discretisation + v.floor + v.costs
    added = added + 2 * (v.discretisation_floor + v.discretisation_costs + v.floor_costs)
    np.testing.assert_allclose(added, v.total, rtol=1e-10)
    np.testing.assert_allclose(v.removable, v.discretisation + 2 * v.discretisation_floor, rtol=1e-9)


def test_removable_share_and_roots():
    v = variances(mixed_ledger(), np.arange(3))
    np.testing.assert_allclose(v.removable_share, 1 - v.value.floor / v.value.gross)
    np.testing.assert_allclose(v.std_gross**2, v.value.gross)
    np.testing.assert_allclose(v.std_floor**2, v.value.floor)


def test_price_history_measures_removable_against_every_look():
    ledger = replayed(reference=2)
    v = variances(ledger, np.arange(3))
    gross = ledger.detail[:, 0, :2].sum(axis=1).var(axis=1, ddof=1)
    np.testing.assert_allclose(v.value.removable, gross - gross[2], atol=1e-12)
    assert v.error.removable[2] == 0.0
    assert v.error.removable[0] > 0.0
    assert np.isnan(v.std_floor).all()
    assert np.isnan(v.value.discretisation).all()
    assert not v.floor_known
    assert v.below_look == 0.125


def test_price_history_without_reference_has_no_removable():
    v = variances(replayed(reference=-1), np.arange(3))
    assert np.isnan(v.value.removable).all()
    assert not v.reference_known


def test_hidden_reference_still_serves():
    v = variances(replayed(reference=2), np.arange(2))
    assert v.value.removable.shape == (2,)
    assert np.isfinite(v.value.removable).all()


def test_price_history_errors_of_means_come_from_the_resamples():
    ledger = replayed(reference=2)
    b = breakdown(ledger, np.arange(3))
    picks = ledger.resamples
    means = ledger.totals[0][picks].mean(axis=1)
    assert b.mean_se[0, -1, -1] == pytest.approx(means.std(ddof=1), rel=1e-9)


def test_hedging_simulation_obeys_the_identity():
    hedged = hedge_calls(trades=(4, 16), looks=16, paths=500, seed=2, ticket=0.01)
    np.testing.assert_allclose(hedged.components.sum(axis=1), hedged.cash, atol=1e-11)
    assert (hedged.components[1, HEDGED.index("lag")] == 0.0).all()
