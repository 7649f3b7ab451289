"""Standard normals as pure functions of (seed, stream, path, look).

Every path owns a small-state SFC64 stream (Doty-Humphrey's PractRand; the generator that numpy ships under this
name), its state hashed from seed, stream and path, and turns it into normals with the 256-level ziggurat of Marsaglia
and Tsang (2000), J. Statistical Software 5(8), laid out as numpy lays it out: the same state gives numpy's own normals.
"""

from decimal import Decimal, localcontext

import numpy as np
from numpy.typing import NDArray

from hedgesim.kernels.jit import device, kernel
from hedgesim.kernels.rows import LANES, strip_of_eight, whole_lanes
from hedgesim.kernels.vector_math import exp, log

Floats = NDArray[np.float64]

_LEVELS = 256
_TAIL_START = "3.6541528853610087963519472518"
_WARM_UP_ROUNDS = 12
_U1, _U3, _U8, _U9, _U11, _U24, _U40, _U52_MASK, _U255 = (
    np.uint64(k) for k in (1, 3, 8, 9, 11, 24, 40, 0x000FFFFFFFFFFFFF, 0xFF)
)
_TO_UNIT = 1.0 / 9007199254740992.0


def _ziggurat() -> tuple[NDArray[np.uint64], NDArray[np.float64], NDArray[np.float64]]:
    """Acceptance bounds, strip widths and densities; in decimals, so that they are the same on every machine."""
    with localcontext() as context:
        context.prec = 50
        two52 = Decimal(2) ** 52
        r = Decimal(_TAIL_START)

        def density(x: Decimal) -> Decimal:
            return (-x * x / 2).exp()

        # Area of a strip = r f(r) + the tail beyond r; erfc by its continued fraction, which converges fast at r.
        fraction = Decimal(0)
        for k in range(400, 0, -1):
            fraction = k / (r + fraction)
        area = r * density(r) + density(r) / (r + fraction)
        x = [Decimal(0)] * _LEVELS
        x[_LEVELS - 1] = r
        for i in range(_LEVELS - 2, 0, -1):
            inside = area / x[i + 1] + density(x[i + 1])
            x[i] = (-2 * inside.ln()).sqrt()
        bound = np.zeros(_LEVELS, dtype=np.uint64)
        width = np.zeros(_LEVELS)
        height = np.zeros(_LEVELS)
        bound[0] = int(r * density(r) / area * two52)
        width[0] = float(area / density(r) / two52)
        height[0] = 1.0
        for i in range(1, _LEVELS):
            bound[i] = int(x[i - 1] / x[i] * two52)
            width[i] = float(x[i] / two52)
            height[i] = float(density(x[i]))
    return bound, width, height


ZIGGURAT = _ziggurat()
_BOUND, _WIDTH, _HEIGHT = ZIGGURAT
_STRIPS = np.stack([_WIDTH, _BOUND.astype(np.float64)], axis=1)
_TAIL = float(_TAIL_START)
_INV_TAIL = float(1 / Decimal(_TAIL_START))


@device
def _mix(x: np.uint64) -> np.uint64:
    """Finaliser of splitmix64 (Steele, Lea and Flood 2014, OOPSLA)."""
    x = (x ^ (x >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    x = (x ^ (x >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return x ^ (x >> np.uint64(31))


@device
def seed_streams(seed: np.uint64, stream: np.uint64, first_path: int, state: NDArray[np.uint64]) -> None:
    """Fill `state` (4, paths) for the paths from `first_path` on."""
    golden = np.uint64(0x9E3779B97F4A7C15)
    key = _mix(_mix(seed + golden) + stream * golden + _U1)
    for p in range(state.shape[1]):
        a = _mix(key + (np.uint64(first_path) + np.uint64(p)) * golden)
        b = _mix(a + golden)
        c = _mix(b + golden)
        w = _U1
        for _ in range(_WARM_UP_ROUNDS):
            out = a + b + w
            w = w + _U1
            a = b ^ (b >> _U11)
            b = c + (c << _U3)
            c = ((c << _U24) | (c >> _U40)) + out
        state[0, p] = a
        state[1, p] = b
        state[2, p] = c
        state[3, p] = w


@device
def _next(state: NDArray[np.uint64], p: int) -> np.uint64:
    a, b, c, w = state[0, p], state[1, p], state[2, p], state[3, p]
    out = a + b + w
    state[0, p] = b ^ (b >> _U11)
    state[1, p] = c + (c << _U3)
    state[2, p] = ((c << _U24) | (c >> _U40)) + out
    state[3, p] = w + _U1
    return out


@device
def _finish(state: NDArray[np.uint64], p: int, r: np.uint64) -> float:
    """Go on from a draw that fell outside the sure part of its strip."""
    while True:
        level = r & _U255
        r = r >> _U8
        whole = (r >> _U1) & _U52_MASK
        x = np.float64(whole) * _WIDTH[level]
        if r & _U1:
            x = -x
        if whole < _BOUND[level]:
            return x
        if level == np.uint64(0):
            while True:
                xx = -_INV_TAIL * log(1.0 - np.float64(_next(state, p) >> _U11) * _TO_UNIT)
                yy = -log(1.0 - np.float64(_next(state, p) >> _U11) * _TO_UNIT)
                if yy + yy > xx * xx:
                    x = _TAIL + xx
                    return -x if (whole >> _U8) & _U1 else x
        else:
            u = np.float64(_next(state, p) >> _U11) * _TO_UNIT
            if (_HEIGHT[level - _U1] - _HEIGHT[level]) * u + _HEIGHT[level] < exp(-0.5 * x * x):
                return x
        r = _next(state, p)


@device
def draw_normals(
    state: NDArray[np.uint64],
    raw: NDArray[np.uint64],
    width: Floats,
    spare: Floats,
    late: NDArray[np.int32],
    out: Floats,
) -> None:
    """One normal for each path of the tile.

    The passes over the tile have no branch; the 1 % of draws that leave the sure part of their strip are finished
    apart, each on its own path's stream. The tile is a multiple of `LANES` long; `raw`, `width`, `spare` (as long) and
    `late` (one longer) are scratch.
    """
    n = out.shape[0]
    if n % LANES != 0:
        raise ValueError("the length of the tile must be a multiple of LANES")
    a_, b_, c_, w_ = state[0], state[1], state[2], state[3]
    for p in range(n):
        a, b, c, w = a_[p], b_[p], c_[p], w_[p]
        r = a + b + w
        a_[p] = b ^ (b >> _U11)
        b_[p] = c + (c << _U3)
        c_[p] = ((c << _U24) | (c >> _U40)) + r
        w_[p] = w + _U1
        raw[p] = r
    for p in range(0, n, LANES):
        strip_of_eight(_STRIPS, raw, out, spare, p)
    found = 0
    for p in range(n):
        late[found] = p
        found += spare[p] <= 0.0
    # The draw that decides in the wedge of a strip: all at once, since exp vectorises. A height of 2 leaves the tail.
    for k in range(found):
        p = late[k]
        level = raw[p] & _U255
        spare[k] = 2.0
        if level != np.uint64(0):
            u = np.float64(_next(state, p) >> _U11) * _TO_UNIT
            spare[k] = (_HEIGHT[level - _U1] - _HEIGHT[level]) * u + _HEIGHT[level]
        width[k] = -0.5 * out[p] * out[p]
    for k in range(found):
        width[k] = exp(width[k])
    for k in range(found):
        if spare[k] >= width[k]:
            p = late[k]
            again = raw[p] if raw[p] & _U255 == np.uint64(0) else _next(state, p)
            out[p] = _finish(state, p, again)


@kernel
def continue_normals(state: NDArray[np.uint64], out: Floats) -> None:
    """Normals by (look, path) from a given SFC64 state (4, path), which is moved on."""
    n = out.shape[1]
    lanes = whole_lanes(n)
    raw, late = np.empty(lanes, dtype=np.uint64), np.empty(lanes + 1, dtype=np.int32)
    width, spare, fresh = np.empty(lanes), np.empty(lanes), np.empty(lanes)
    padded = np.zeros((4, lanes), dtype=np.uint64)
    padded[:, :n] = state
    for look in range(out.shape[0]):
        draw_normals(padded, raw, width, spare, late, fresh)
        out[look] = fresh[:n]
    state[:] = padded[:, :n]


@kernel
def fill_normals(seed: int, stream: int, first_path: int, out: Floats) -> None:
    """Normals by (look, path) for the paths from `first_path` on, as every engine sees them."""
    state = np.empty((4, out.shape[1]), dtype=np.uint64)
    seed_streams(np.uint64(seed), np.uint64(stream), first_path, state)
    continue_normals(state, out)
