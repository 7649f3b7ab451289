"""The exact engine against published laws and known answers."""

import numpy as np
import pytest
from simulate_cases import one_option

from hedgesim.engine.exact import exact
from hedgesim.schedules import Schedule

# Hull, Options, Futures, and Other Derivatives, 11th ed., ch. 19: the option of the worked example.
HULL = {"spot": 49.0, "strike": 50.0, "years": 20 / 52, "rate": 0.05, "vol": 0.20}


def every(*looks):
    return tuple(Schedule(f"every {k} looks", "looks", k) for k in looks)


# Discounted standard deviation per option at N rebalances, drift = rate, no costs: the sum of variances of orthogonal
# martingale increments E[payoff*^2] - C0^2 + sum_i {E[D_i^2 x_i^2](e^{sigma^2 h} - 1) - 2 E[D_i x_i (C(x e^{sigma^2 h}) -
# C(x))]}, evaluated for Hull's option by Gauss-Legendre quadrature (derived; no published table gives these digits).
HULL_STD = {
    4: 0.9843049823, 5: 0.8878704949, 10: 0.6416585330, 20: 0.4610663186, 21: 0.4503821344, 40: 0.3298430559,
    80: 0.2351955216, 84: 0.2296399531, 252: 0.1337079424,
}  # fmt: skip


@pytest.mark.parametrize("n", HULL_STD)
def test_the_standard_deviation_of_the_worked_example(n):
    result = exact(**one_option(**HULL, looks=n, schedules=every(1)), tolerance=1e-9)
    assert result.figures.std[0] == pytest.approx(HULL_STD[n], abs=1e-8)
    assert result.figures.mean[0] == pytest.approx(0.0, abs=1e-8)
    assert result.error["std"][0] < 1e-9


def test_schedules_that_skip_looks_are_those_of_coarser_grids():
    result = exact(**one_option(**HULL, looks=80, schedules=every(20, 16, 8, 4, 2, 1)))
    assert result.figures.std == pytest.approx([HULL_STD[n] for n in (4, 5, 10, 20, 40, 80)], rel=1e-6)
    assert result.figures.removable == pytest.approx(np.square(result.figures.std), rel=1e-12)
