"""Certified per-look tables of a book: one look-up a path and look, whatever the number of positions.

With vols fixed at the inception, the book at a look is a function of y = log X alone (X the price in discounted
units). With A_j = units_j exp((b - r) T_j), D_j = units_j K_j exp(-r T_j), k_j = log K_j - b T_j,
w_j = vol_j sqrt(variance years to expiry):

    U(X) = X P(y) - Q(y),  P = sum_j A_j N((y - k_j)/w_j + w_j/2) [less A_j for puts],  g = X^2 U'' = X P'(y)
    Q = sum_j D_j N((y - k_j)/w_j - w_j/2) [less D_j for puts]

so hedge slope and gamma come from one quintic. The error of two-point quintic Hermite interpolation is at most
h^6 max|F^(6)| / 46080 for the value and 7.453e-5 h^5 max|F^(6)| for the slope (from the remainder
F^(6) h^6 u^3 (1-u)^3 / 720; its derivative to leading order); with max|N^(6)| = 2.307 the cell width follows from a
tolerance, and the bound holds without sampling.
"""

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from hedgesim.book import Book
from hedgesim.kernels.rows import LANES
from hedgesim.kernels.simulate import Payoff
from hedgesim.kernels.tables import Table, fill_cells
from hedgesim.market import Floats, Ints, LookGrid, Market
from hedgesim.paths.gbm import REACH_SD, Reach

TOLERANCE = 1e-6
_VALUE_BOUND = 2.307 / 46080
_SLOPE_BOUND = 7.453e-5 * 2.307
_PEAK_PROBES = 24


@dataclass(frozen=True)
class Terms:
    """The constants of the positions, in the module's notation; arrays by position.

    Attributes
    ----------
    slope : A_j
    strike_leg : D_j
    log_strike : k_j, the log of the strike in discounted units
    """

    slope: Floats
    strike_leg: Floats
    log_strike: Floats


def terms(book: Book, market: Market) -> Terms:
    """Discounted constants of each position."""
    growth = market.growth[book.underlying]
    return Terms(
        slope=book.units * np.exp((growth - market.rate) * book.expiry_t),
        strike_leg=book.units * book.strike * np.exp(-market.rate * book.expiry_t),
        log_strike=np.log(book.strike) - growth * book.expiry_t,
    )


def slope_table(
    book: Book,
    market: Market,
    grid: LookGrid,
    reach: Reach,
    *,
    vol: Floats,
    looks: Ints,
    weight: Floats | None = None,
    tolerance: float = TOLERANCE,
    threads: int = 1,
) -> Table:
    """Table of P(y) with its slope at `looks`, at the vols given, each position weighted by `weight` (default 1).

    The error is at most `tolerance` times the gross weighted slope sum|A_j| for P, and `tolerance` times the peak
    gross gamma for P'.
    """
    t = terms(book, market)
    a = t.slope if weight is None else t.slope * weight
    return _table(book, t, grid, reach, a, vol, looks, 0.5, tolerance, threads)


def strike_table(
    book: Book,
    market: Market,
    grid: LookGrid,
    reach: Reach,
    *,
    vol: Floats,
    looks: Ints,
    tolerance: float = TOLERANCE,
    threads: int = 1,
) -> Table:
    """Table of Q(y) at `looks`; errors as for `slope_table`, relative to sum|D_j|."""
    t = terms(book, market)
    return _table(book, t, grid, reach, t.strike_leg, vol, looks, -0.5, tolerance, threads)


def _table(
    book: Book,
    t: Terms,
    grid: LookGrid,
    reach: Reach,
    amount: Floats,
    vol: Floats,
    looks: Ints,
    shift: float,
    tolerance: float,
    threads: int,
) -> Table:
    shape = reach.centre.shape
    start, cells = np.zeros(shape, dtype=np.int64), np.zeros(shape, dtype=np.int64)
    low, per_cell = np.zeros(shape), np.zeros(shape)
    todo = [(u, int(look)) for u in range(shape[0]) for look in looks]
    live: dict[tuple[int, int], tuple[Ints, Floats]] = {}

    def measure(part: list[tuple[int, int]]) -> None:
        for u, look in part:
            j = np.flatnonzero((book.underlying == u) & (book.expiry_look > look))
            if not len(j):
                continue
            root = vol[j] * np.sqrt(book.expiry_s[j] - grid.s[look])
            bottom, top = _span(reach, u, look, t.log_strike[j], root)
            width = _cell_width(np.abs(amount[j]), t.log_strike[j], root, tolerance)
            n = max(1, int(np.ceil((top - bottom) / width)))
            cells[u, look], low[u, look], per_cell[u, look] = n, bottom, n / (top - bottom)
            live[u, look] = j, root

    parts = [todo[k::threads] for k in range(threads)]
    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(measure, parts))
    filled = 0
    for u, look in todo:
        start[u, look] = filled
        filled += int(cells[u, look])
    coefficients = _line_aligned(filled)

    def fill(part: list[tuple[int, int]]) -> None:
        for u, look in part:
            if (u, look) not in live:
                continue
            j, root = live[u, look]
            first = start[u, look]
            fill_cells(
                low[u, look],
                1.0 / per_cell[u, look],
                amount[j],
                t.log_strike[j],
                root,
                shift,
                -float(amount[j][~book.is_call[j]].sum()),
                coefficients[first : first + cells[u, look]],
            )

    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(fill, parts))
    return Table(start, cells, low, per_cell, coefficients)


def _line_aligned(rows: int) -> Floats:
    """Room for `rows` rows of a table, each on one line of the cache."""
    space = np.zeros((rows + 1) * LANES)
    skip = -space.ctypes.data % (8 * LANES) // 8
    return space[skip : skip + rows * LANES].reshape(rows, LANES)


def _span(reach: Reach, u: int, look: int, log_strike: Floats, root: Floats) -> tuple[float, float]:
    """Where paths go and the functions still move; a sliver when the two do not meet."""
    centre, half = float(reach.centre[u, look]), max(float(reach.half[u, look]), 1e-9)
    moving = REACH_SD * root + 0.5 * root * root
    bottom = max(centre - half, float((log_strike - moving).min()))
    top = min(centre + half, float((log_strike + moving).max()))
    if top - bottom < 1e-9:
        middle = min(max(centre, float((log_strike - moving).min())), float((log_strike + moving).max()))
        bottom, top = middle - 1e-9, middle + 1e-9
    return bottom, top


def _cell_width(size: Floats, log_strike: Floats, root: Floats, tolerance: float) -> float:
    """Largest width that keeps both error bounds; `size` are the absolute amounts."""
    total = float(size.sum())
    if total == 0.0:
        return float("inf")
    sixth = float((size / root**6).sum())
    value = (tolerance * total / (_VALUE_BOUND * sixth)) ** (1 / 6)
    slope = (tolerance * _peak_slope(size, log_strike, root) / (_SLOPE_BOUND * sixth)) ** (1 / 5)
    return float(min(value, slope))


def _peak_slope(size: Floats, log_strike: Floats, root: Floats) -> float:
    """Peak of the gross slope sum_j size_j phi((y - k_j) / w_j) / w_j, looked for at some of the strikes."""
    some = log_strike[np.linspace(0, len(log_strike) - 1, min(len(log_strike), _PEAK_PROBES)).astype(np.int64)]
    density = np.exp(-0.5 * np.square((some[:, None] - log_strike) / root)) / np.sqrt(2 * np.pi)
    return float((density @ (size / root)).max())


def payoff_knots(book: Book, market: Market, looks: int) -> Payoff:
    """Discounted payoff of the positions that settle at each look, as straight lines between sorted strikes.

    Between knots the payoff is intercept + slope X; `delivered` are the units that physical settlement hands over.
    """
    t = terms(book, market)
    underlyings = len(market.names)
    first = np.full((underlyings, looks + 1), -1, dtype=np.int64)
    size = np.zeros((underlyings, looks + 1), dtype=np.int64)
    knots: list[Floats] = []
    lines: list[Floats] = []
    filled = 0
    for u in range(underlyings):
        for look in np.unique(book.expiry_look[(book.underlying == u) & (book.expiry_look <= looks)]):
            j = np.flatnonzero((book.underlying == u) & (book.expiry_look == look))
            order = j[np.argsort(t.log_strike[j], kind="stable")]
            call = book.is_call[order]
            delivered = np.where(book.physical[order], book.units[order], 0.0)
            # Calls start to pay above their strike, puts stop: the same step on the way up.
            rows = []
            for column, sign in ((t.strike_leg, -1.0), (t.slope, 1.0)):
                step = sign * column[order]
                rows.append(np.concatenate([[-step[~call].sum()], -step[~call].sum() + np.cumsum(step)]))
            rows.append(np.concatenate([[-delivered[~call].sum()], -delivered[~call].sum() + np.cumsum(delivered)]))
            first[u, look], size[u, look] = filled, len(order)
            knots.append(np.concatenate([np.exp(t.log_strike[order]), [np.inf]]))
            lines.append(np.stack(rows, axis=1))
            filled += len(order) + 1
    return Payoff(
        first=first,
        size=size,
        knot=np.concatenate(knots) if knots else np.zeros(0),
        line=np.concatenate(lines) if lines else np.zeros((0, 3)),
    )
