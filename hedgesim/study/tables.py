"""A study as tables: data frames and CSV files. Column names are stable; an empty cell means that it does not apply."""

from collections.abc import Mapping
from dataclasses import asdict, fields
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from hedgesim.market import Floats
from hedgesim.study.exactness import SCALED_QUANTILES, BreakEven, exactly_scaled
from hedgesim.study.studies import Study

# File columns of the variance parts.
_PART_COLUMNS = {
    "discretisation": "var_discretisation",
    "floor": "var_floor",
    "costs": "var_costs",
    "discretisation_floor": "cov_discretisation_floor",
    "discretisation_costs": "cov_discretisation_costs",
    "floor_costs": "cov_floor_costs",
    "gross": "var_gross",
    "removable": "removable",
    "total": "var_total",
}
EXACT_SCHEDULE_COLUMNS = ("exact_mean", "exact_std")
EXACT_FREQUENCY_COLUMNS = ("exact_var_gross", "exact_var_floor", "exact_removable", "exact_var_total")
_SCALED_COLUMNS = tuple(f"{name}_exactly_scaled" for name in SCALED_QUANTILES)

Exact = Mapping[str, Mapping[str, float]]


def exact_columns(study: Study) -> Exact:
    """Figures computed without noise: schedule -> column of the two tables below -> figure; empty without any."""
    agreement = None if study.exactness is None else study.exactness.agreement
    if agreement is None:
        return {}
    figures = agreement.figures
    columns = {
        "exact_mean": agreement.mean,
        "exact_std": agreement.std,
        "exact_var_gross": figures.variance_gross,
        "exact_var_floor": figures.variance_floor,
        "exact_removable": figures.removable,
        "exact_var_total": figures.variance,
        **dict(zip(_SCALED_COLUMNS, exactly_scaled(study.distribution, agreement).T, strict=True)),
    }
    return {
        name: {column: float(values[i]) for column, values in columns.items()} for i, name in enumerate(study.schedules)
    }


def schedules_table(study: Study, *, exact: Exact | None = None) -> pd.DataFrame:
    """A row per schedule: distribution, variance parts, residual delta, choice.

    Parameters
    ----------
    study : the results
    exact : schedule -> column of `EXACT_SCHEDULE_COLUMNS` -> figure computed without noise, where there is one
    """
    d, v, c = study.distribution, study.variances, study.choice
    costs = study.breakdown.components.index("costs")
    p01, p05, p50, p95, p99 = d.quantiles.T
    columns: dict[str, Any] = {
        "schedule": study.schedules,
        "engine": study.engine,
        "trades": study.trades,
        "turnover": study.turnover,
        "mean": d.mean,
        "mean_se": d.mean_se,
        "std": d.std,
        "std_se": d.std_se,
        "skew": d.skew,
        "kurtosis": d.kurtosis,
        "p01": p01,
        "p05": p05,
        "p50": p50,
        "p95": p95,
        "p99": p99,
        "es95": d.es95,
        "es95_se": d.es95_se,
        "es975": d.es975,
        "cost_mean": -study.breakdown.mean[:, -1, costs],
        "std_gross": v.std_gross,
        "std_floor": v.std_floor,
        "removable": v.value.removable,
        "delta_mean": study.delta_mean,
        "delta_p99": study.delta_p99,
        **_exact_columns(study.schedules, EXACT_SCHEDULE_COLUMNS, exact),
        "es975_se": d.es975_se,
        "cost_mean_se": study.breakdown.mean_se[:, -1, costs],
        "std_gross_se": _root_error(v.std_gross, v.error.gross),
        "std_floor_se": _root_error(v.std_floor, v.error.floor),
        "removable_se": v.error.removable,
        "removable_share": v.removable_share,
        "removable_share_se": v.removable_share_se,
        "day_std": study.day_std,
        "day_worst": study.day_worst,
        "mean_cost": c.mean_cost,
        "mean_cost_se": c.mean_cost_se,
        "risk": c.risk,
        "risk_se": c.risk_se,
        "objective": c.objective,
        "objective_se": c.objective_se,
        "difference": c.difference,
        "difference_se": c.difference_se,
        "within_limit": c.within_limit,
        "tied": c.tied,
        "efficient": c.efficient,
        "chosen": (np.arange(len(study.schedules)) == c.chosen) & c.comparable,
        **_exact_columns(study.schedules, _SCALED_COLUMNS, exact),
    }
    return pd.DataFrame(columns)


def breakdown_table(study: Study) -> pd.DataFrame:
    """A row per schedule, underlying (and `all`) and component."""
    b = study.breakdown
    index = pd.MultiIndex.from_product(
        [study.schedules, b.underlyings, b.components], names=["schedule", "underlying", "component"]
    )
    figures = {"mean": b.mean, "mean_se": b.mean_se, "std": b.std, "share": b.share}
    return pd.DataFrame({name: values.ravel() for name, values in figures.items()}, index=index).reset_index()


def frequency_table(study: Study, *, exact: Exact | None = None) -> pd.DataFrame:
    """A row per time-based schedule: variance parts with errors, the asymptotic line, the fitted law, cost growth.

    Parameters
    ----------
    study : the results
    exact : schedule -> column of `EXACT_FREQUENCY_COLUMNS` -> figure computed without noise, where there is one
    """
    f, v, rows = study.frequency, study.variances, study.frequency.rows
    names = tuple(study.schedules[i] for i in rows)
    parts = {column: getattr(v.value, name)[rows] for name, column in _PART_COLUMNS.items()}
    errors = {f"{column}_se": getattr(v.error, name)[rows] for name, column in _PART_COLUMNS.items()}
    unknown = np.full(len(rows), np.nan)
    columns: dict[str, Any] = {
        "schedule": names,
        "interval_years": f.interval_years,
        "trades": f.trades.astype(np.int64),
        **parts,
        **_exact_columns(names, EXACT_FREQUENCY_COLUMNS, exact),
        "asymptotic_var_discretisation": f.asymptotic_discretisation,
        "asymptotic_var_discretisation_se": f.asymptotic_discretisation_se,
        "asymptotic_removable": f.asymptotic_removable,
        "asymptotic_removable_se": f.asymptotic_removable_se,
        **errors,
        "fitted": [f.law is not None and name in f.law.points for name in names],
        "law_removable": unknown if f.law is None else f.law.removable(f.trades),
        "law_removable_se": unknown if f.law is None else f.law.removable_se(f.trades),
        "cost_exponent": f.cost_exponent,
        "cost_exponent_se": f.cost_exponent_se,
        "below_look": v.below_look,
    }
    return pd.DataFrame(columns)


def price_of_risk_table(study: Study) -> pd.DataFrame:
    """A row per efficient schedule, from most risk to least.

    What the next finer efficient schedule asks for a unit of risk, and the costs of risk between which the schedule is
    best (`best_to` is inf for the last; both empty when it is best at none).
    """
    c = study.choice
    order = [int(i) for i in np.argsort(-c.risk, kind="stable") if c.efficient[i]]
    finer = [study.schedules[c.next_finer[i]] if c.next_finer[i] >= 0 else None for i in order]
    return pd.DataFrame(
        {
            "schedule": [study.schedules[i] for i in order],
            "mean_cost": c.mean_cost[order],
            "mean_cost_se": c.mean_cost_se[order],
            "risk": c.risk[order],
            "risk_se": c.risk_se[order],
            "next_finer": finer,
            "price": c.price[order],
            "price_se": c.price_se[order],
            "best_from": c.best_from[order],
            "best_to": c.best_to[order],
            "within_limit": c.within_limit[order],
            "tied": c.tied[order],
        }
    )


def curve_table(study: Study) -> pd.DataFrame:
    """A row per number of equal intervals on the exact curve; no rows without one."""
    columns = ("N", "mean_cost", "std", "var_gross", "var_floor", "removable", "objective")
    curve = None if study.exactness is None else study.exactness.curve
    if curve is None:
        return pd.DataFrame({column: np.empty(0) for column in columns})
    values = (curve.trades, curve.mean_cost, curve.std, curve.gross, curve.floor, curve.removable, curve.objective)
    return pd.DataFrame(dict(zip(columns, values, strict=True)))


def break_even_table(study: Study) -> pd.DataFrame:
    """A row per schedule with the premiums at which it breaks even, see `BreakEven`; no rows without exact figures."""
    rows = () if study.exactness is None else study.exactness.break_even
    return pd.DataFrame([asdict(row) for row in rows], columns=[f.name for f in fields(BreakEven)])


def write_tables(study: Study, folder: Path, *, exact: Exact | None = None) -> tuple[Path, ...]:
    """Write schedules.csv, breakdown.csv, frequency.csv and price_of_risk.csv into an existing folder.

    With an exact curve also curve.csv, with exact figures also break_even.csv. Floats are written to the last bit.
    """
    tables = {
        "schedules.csv": schedules_table(study, exact=exact),
        "breakdown.csv": breakdown_table(study),
        "frequency.csv": frequency_table(study, exact=exact),
        "price_of_risk.csv": price_of_risk_table(study),
    }
    if study.exactness is not None and study.exactness.curve is not None:
        tables["curve.csv"] = curve_table(study)
    if study.exactness is not None and study.exactness.break_even:
        tables["break_even.csv"] = break_even_table(study)
    for name, table in tables.items():
        table.to_csv(folder / name, index=False, lineterminator="\n")
    return tuple(folder / name for name in tables)


def _exact_columns(names: tuple[str, ...], columns: tuple[str, ...], exact: Exact | None) -> dict[str, list[float]]:
    known: Exact = exact or {}
    return {column: [float(known.get(name, {}).get(column, np.nan)) for name in names] for column in columns}


def _root_error(root: Floats, error_of_square: Floats) -> Floats:
    """Standard error of a standard deviation from that of its variance."""
    return np.divide(error_of_square, 2.0 * root, out=np.full_like(root, np.nan), where=root > 0.0)
