"""The baseline of the benchmarks does the same job: its ledger agrees with ours."""

import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parent / "benchmarks"))

from desk import desk
from numpy_script import ledger

from hedgesim.engine.simulate import COMPONENTS, simulate


def test_the_numpy_script_has_the_same_distribution_of_every_component():
    case, paths = desk(), 4096
    mine = simulate(**case, count=20_000, detail=True)
    theirs = ledger(case, paths)
    names = {
        "vol_gap": "vol_gap",
        "sampling": "sampling",
        "remainder": "remainder",
        "lag": "lag",
        "spread": "costs.spread",
    }
    for name, component in names.items():
        ours = mine.detail[:, 0, COMPONENTS.index(component)]
        for s in range(1, len(ours)):
            sample = theirs[name] if theirs[name].ndim == 1 else theirs[name][s]
            scale = ours[s].std()
            assert sample.mean() == pytest.approx(ours[s].mean(), abs=5 * scale / paths**0.5)
            # Kurtosis of these components stays below 30: the error of a standard deviation is below 2.7 / sqrt n of it.
            assert sample.std() == pytest.approx(scale, rel=5 * 2.7 / paths**0.5)
    assert np.abs(theirs["vol_gap"] + theirs["sampling"] + theirs["remainder"] + theirs["lag"] + theirs["spread"] - theirs["total"]).max() < 1e-6  # fmt: skip


def test_the_desk_is_the_one_the_table_speaks_of():
    case = desk()
    assert case["book"].size == 20
    assert case["grid"].looks == 504
    assert len(case["compiled"].names) == 10
    assert len(np.unique(case["book"].strike)) == 20
    assert set(np.sign(case["book"].units)) == {-1.0, 1.0}
    assert len(desk(2000, 40)["compiled"].names) == 40
