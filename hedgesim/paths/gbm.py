"""Correlated geometric Brownian motions, stepped exactly in log price."""

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from hedgesim.market import Floats, LookGrid, Market

if TYPE_CHECKING:
    from hedgesim.kernels.simulate import Diffusion

# A normal leaves this many standard deviations once in 5e16 draws, and the normal distribution function is 0 or 1
# there to within 1e-17.
REACH_SD = 8.5


@dataclass(frozen=True)
class Reach:
    """Log prices that the paths can visit, (underlying, look): centre and half-width."""

    centre: Floats
    half: Floats


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

    @property
    def mixing(self) -> Floats:
        """Lower Cholesky factor of the correlation."""
        return np.asarray(np.linalg.cholesky(self.correlation), dtype=np.float64)

    def variance(self, grid: LookGrid) -> Floats:
        """Integrated variance of each look, (underlying, look)."""
        return np.outer(self.realised_vol**2, np.diff(grid.s))

    def log_drift(self, market: Market, grid: LookGrid) -> Floats:
        """Mean step of log X, X the price in discounted units, (underlying, look)."""
        return np.outer(self.drift - market.growth, np.diff(grid.t)) - 0.5 * self.variance(grid)

    def reach(self, market: Market, grid: LookGrid) -> Reach:
        """Log prices (discounted units) within `REACH_SD` standard deviations at each look."""
        variance = np.outer(self.realised_vol**2, grid.s)
        centre = np.log(market.spot)[:, None] + np.outer(self.drift - market.growth, grid.t) - 0.5 * variance
        return Reach(centre=centre, half=REACH_SD * np.sqrt(variance))

    def diffusion(self, market: Market, grid: LookGrid, hedge_vol: Floats, one_vol: bool) -> "Diffusion":
        """Step constants for the kernel; `hedge_vol` (underlying,) is read where `one_vol` holds."""
        from hedgesim.kernels.simulate import Diffusion

        variance, ds = self.variance(grid), np.diff(grid.s)
        return Diffusion(
            start=np.asarray(market.spot, dtype=np.float64),
            log_start=np.log(market.spot),
            mean=self.log_drift(market, grid),
            sd=np.sqrt(variance),
            variance=variance,
            hedge_variance=np.outer(hedge_vol**2, ds),
            step_s=ds,
            mixing=self.mixing,
            one_vol=one_vol,
        )

    def prices(self, market: Market, grid: LookGrid, *, first_path: int, count: int) -> Floats:
        """Prices (underlying, look, path) of `count` paths, the same that the simulating kernel walks."""
        from hedgesim.kernels.random import fill_normals

        fresh = np.empty((len(self.realised_vol), grid.looks, count))
        for u in range(len(fresh)):
            fill_normals(self.seed, u, first_path, fresh[u])
        mixed = np.einsum("uv,vip->uip", self.mixing, fresh)
        steps = self.log_drift(market, grid)[:, :, None] + np.sqrt(self.variance(grid))[:, :, None] * mixed
        log_x = np.concatenate([np.zeros((len(fresh), 1, count)), np.cumsum(steps, axis=1)], axis=1)
        carry = np.exp(np.outer(market.growth, grid.t))
        return np.asarray(market.spot[:, None, None] * carry[:, :, None] * np.exp(log_x))
