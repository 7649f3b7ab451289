"""Correlated geometric Brownian motions, stepped exactly in log price."""

from dataclasses import dataclass

import numpy as np

from hedgesim.kernels.simulate import Diffusion
from hedgesim.market import Floats, LookGrid, Market
from hedgesim.tables import Reach

_REACH_SD = 8.5


@dataclass(frozen=True)
class Gbm:
    """Real-world law of the paths; arrays are by underlying.

    Attributes
    ----------
    realised_vol : annual volatility that the paths have
    drift : expected growth of the price per calendar year: E[S_t] = S_0 exp(drift t)
    correlation : (underlying, underlying) of the Brownian motions
    seed : of all random numbers
    """

    realised_vol: Floats
    drift: Floats
    correlation: Floats
    seed: int

    def diffusion(self, market: Market, grid: LookGrid, hedge_vol: Floats, one_vol: bool) -> Diffusion:
        """Step constants for the kernel; `hedge_vol` (underlying,) is read where `one_vol` holds."""
        dt, ds = np.diff(grid.t), np.diff(grid.s)
        variance = np.outer(self.realised_vol**2, ds)
        excess_growth = self.drift - market.growth
        return Diffusion(
            start=np.asarray(market.spot, dtype=np.float64),
            log_start=np.log(market.spot),
            mean=np.outer(excess_growth, dt) - 0.5 * variance,
            sd=np.sqrt(variance),
            variance=variance,
            hedge_variance=np.outer(hedge_vol**2, ds),
            step_s=ds,
            mixing=np.linalg.cholesky(self.correlation),
            one_vol=one_vol,
        )

    def reach(self, market: Market, grid: LookGrid) -> Reach:
        """Log prices (discounted units) within 8.5 standard deviations at each look."""
        variance = np.outer(self.realised_vol**2, grid.s)
        centre = np.log(market.spot)[:, None] + np.outer(self.drift - market.growth, grid.t) - 0.5 * variance
        return Reach(centre=centre, half=_REACH_SD * np.sqrt(variance))
