"""What a hedge trade costs."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

COST_KINDS = ("spread", "commission", "tickets")


@dataclass(frozen=True)
class CostTerms:
    """Cost terms by underlying, in the market's currency.

    A trade of x units at price S costs half_spread |x| S + per_unit |x| + per_trade, the last only when x is not zero.

    Attributes
    ----------
    half_spread : fraction of the traded notional, 0.0002 for 2 bp
    per_unit : commission per unit of the underlying
    per_trade : ticket charge per trade
    """

    half_spread: Floats
    per_unit: Floats
    per_trade: Floats
