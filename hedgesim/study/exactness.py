"""What the exact engine and the published laws say beside a simulated ledger.

Without random numbers: the figures of the shown schedules, a dense curve over the number of trades with its optimum and
what moves it, and the premiums at which each schedule breaks even.
"""

from dataclasses import dataclass

from hedgesim.engine.exact import ExactFigures
from hedgesim.market import Floats, Ints
from hedgesim.study.theory import Law

# Points of the curve, before those that fall on the same number of trades are merged.
_CURVE_POINTS = 30
# The curve is for a chart and its optimum: relative tolerance on the standard deviation, unless a looser one is asked.
CURVE_TOLERANCE = 1e-4
# Points on either side of the optimum that are worked off anew for a changed market.
_NEIGHBOURS = 2
_VOL_CHANGE, _DRIFT_CHANGE, _COST_FACTORS = 0.02, 0.05, (0.5, 2.0)
# A book whose net vega is a smaller share of its gross vega has no meaningful vol to be sold at.
_LEAST_NET_VEGA = 0.1
_LARGEST_SHIFT = 2.0
_FEWEST_GROUPS, _FEWEST_IN_GROUP, _USUAL_GROUP = 64, 200, 1000
SCALED_QUANTILES = ("p01", "p05", "es975")


@dataclass(frozen=True)
class Agreement:
    """Exact figures of the total P&L of the shown schedules, discounted currency; arrays are by shown schedule.

    Attributes
    ----------
    mean, std : exact
    mean_error, std_error : the exact engine's own error estimates
    z_mean, z_std : (simulated - exact) over the simulated standard error; nan where that is unknown or zero
    figures : every exact figure, see there
    """

    mean: Floats
    std: Floats
    mean_error: Floats
    std_error: Floats
    z_mean: Floats
    z_std: Floats
    figures: ExactFigures


@dataclass(frozen=True)
class Curve:
    """Exact curve over N equal hedge intervals of the life; arrays are by point, N ascending.

    Attributes
    ----------
    trades : N, from 1 to every look
    mean_cost : mean price of trading as the settings count it, a positive amount of currency
    std : of the total P&L
    gross, floor, removable : variances before costs, as in `ExactFigures`
    objective : mean cost + cost_of_risk x risk; nan where the risk has no exact figure
    best : index of the smallest objective, -1 where there is none
    note : what a reader must know, else empty
    """

    trades: Ints
    mean_cost: Floats
    std: Floats
    gross: Floats
    floor: Floats
    removable: Floats
    objective: Floats
    best: int
    note: str


@dataclass(frozen=True)
class Sensitivity:
    """Optimum of the same curve after one change.

    Attributes
    ----------
    change : in words; hedge vols and marks stay as they are
    best_trades : N of the smallest objective, -1 where the exact engine cannot tell
    objective : there, nan where unknown
    """

    change: str
    best_trades: int
    objective: float


@dataclass(frozen=True)
class BreakEven:
    """At which premiums a schedule earns nothing on average, costs included.

    Only premiums that are taken at the mark move; hedges and marks stay as they are, so that the spread of the P&L
    does too.

    Attributes
    ----------
    schedule : name
    vol_shift : parallel shift of the mark vols, a fraction (0.01 is one vol point), at which those premiums must be
        sold or bought for a mean total of zero; nan where there is none, see `note`
    sold_vol : mean of the mark vols so shifted, each weighted with its absolute vega, nan likewise
    amount : minus the exact mean total: currency that the premiums lack, negative where they leave something
    cushion : the same shift, from the mark, for mean / std = cost_of_risk; nan likewise and where the risk is not std
    cushion_amount : currency that the premiums lack for it; nan where the risk is not std
    note : why something is in currency only, else empty
    """

    schedule: str
    vol_shift: float
    sold_vol: float
    amount: float
    cushion: float
    cushion_amount: float
    note: str


@dataclass(frozen=True)
class Gain:
    """What scaling the totals to their exact mean and std is worth.

    Attributes
    ----------
    quantile_ratio : (schedule, quantile) effective paths gained: (standard error before / after)^2, quantiles as in
        `SCALED_QUANTILES`; below 1 it does harm, nan where nothing varies
    ratio_error : its standard error, for normal errors
    note : how it was measured
    """

    quantile_ratio: Floats
    ratio_error: Floats
    note: str


@dataclass(frozen=True)
class Exactness:
    """Everything that needs no random numbers.

    Attributes
    ----------
    agreement, curve : None where the exact engine cannot answer, for `reason`
    sensitivities : of the optimum of the curve; empty without one
    break_even : by shown schedule; empty without exact figures
    laws : published laws, each saying whether it holds for this experiment
    gain : None without exact figures or with too few paths, see `notes`
    reason : one line on what is missing and why, else empty
    seconds : wall-clock time of all this
    notes : what else a reader must know
    """

    agreement: Agreement | None
    curve: Curve | None
    sensitivities: tuple[Sensitivity, ...]
    break_even: tuple[BreakEven, ...]
    laws: tuple[Law, ...]
    gain: Gain | None
    reason: str
    seconds: float
    notes: tuple[str, ...] = ()
