"""Discrete-time delta-hedging backtester for option books."""

from collections.abc import Sequence
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import os

    from hedgesim.experiment.run import Result

__version__ = "0.1.0"
__all__ = ["__version__", "run"]


def run(
    path: "str | os.PathLike[str]",
    *,
    overrides: Sequence[str] = (),
    threads: int | None = None,
    detail: bool = False,
) -> "Result":
    """Run an experiment file in memory; nothing is written.

    Parameters
    ----------
    path : path-like
        The YAML file.
    overrides : sequence of str
        ``path.to.key=value`` each, as with ``--set``; list items are numbered from 0, later ones win.
    threads : int, optional
        Worker threads, default one a core. Results do not depend on it.
    detail : bool
        Keep every P&L component of every path in ``ledger.detail``, (schedule, underlying, component, path), in
        discounted currency. A price history always does.

    Returns
    -------
    Result
        ``sentence`` and ``findings``; the pandas frames ``schedules``, ``breakdown``, ``frequency`` and
        ``price_of_risk``, as in the CSV files of a run; ``study`` and ``ledger`` behind them.

    Raises
    ------
    ExperimentError
        With every problem found in the experiment or a file it names.
    """
    # Here and not above: importing the package stays light.
    from hedgesim.experiment.loader import load_experiment
    from hedgesim.experiment.run import run_experiment

    return run_experiment(load_experiment(path, overrides), threads=threads, detail=detail)
