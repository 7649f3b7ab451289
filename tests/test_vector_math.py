"""The vector functions against mpmath and scipy."""

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import ndtr

from hedgesim.kernels import vector_math
from hedgesim.kernels.jit import kernel

_exp, _log, _cdf, _near, _tiny = (
    vector_math.exp,
    vector_math.log,
    vector_math.normal_cdf,
    vector_math.expm1_near_zero,
    vector_math.expm1_tiny,
)


@kernel
def _all(x, out):
    for i in range(len(x)):
        out[0, i] = _exp(x[i])
        out[1, i] = _log(abs(x[i]) + 1e-300)
        out[2, i] = _cdf(x[i])


def _relative(ours, exact):
    return abs(mpmath.mpf(ours) / exact - 1)


@given(st.floats(-690, 690))
def test_exp_is_within_a_unit_in_the_last_place(x):
    with mpmath.workdps(40):
        assert _relative(_exp(x), mpmath.exp(x)) < 3e-16


@given(st.floats(1e-300, 1e300))
def test_log_is_within_a_unit_in_the_last_place(x):
    with mpmath.workdps(40):
        exact = mpmath.log(x)
        assert abs(mpmath.mpf(_log(x)) - exact) <= 3e-16 * abs(exact)


@given(st.floats(-0.3465, 0.3465))
def test_expm1_keeps_relative_accuracy_near_zero(x):
    with mpmath.workdps(40):
        exact = mpmath.expm1(x)
        assert abs(mpmath.mpf(_near(x)) - exact) <= 3e-16 * abs(exact)
        if abs(x) <= 1 / 12:
            assert abs(mpmath.mpf(_tiny(x)) - exact) <= 3e-16 * abs(exact)


def test_the_normal_distribution_function_matches_scipy():
    x = np.linspace(-9, 9, 20_001)
    out = np.empty((3, len(x)))
    _all(x, out)
    assert np.abs(out[2] - ndtr(x)).max() < 5e-16
    assert out[2, -1] == 1.0
    assert _cdf(-40.0) == pytest.approx(0.0, abs=1e-290)


def test_one_call_and_a_vectorised_loop_give_the_same_bits():
    x = np.random.default_rng(1).normal(0, 5, 1000)
    out = np.empty((3, len(x)))
    _all(x, out)
    assert np.array_equal(out[0], [_exp(v) for v in x])
    assert np.array_equal(out[2], [_cdf(v) for v in x])
