"""The exact engine: moments of the hedged P&L by backward recursion, without random numbers.

For geometric Brownian motions and time-based schedules. Definitions are those of the simulating engine: everything is
discounted, gross P&L is everything but costs, the floor is premium edge, revaluation and vol gap. Every figure is
computed on a lattice of log prices and again on finer and wider ones until it stands still; the last change is its
error.

Between two trades a hedge unit earns sum_l w_l dX_l over the looks. Where the weights w_l change (a yield, or the rate
for a future) this is not a function of the two ends alone; its mean and variance given the ends are closed forms of the
lognormal bridge and enter exactly. What is left out is its departure from a normal law given the ends, which touches
the third and fourth moments only; it is bounded, the bound is part of their error, and a schedule for which it matters
is refused.
"""

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field, fields

import numpy as np

from hedgesim.book import Book, exposure, premium_received
from hedgesim.costs import CostTerms
from hedgesim.engine.floor import FloorLaw, covariance_with_floor, floor_law
from hedgesim.engine.lattice import ExactUnavailable, Inputs, Level, lay_schedule, level, read_inputs
from hedgesim.kernels.exact import MOMENT_ROWS, run_schedule
from hedgesim.market import Floats, Ints, LookGrid, Market, frozen
from hedgesim.paths.gbm import Gbm
from hedgesim.schedules import Compiled

__all__ = ["ExactFigures", "ExactResult", "ExactUnavailable", "exact"]

_MOST_LEVELS = 8
# Skewness and kurtosis are held to this many tolerances, the figures in currency to one.
_SHAPE = 100.0
# Errors of the book's tables stay this far below the tolerance.
_TABLES = 0.05


@dataclass(frozen=True)
class ExactFigures:
    """Figures of each schedule, discounted currency; all arrays are (schedule,).

    Attributes
    ----------
    mean, variance, third, fourth : of the total P&L; the last three are central moments
    mean_gross, variance_gross : of everything but costs
    mean_floor, variance_floor : of premium edge, revaluation and vol gap, the same for all schedules
    mean_costs, variance_costs : of costs, which are negative
    covariance_gross_floor, covariance_costs_gross : as named
    """

    mean: Floats
    variance: Floats
    third: Floats
    fourth: Floats
    mean_gross: Floats
    variance_gross: Floats
    mean_floor: Floats
    variance_floor: Floats
    mean_costs: Floats
    variance_costs: Floats
    covariance_gross_floor: Floats
    covariance_costs_gross: Floats

    @property
    def std(self) -> Floats:
        """Standard deviation of the total."""
        return np.sqrt(self.variance)

    @property
    def skew(self) -> Floats:
        """Skewness of the total, nan where it does not vary."""
        with np.errstate(all="ignore"):
            return np.asarray(self.third / self.variance**1.5)

    @property
    def kurtosis(self) -> Floats:
        """Kurtosis of the total, 3 for a normal; nan where it does not vary."""
        with np.errstate(all="ignore"):
            return np.asarray(self.fourth / self.variance**2)

    @property
    def removable(self) -> Floats:
        """Variance that trading more would remove: Var(gross) - Var(floor)."""
        return self.variance_gross - self.variance_floor


@dataclass(frozen=True)
class ExactResult:
    """Result of the exact engine.

    Attributes
    ----------
    schedules : names
    figures : see there
    error : name of a figure or property of `ExactFigures` -> its estimated error, (schedule,), same units
    nodes : (schedule,) lattice nodes at the last look, most of any underlying
    refinements : (schedule,) lattices tried
    """

    schedules: tuple[str, ...]
    figures: ExactFigures
    error: dict[str, Floats]
    nodes: Ints
    refinements: Ints


@dataclass(frozen=True)
class _Piece:
    """One underlying under one schedule: the rows of `run_schedule`, Cov(gross, floor), and what the bridge leaves."""

    moments: Floats
    gross_floor: float
    floor: FloorLaw
    nodes: int
    left_third: float
    left_fourth: float


@dataclass
class _Done:
    """What stands after the refinements of one schedule."""

    figures: dict[str, float]
    error: dict[str, float]
    nodes: int = 0
    refinements: int = field(default=1)


def exact(
    *,
    market: Market,
    book: Book,
    grid: LookGrid,
    compiled: Compiled,
    source: Gbm,
    costs: CostTerms,
    tolerance: float = 1e-6,
    threads: int | None = None,
) -> ExactResult:
    """Moments of the P&L of the book under every schedule.

    Parameters
    ----------
    market, book, grid, compiled, source, costs : the experiment, resolved; as for `simulate`
    tolerance : largest change of a figure between the last two lattices, relative to the standard deviation of the
        P&L (variances: to twice the variance); 100 times as much for skewness and kurtosis
    threads : worker threads, default one a core

    Raises
    ------
    ExactUnavailable
        when underlyings are correlated, prices stand still between trades, or the tolerance cannot be met
    """
    correlation = np.asarray(source.correlation)
    if np.abs(correlation - np.diag(np.diagonal(correlation))).max() > 0.0:
        raise ExactUnavailable("the exact engine needs uncorrelated underlyings; simulate answers for correlated ones")
    inputs = read_inputs(
        market=market, book=book, grid=grid, source=source, costs=costs, tolerance=max(_TABLES * tolerance, 1e-12)
    )
    constants = _constants(inputs)
    names = compiled.names
    previous: dict[int, dict[str, float]] = {}
    done: dict[int, _Done] = {}
    floor = _Floor(inputs, compiled)
    with ThreadPoolExecutor(max_workers=threads or os.cpu_count() or 1) as pool:
        for number in range(_MOST_LEVELS):
            wanted = [s for s in range(len(names)) if s not in done]
            if not wanted:
                break
            for s, pieces in _pieces(pool, inputs, compiled, wanted, number, floor).items():
                figures = _combine(pieces, constants)
                left = _left_out(pieces, figures)
                _refuse(names[s], figures, left, tolerance)
                if s in previous:
                    error = _change(figures, previous[s])
                    for name, bound in left.items():
                        error[name] += bound
                    floor.judge(s, error, _scale(figures), tolerance)
                    if _within(figures, error, tolerance):
                        done[s] = _Done(figures, error, max(p.nodes for p in pieces), number + 1)
                previous[s] = figures
    for s, name in enumerate(names):
        if s not in done:
            raise ExactUnavailable(f"{name}: the tolerance {tolerance:g} is not met on {_MOST_LEVELS} lattices")
    return _result(names, [done[s] for s in range(len(names))])


class _Floor:
    """The floor's share of the figures; smooth, it stands still before the rest does and is then refined no further."""

    def __init__(self, inputs: Inputs, compiled: Compiled) -> None:
        self._inputs, self._compiled = inputs, compiled
        self._errors: dict[int, dict[str, float]] = {}
        self.laws: list[FloorLaw] = []
        self.covariance: dict[tuple[int, int], float] = {}

    def refine(self, pool: ThreadPoolExecutor, schedules: list[int], number: int) -> None:
        """Work off the next level for those schedules, unless all of them stand still."""
        if all(s in self._errors for s in schedules):
            return
        underlyings = range(len(self._inputs.market.names))
        self.laws = list(pool.map(lambda u: floor_law(self._inputs, u, level(number)), underlyings))
        pairs = [(s, u) for s in schedules for u in underlyings]
        at = self._compiled.trades_at
        found = pool.map(lambda p: covariance_with_floor(self._inputs, p[1], at[p[0]], self.laws[p[1]]), pairs)
        self.covariance |= dict(zip(pairs, found, strict=True))

    def judge(self, schedule: int, error: dict[str, float], scale: float, tolerance: float) -> None:
        """Note that a schedule's floor stands still, a tenth of what is allowed; later put that error back."""
        if schedule in self._errors:
            error |= self._errors[schedule]
            return
        own = {name: error[name] for name in ("mean_floor", "variance_floor", "covariance_gross_floor")}
        allowed = 0.1 * tolerance * scale
        squares = max(own["variance_floor"], own["covariance_gross_floor"])
        if own["mean_floor"] <= allowed and squares <= 2.0 * allowed * scale:
            self._errors[schedule] = own


def _pieces(
    pool: ThreadPoolExecutor, inputs: Inputs, compiled: Compiled, schedules: list[int], number: int, floor: _Floor
) -> dict[int, list[_Piece]]:
    """Every underlying under each of the schedules on one level of refinement, the most frequent schedules first."""
    underlyings = range(len(inputs.market.names))
    order = sorted(schedules, key=lambda s: -int(compiled.trades_at[s].sum()))
    flying = {
        (s, u): pool.submit(_moments, inputs, u, compiled.trades_at[s], level(number), compiled.names[s])
        for s in order
        for u in underlyings
    }
    floor.refine(pool, order, number)
    pieces: dict[int, list[_Piece]] = {}
    for s in order:
        pieces[s] = []
        for u in underlyings:
            moments, nodes, left_third, left_fourth = flying[s, u].result()
            pieces[s].append(_Piece(moments, floor.covariance[s, u], floor.laws[u], nodes, left_third, left_fourth))
    return pieces


def _moments(
    inputs: Inputs, underlying: int, trades_at: np.ndarray, at: Level, name: str
) -> tuple[Floats, int, float, float]:
    walk = lay_schedule(inputs, underlying, trades_at, at, name)
    out = np.empty(len(MOMENT_ROWS))
    run_schedule(
        underlying,
        walk.lattice,
        walk.steps,
        walk.trading,
        walk.strikes,
        inputs.slope,
        inputs.mark_slope,
        inputs.mark_strike,
        inputs.payoff,
        walk.break_room,
        out,
    )
    return out, int(walk.lattice.high[-1] - walk.lattice.low[-1] + 1), walk.left_third, walk.left_fourth


def _constants(inputs: Inputs) -> tuple[float, float]:
    """What is known at the inception of gross P&L, and of the floor."""
    received = float(premium_received(inputs.book, inputs.market).sum())
    at_hedge = float(exposure(inputs.book, inputs.market, vol=inputs.book.hedge_vol).value.sum())
    # Premium edge plus the revaluation's start: marks less premiums, then hedge value less mark.
    return received, received + at_hedge


def _combine(pieces: list[_Piece], constants: tuple[float, float]) -> dict[str, float]:
    """Figures of the book from independent underlyings: means and variances add, and so do cumulants."""
    rows = {name: np.array([p.moments[k] for p in pieces]) for k, name in enumerate(MOMENT_ROWS)}
    second = rows["second"]
    pairs = float(second.sum() ** 2 - (second**2).sum())
    mean_gross, mean_costs = constants[0] + float(rows["gross"].sum()), float(rows["costs"].sum())
    return {
        "mean": mean_gross + mean_costs,
        "variance": float(second.sum()),
        "third": float(rows["third"].sum()),
        "fourth": float(rows["fourth"].sum()) + 3.0 * pairs,
        "mean_gross": mean_gross,
        "variance_gross": float(rows["gross_gross"].sum()),
        "mean_floor": constants[1] + sum(p.floor.mean for p in pieces),
        "variance_floor": sum(p.floor.variance for p in pieces),
        "mean_costs": mean_costs,
        "variance_costs": float(rows["costs_costs"].sum()),
        "covariance_gross_floor": sum(p.gross_floor for p in pieces),
        "covariance_costs_gross": float(rows["gross_costs"].sum()),
    }


_NAMES = tuple(f.name for f in fields(ExactFigures))
_DERIVED = ("std", "skew", "kurtosis", "removable")


def _derived(figures: dict[str, float]) -> dict[str, float]:
    one = ExactFigures(**{name: np.array(figures[name]) for name in _NAMES})
    return {name: float(getattr(one, name)) for name in _DERIVED}


def _change(now: dict[str, float], before: dict[str, float]) -> dict[str, float]:
    """Absolute change of every figure; a shape that does not exist, of a P&L that does not vary, has none."""
    a, b = now | _derived(now), before | _derived(before)
    return {name: abs(a[name] - b[name]) if np.isfinite(a[name] - b[name]) else 0.0 for name in a}


def _left_out(pieces: list[_Piece], figures: dict[str, float]) -> dict[str, float]:
    """Bounds on what the bridge leaves out of the third and fourth moments, and of the shape."""
    third, variance = sum(p.left_third for p in pieces), figures["variance"]
    if third == 0.0 or variance <= 0.0:
        return {}
    # The fourth moment holds the third of a step times the deviation so far, four times over.
    fourth = 4.0 * third * float(np.sqrt(variance)) + sum(p.left_fourth for p in pieces)
    return {"third": third, "fourth": fourth, "skew": third / variance**1.5, "kurtosis": fourth / variance**2}


def _refuse(name: str, figures: dict[str, float], left: dict[str, float], tolerance: float) -> None:
    for shape in ("skew", "kurtosis"):
        if left.get(shape, 0.0) > _SHAPE * tolerance * max(1.0, abs(_derived(figures)[shape])):
            raise ExactUnavailable(
                f"{name}: between its trades the yield (or the rate of a future) moves the {shape} by up to "
                f"{left[shape]:.1e}, which the exact engine leaves out"
            )


def _scale(figures: dict[str, float]) -> float:
    return float(np.sqrt(max(figures["variance"], figures["variance_gross"], 0.0)))


def _within(figures: dict[str, float], error: dict[str, float], tolerance: float) -> bool:
    scale = _scale(figures)
    shape = _derived(figures)
    for name, change in error.items():
        if name in ("third", "fourth"):
            continue
        if name in ("skew", "kurtosis"):
            allowed = _SHAPE * tolerance * max(1.0, abs(shape[name]))
            if not np.isfinite(shape[name]):
                continue
        elif name.startswith(("variance", "covariance", "removable")):
            allowed = 2.0 * tolerance * scale**2
        else:
            allowed = tolerance * scale
        if change > allowed:
            return False
    return True


def _result(names: tuple[str, ...], done: list[_Done]) -> ExactResult:
    return ExactResult(
        schedules=names,
        figures=ExactFigures(**{name: frozen([d.figures[name] for d in done]) for name in _NAMES}),
        error={name: frozen([d.error[name] for d in done]) for name in (*_NAMES, *_DERIVED)},
        nodes=frozen([d.nodes for d in done], np.int64),
        refinements=frozen([d.refinements for d in done], np.int64),
    )
