"""The standard desk: books of 20 or 2,000 positions, ten or forty schedules, 504 looks over 63 trading days."""

from typing import Any

import numpy as np

from hedgesim.book import Expiry, Position, expiry_looks, settle_terms
from hedgesim.costs import CostTerms
from hedgesim.market import Market, frozen, session_grid
from hedgesim.paths.gbm import Gbm
from hedgesim.schedules import Schedule, compile_schedules

LOOKS, DAYS = 504, 63
EVERY = (1, 2, 4, 8, 16, 32, 63, 126, 252, 504)
# Thirty more intervals, so that forty schedules are forty different ones.
MORE = (
    3,
    5,
    6,
    7,
    9,
    10,
    11,
    12,
    13,
    14,
    15,
    17,
    18,
    20,
    21,
    22,
    24,
    27,
    28,
    30,
    36,
    40,
    42,
    48,
    56,
    72,
    84,
    100,
    168,
    336,
)
HALF_SPREAD = 2e-4
HEDGE_VOL, REALISED_VOL = 0.22, 0.19
RATE, YIELD, DRIFT, SPOT = 0.03, 0.01, 0.04, 100.0


def desk(positions: int = 20, schedules: int = 10) -> dict[str, Any]:
    """Arguments of `simulate`; strikes are all different, spread evenly over 80 to 120 % of the spot."""
    market = Market(("CORVANE",), RATE, frozen([SPOT]), frozen([YIELD]), frozen([False], bool))
    grid = session_grid(days=DAYS, looks_per_day=LOOKS // DAYS, day_count="business-252", session_hours=8, overnight=0)
    j = np.arange(positions)
    look = np.array([LOOKS // 3, 2 * LOOKS // 3, LOOKS])[j % 3]
    strikes = np.linspace(80.0, 120.0, positions)
    # Both signs and both types, in a pattern that repeats after 60 positions.
    units = np.where(j % 5 < 2, 1000.0, -1500.0) * 20 / positions
    book = settle_terms(
        [
            Position(0, bool(n % 2), float(strikes[n]), False, float(units[n]), False, Expiry(days=look[n] / 8))
            for n in range(positions)
        ],
        spot=market.spot,
        mark_vol=np.array([HEDGE_VOL]),
        hedge_vol=np.array([np.nan]),
        expiry_look=look,
        expiry_t=grid.t[look],
        expiry_s=grid.s[look],
        initial_units=np.zeros(1),
    )
    rules = [Schedule(f"every {k} looks", "looks", k) for k in (EVERY + MORE)[:schedules]]
    return {
        "market": market,
        "book": book,
        "grid": grid,
        "compiled": compile_schedules(rules, grid, expiry_looks(book)),
        "source": Gbm(frozen([REALISED_VOL]), frozen([DRIFT]), np.eye(1), seed=7),
        "costs": CostTerms(frozen([HALF_SPREAD]), frozen([0.0]), frozen([0.0])),
    }
