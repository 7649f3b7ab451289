"""From the rows of the tile kernel to the components and totals of a schedule."""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from hedgesim.kernels.jit import kernel
from hedgesim.kernels.moments import comoments

Floats = NDArray[np.float64]


class Accounts(NamedTuple):
    """Constants that turn kernel rows into ledger components.

    Attributes
    ----------
    premium_edge, premium_cash : (underlying,) premiums less model value, and the money received at the inception
    half_spread, per_unit, per_trade : (underlying,) cost terms
    trades, tickets : (schedule,) trading looks, and the sum of exp(-r t) over them
    moving : (underlying * component,) columns that vary from path to path
    """

    premium_edge: Floats
    premium_cash: Floats
    half_spread: Floats
    per_unit: Floats
    per_trade: Floats
    trades: Floats
    tickets: Floats
    moving: NDArray[np.bool_]


@kernel
def close_accounts(
    path_rows: Floats,
    trade_rows: Floats,
    accounts: Accounts,
    schedule: int,
    columns: Floats,
    totals: Floats,
    trades: Floats,
    turnover: Floats,
) -> None:
    """Components and totals of one schedule.

    Parameters
    ----------
    path_rows, trade_rows : `path_out` of `run_chunk`, and `trade_out` of the schedule, (underlying, row, path)
    columns : (underlying * component, path), overwritten: premium_edge, revaluation, vol_gap, sampling, lag,
        remainder, spread, commission, tickets; those that the path alone decides are filled for schedule 0 and then
        left
    totals, trades, turnover : (path,), overwritten; totals come from the cash account, not from the columns. `trades`
        counts looks at which anything was traded, added over underlyings
    """
    underlyings, _, n = path_rows.shape
    width = columns.shape[0] // underlyings
    totals[:] = 0.0
    trades[:] = 0.0
    turnover[:] = 0.0
    for u in range(underlyings):
        path, trade = path_rows[u], trade_rows[u]
        part = columns[u * width : (u + 1) * width]
        part[0] = accounts.premium_edge[u]
        for row, c in ((0, 1), (1, 2), (2, 3), (3, 5)):
            if schedule == 0:
                part[c] = path[row]
        half_spread, per_unit, per_trade = accounts.half_spread[u], accounts.per_unit[u], accounts.per_trade[u]
        tickets, looks = accounts.tickets[schedule], accounts.trades[schedule]
        for p in range(n):
            part[4, p] = path[4, p] + trade[0, p]
            part[6, p] = -half_spread * trade[1, p]
            part[7, p] = -per_unit * trade[2, p]
            part[8, p] = -per_trade * (tickets - trade[4, p])
        for p in range(n):
            totals[p] += accounts.premium_cash[u] + path[5, p] + trade[0, p]
            totals[p] += part[6, p] + part[7, p] + part[8, p]
        for p in range(n):
            trades[p] += looks - trade[3, p]
            turnover[p] += trade[1, p]


@kernel
def close_chunk(
    path_rows: Floats,
    trade_rows: Floats,
    accounts: Accounts,
    by_schedule: NDArray[np.bool_],
    totals: Floats,
    trades: Floats,
    turnover: Floats,
    mean: Floats,
    products: Floats,
    kept: Floats,
) -> None:
    """Totals and moments of every schedule, with the arguments of `close_accounts` and `comoments` by schedule.

    `by_schedule` marks the columns that differ between schedules; `kept` (schedule, column, path) takes every
    component of every path when it has room for any.
    """
    columns = np.empty((mean.shape[1], path_rows.shape[2]))
    fresh = np.ones(len(by_schedule), dtype=np.bool_)
    for s in range(trade_rows.shape[0]):
        close_accounts(path_rows, trade_rows[s], accounts, s, columns, totals[s], trades[s], turnover[s])
        if s > 0:
            # What the path alone decides is the same under every schedule.
            mean[s] = mean[0]
            products[s] = products[0]
            fresh[:] = by_schedule
        comoments(columns, accounts.moving, fresh, mean[s], products[s])
        if kept.shape[0] > 0:
            kept[s] = columns
