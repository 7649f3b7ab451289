"""Branch-free exp, log and normal distribution function that LLVM vectorises, with the same bits on every processor.

Fused multiply-add is asked for by name: it rounds once wherever it runs, in hardware or in software.
"""

from typing import Any

import numpy as np
from llvmlite import ir
from numba import extending, types

from hedgesim.kernels.jit import device

_intrinsic: Any = extending.intrinsic

_LOG2E = 1.4426950408889634
_LN2_HIGH = 0.693147180369123816490
_LN2_LOW = 1.90821492927058770002e-10
_ROUNDER = 6755399441055744.0  # 1.5 * 2**52: adding it leaves the nearest integer in the low bits
_SQRT_HALF = 0.70710678118654752440
_INV_SQRT_2PI = 0.39894228040143267794


@_intrinsic
def as_bits(typingctx: Any, x: Any) -> Any:
    """The 64 bits of a float as a signed integer."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.bitcast(args[0], ir.IntType(64))

    return types.int64(types.float64), codegen


@_intrinsic
def as_float(typingctx: Any, x: Any) -> Any:
    """The float whose 64 bits are a signed integer."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.bitcast(args[0], ir.DoubleType())

    return types.float64(types.int64), codegen


@_intrinsic
def fma(typingctx: Any, a: Any, b: Any, c: Any) -> Any:
    """Fused multiply-add: a * b + c, rounded once."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.fma(*args)

    return types.float64(types.float64, types.float64, types.float64), codegen


@device
def _relative_growth(x: float) -> float:
    """(exp(x) - 1) / x for |x| <= ln(2)/2: Taylor series to degree 12."""
    p = 1.0 / 6227020800.0
    p = fma(p, x, 1.0 / 479001600.0)
    p = fma(p, x, 1.0 / 39916800.0)
    p = fma(p, x, 1.0 / 3628800.0)
    p = fma(p, x, 1.0 / 362880.0)
    p = fma(p, x, 1.0 / 40320.0)
    p = fma(p, x, 1.0 / 5040.0)
    p = fma(p, x, 1.0 / 720.0)
    p = fma(p, x, 1.0 / 120.0)
    p = fma(p, x, 1.0 / 24.0)
    p = fma(p, x, 1.0 / 6.0)
    p = fma(p, x, 0.5)
    return fma(p, x, 1.0)


@device
def expm1_near_zero(x: float) -> float:
    """exp(x) - 1 for |x| <= ln(2)/2, relative error under 3e-16."""
    return _relative_growth(x) * x


@device
def exp(x: float) -> float:
    """exp(x) for -700 < x < 700, relative error under 3e-16."""
    shifted = fma(x, _LOG2E, _ROUNDER)
    k = shifted - _ROUNDER
    r = fma(k, -_LN2_HIGH, x)
    r = fma(k, -_LN2_LOW, r)
    return as_float(as_bits(fma(_relative_growth(r), r, 1.0)) + (as_bits(shifted) << np.int64(52)))


@device
def log(x: float) -> float:
    """log(x) for normal positive x, relative error under 3e-16; finite nonsense otherwise."""
    bits = as_bits(x)
    # Mantissa into [sqrt(1/2), sqrt(2)).
    shift = (bits - np.int64(0x3FE6A09E667F3BCD)) >> np.int64(52)
    m = as_float(bits - (shift << np.int64(52)))
    f = m - 1.0
    s = f / (2.0 + f)
    z = s * s
    p = 1.0 / 19.0
    p = fma(p, z, 1.0 / 17.0)
    p = fma(p, z, 1.0 / 15.0)
    p = fma(p, z, 1.0 / 13.0)
    p = fma(p, z, 1.0 / 11.0)
    p = fma(p, z, 1.0 / 9.0)
    p = fma(p, z, 1.0 / 7.0)
    p = fma(p, z, 0.2)
    p = fma(p, z, 1.0 / 3.0)
    k = np.float64(shift)
    # f - f^2/2 + ... in the form of fdlibm's log, which keeps the leading term exact.
    half = 0.5 * f * f
    tail = s * (half + 2.0 * z * p) + k * _LN2_LOW
    return k * _LN2_HIGH - ((half - tail) - f)


@device
def expm1_tiny(x: float) -> float:
    """exp(x) - 1 for |x| <= 1/12: Taylor series to degree 9, relative error under 2e-16."""
    p = 1.0 / 362880.0
    p = fma(p, x, 1.0 / 40320.0)
    p = fma(p, x, 1.0 / 5040.0)
    p = fma(p, x, 1.0 / 720.0)
    p = fma(p, x, 1.0 / 120.0)
    p = fma(p, x, 1.0 / 24.0)
    p = fma(p, x, 1.0 / 6.0)
    p = fma(p, x, 0.5)
    p = fma(p, x, 1.0)
    return p * x


@device
def normal_cdf_and_pdf(x: float) -> tuple[float, float]:
    """Standard normal distribution function, absolute error under 2e-15, and density; one exp serves both.

    The far tail of the distribution function loses relative accuracy; beyond 37 the density is that at 37.

    Rational approximation of Hart (1968), Computer Approximations, no. 5666, as given by West (2005), Wilmott
    magazine (coefficients from memory; tested against scipy).
    """
    a = min(abs(x), 37.0)
    num = 3.52624965998911e-02
    num = fma(num, a, 0.700383064443688)
    num = fma(num, a, 6.37396220353165)
    num = fma(num, a, 33.912866078383)
    num = fma(num, a, 112.079291497871)
    num = fma(num, a, 221.213596169931)
    num = fma(num, a, 220.206867912376)
    den = 8.83883476483184e-02
    den = fma(den, a, 1.75566716318264)
    den = fma(den, a, 16.064177579207)
    den = fma(den, a, 86.7807322029461)
    den = fma(den, a, 296.564248779674)
    den = fma(den, a, 637.333633378831)
    den = fma(den, a, 793.826512519948)
    den = fma(den, a, 440.413735824752)
    bell = exp(-0.5 * a * a)
    tail = bell * num / den
    return (1.0 - tail if x > 0 else tail), _INV_SQRT_2PI * bell


@device
def normal_cdf(x: float) -> float:
    """Standard normal distribution function, see `normal_cdf_and_pdf`."""
    return normal_cdf_and_pdf(x)[0]
