"""Rules that say at which looks the hedge is rebalanced, compiled to the plain arrays that the kernels read."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from hedgesim.market import Flags, Floats, Ints, LookGrid, frozen

Kind = Literal["looks", "days", "trades", "sessions", "never"]

# Clock times are sums of binary fractions of a day: far larger than their rounding, far smaller than a look.
_CLOCK_TOLERANCE_DAYS = 1e-7


class ScheduleError(ValueError):
    """A rule that cannot be laid on the looks of this experiment. `index` is its place in the list of schedules."""

    def __init__(self, index: int, message: str, advice: str) -> None:
        super().__init__(f"{message} - {advice}")
        self.index = index
        self.message = message
        self.advice = advice


@dataclass(frozen=True)
class Schedule:
    """One time-based rule.

    Attributes
    ----------
    name : label in files and reports
    kind : `looks` (every `amount` looks), `days` (every `amount` trading days on the session clock), `trades`
        (`amount` equal intervals over the life), `sessions` (at `edges`), `never` (entry only)
    amount : see kind; unused for `sessions` and `never`
    edges : `open`, `close` or both, for `sessions`
    """

    name: str
    kind: Kind
    amount: float = 0.0
    edges: tuple[str, ...] = ()


@dataclass(frozen=True)
class Compiled:
    """Schedules laid on one watch grid.

    Attributes
    ----------
    names : by schedule
    trades_at : (schedule, look): the hedge is set at this look. True at look 0 (entry), at every expiry and at the
        last look, where it is unwound
    intervals : by schedule: hedge intervals over the life that the rule itself asks for, expiries not counted
    interval_years : by schedule: calendar years of the rule's usual interval
    equal : by schedule: all intervals of the rule are equally long in variance years, so that it belongs to the fit
        of the frequency law
    """

    names: tuple[str, ...]
    trades_at: Flags
    intervals: Ints
    interval_years: Floats
    equal: Flags


def compile_schedules(schedules: Sequence[Schedule], grid: LookGrid, expiry_looks: Ints) -> Compiled:
    """Lay `schedules` on the looks of `grid`; every expiry is a trading look of every schedule.

    Raises
    ------
    ScheduleError
        when an interval is shorter than a look, or on a regular grid is not a whole number of looks
    """
    last = grid.looks
    flags = np.zeros((len(schedules), last + 1), dtype=bool)
    for row, schedule in enumerate(schedules):
        flags[row, _rule_looks(row, schedule, grid)] = True
    flags[:, 0] = flags[:, last] = True
    intervals = flags[:, :last].sum(axis=1)
    steps = [np.diff(grid.s[np.flatnonzero(f)]) for f in flags]
    equal = [len(x) > 0 and float(np.ptp(x)) <= 1e-6 * float(x.mean()) for x in steps]
    usual = [float(np.median(np.diff(grid.t[np.flatnonzero(f)]))) for f in flags]
    flags[:, expiry_looks[expiry_looks <= last]] = True
    return Compiled(
        names=tuple(s.name for s in schedules),
        trades_at=frozen(flags, bool),
        intervals=frozen(intervals, np.int64),
        interval_years=frozen(usual),
        equal=frozen(equal, bool),
    )


def _rule_looks(row: int, schedule: Schedule, grid: LookGrid) -> Ints:
    last = grid.looks
    if schedule.kind == "never":
        return np.zeros(1, dtype=np.int64)
    if schedule.kind == "looks":
        return np.arange(0, last + 1, int(schedule.amount))
    if schedule.kind == "trades":
        n = int(schedule.amount)
        if n > last:
            raise ScheduleError(row, f"{n} trades do not fit into {last} looks", f"at most {last} trades")
        return np.round(np.arange(n) * last / n).astype(np.int64)
    if schedule.kind == "sessions":
        wanted = np.zeros(last + 1, dtype=bool)
        for edge in schedule.edges:
            wanted |= grid.is_open if edge == "open" else grid.is_close
        return np.flatnonzero(wanted)
    return _clock_looks(row, schedule, grid)


def _clock_looks(row: int, schedule: Schedule, grid: LookGrid) -> Ints:
    """First look at or after each multiple of the interval on the session clock."""
    step, clock = schedule.amount, grid.clock - grid.clock[0]
    moving = np.diff(clock)
    moving = moving[moving > _CLOCK_TOLERANCE_DAYS]
    finest = float(moving.min()) if len(moving) else 0.0
    if step < finest - _CLOCK_TOLERANCE_DAYS:
        raise ScheduleError(
            row,
            f"an interval of {step:.6g} days is shorter than a look of {finest:.6g} days",
            "a longer interval, or more looks per day",
        )
    targets = np.arange(0.0, clock[-1] + _CLOCK_TOLERANCE_DAYS, step)
    looks = np.searchsorted(clock, targets - _CLOCK_TOLERANCE_DAYS)
    looks = looks[looks <= grid.looks]
    if (
        grid.regular
        and len(looks)
        and float(np.abs(clock[looks] - targets[: len(looks)]).max()) > 10 * (_CLOCK_TOLERANCE_DAYS)
    ):
        raise ScheduleError(
            row,
            f"an interval of {step:.6g} days is not a whole number of looks of {finest:.6g} days",
            f"a multiple of {finest:.6g} days, or `every: k looks`",
        )
    return np.unique(looks)
