"""The headline of a study: plain figures with errors for machines, one sentence for the desk."""

import math
from typing import Any

import numpy as np

from hedgesim.market import Floats
from hedgesim.study.choice import annual_hurdle
from hedgesim.study.exactness import SCALED_QUANTILES, Exactness
from hedgesim.study.law import Offset, PowerLaw
from hedgesim.study.money import money, money_with_error, percent
from hedgesim.study.settings import RiskKind
from hedgesim.study.studies import Study
from hedgesim.study.theory import misses

_RISK_WORDS: dict[RiskKind, str] = {
    "std": "standard deviation of P&L",
    "variance": "variance of P&L",
    "es975": "expected shortfall (mean of the worst 2.5 % of lives)",
}


def headline(study: Study) -> dict[str, Any]:
    """Every headline figure as `{"value", "se", "unit"}`, the choice and its confidence, the law, the warnings.

    Plain JSON: unknown and unbounded numbers are null. Figures are those of the chosen schedule unless named otherwise;
    a single life chooses none, and then they are null.
    """
    choice, figures, parts = study.choice, study.distribution, study.variances
    best = choice.chosen
    cash = study.settings.currency or "currency"
    cash2 = f"{cash}^2"
    unit = cash2 if study.settings.risk == "variance" else cash

    def figure(values: Floats, errors: Floats, unit: str) -> dict[str, Any]:
        known = choice.comparable
        return _figure(values[best] if known else math.nan, errors[best] if known else math.nan, unit)

    return {
        "engine": study.engine,
        "count": study.count,
        "sentence": sentence(study),
        "choice": {
            "schedule": study.schedules[best] if choice.comparable else None,
            "mean_cost": figure(choice.mean_cost, choice.mean_cost_se, cash),
            "mean_cost_counts": "costs and funding" if study.settings.mean == "costs" else "minus the total P&L",
            "risk": figure(choice.risk, figures.std_se if study.settings.risk == "std" else choice.risk_se, unit),
            "risk_measure": study.settings.risk,
            "objective": figure(choice.objective, choice.objective_se, cash),
            "limit": _plain(study.settings.limit),
            "limit_met": choice.limit_met if choice.comparable else None,
            "tied": tied(study),
            "confidence": study.settings.confidence,
            "best_at_cost_of_risk": {"from": _plain(choice.best_from[best]), "to": _plain(choice.best_to[best])},
        },
        "cost_of_risk": {
            "value": study.settings.cost_of_risk,
            "words": cost_of_risk_words(study),
            "annual_hurdle": _plain(annual_hurdle(study.settings)),
            "years": study.settings.years,
        },
        "mean": figure(figures.mean, figures.mean_se, cash),
        "std": figure(figures.std, figures.std_se, cash),
        "es95": figure(figures.es95, figures.es95_se, cash),
        "es975": figure(figures.es975, figures.es975_se, cash),
        "gross_variance": figure(parts.value.gross, parts.error.gross, cash2),
        "floor_variance": figure(parts.value.floor, parts.error.floor, cash2),
        "removable": figure(parts.value.removable, parts.error.removable, cash2),
        "removable_share": figure(parts.removable_share, parts.removable_share_se, "of gross variance"),
        "below_look_variance_estimate": _plain(parts.below_look),
        "law": _law(study.frequency.law, study.frequency.reason, cash2),
        "exact": None if study.exactness is None else _exact(study, study.exactness, cash),
        "warnings": list(study.warnings),
    }


def sentence(study: Study) -> str:
    """The finding in a trader's words; the figures after ± are one standard error."""
    choice, figures, settings = study.choice, study.distribution, study.settings
    if not choice.comparable:
        return _one_life(study)
    best = choice.chosen
    cash = settings.currency
    cost = float(choice.mean_cost[best])
    amount = money_with_error(abs(cost), float(choice.mean_cost_se[best]), currency=cash)
    if settings.mean == "costs":
        price = f"it costs {amount} a life"
    else:
        price = f"it {'earns' if cost < 0 else 'loses'} {amount} a life on average"
    std = money_with_error(float(figures.std[best]), float(figures.std_se[best]), currency=cash)
    clauses = [
        f"{_command(study.schedules[best])}: {price} and leaves a P&L standard deviation of {std}{_floor(study)}"
    ]
    if not choice.limit_met:
        clauses.append("no schedule meets the risk limit, this one comes nearest")
    others = tied(study)
    sure = f"at {100 * settings.confidence:g} % confidence"
    if others:
        names = others[0] if len(others) == 1 else f"{', '.join(others[:-1])} and {others[-1]}"
        clauses.append(f"{names} {'is' if len(others) == 1 else 'are'} statistically tied {sure}")
    elif len(study.schedules) > 1:
        rival = "" if choice.limit_met and choice.within_limit.all() else " within the limit" * choice.limit_met
        clauses.append(f"no other schedule{rival} is as good {sure}")
    return "; ".join(clauses) + "."


def _one_life(study: Study) -> str:
    """What a single life can say: its outcomes, and that they decide nothing."""
    total, cost, cash = study.distribution.mean, study.choice.mean_cost, study.settings.currency
    low, high = int(np.argmin(total)), int(np.argmax(total))
    if len(total) == 1:
        outcome = f"{study.schedules[0]} ends at {money(float(total[0]), currency=cash)}"
    else:
        ends = [f"{money(float(total[i]), currency=cash)} ({study.schedules[i]})" for i in (low, high)]
        outcome = f"the P&L runs from {ends[0]} to {ends[1]}"
    if study.settings.mean == "costs":
        paid = [money(float(x), currency=cash) for x in (cost.min(), cost.max())]
        outcome += f", costs {'of ' + paid[0] if len(total) == 1 else f'from {paid[0]} to {paid[1]}'} included"
    return f"One life gives no distribution, so that no schedule is called best: {outcome}."


def tied(study: Study) -> list[str]:
    """Schedules that cannot be told from the chosen one, itself left out; none when nothing is chosen."""
    if not study.choice.comparable:
        return []
    flags = study.choice.tied
    return [name for i, name in enumerate(study.schedules) if flags[i] and i != study.choice.chosen]


def cost_of_risk_words(study: Study) -> str:
    """What the cost of risk says, with its equivalent as an annual hurdle."""
    settings = study.settings
    cash = settings.currency or "currency unit"
    per = f"{cash} squared" if settings.risk == "variance" else cash
    words = (
        f"{settings.cost_of_risk:g} {cash} of expected P&L given up for each {per} of {_RISK_WORDS[settings.risk]} "
        f"removed, over a life of {settings.years:.4g} years"
    )
    hurdle = annual_hurdle(settings)
    if math.isnan(hurdle):
        return words
    root = f"{settings.cost_of_risk:g} = {hurdle:.3g} x sqrt({settings.years:.4g})"
    return f"{words}; as an annual return-to-risk hurdle {hurdle:.3g} ({root})"


def _command(schedule: str) -> str:
    return f"Rebalance {schedule}" if schedule.startswith(("every ", "at ")) else f"Run {schedule}"


def _floor(study: Study) -> str:
    """The clause on what trading more would remove."""
    share = float(study.variances.removable_share[study.choice.chosen])
    if math.isnan(share):
        return ""
    if not study.variances.floor_known:
        if share == 0.0:
            return "; it is the finest schedule that the prices allow"
        change = "less than 0.1 %" if abs(share) < 0.0005 else percent(-share)
        return f"; trading at every look would change its variance before costs by {change}"
    if share <= 0.0:
        return ", whose variance before costs trading more would not reduce"
    return f", {percent(1.0 - share)} of whose variance before costs no schedule removes"


def _law(law: PowerLaw | None, reason: str, unit: str) -> dict[str, Any]:
    if law is None:
        return {"exponent": None, "reason": reason}
    return {
        "formula": "removable variance = coefficient x trades^-exponent"
        if math.isinf(law.reference)
        else f"removable variance = coefficient x (trades^-exponent - {law.reference:g}^-exponent)",
        "exponent": _figure(law.exponent, law.exponent_se, "power of trades"),
        "exponent_interval": [_plain(law.low), _plain(law.high)],
        "coefficient": _figure(law.coefficient, law.coefficient_se, unit),
        "chi2": _plain(law.chi2),
        "degrees_of_freedom": law.dof,
        "p_value": _plain(law.p_value),
        "misfit": law.misfit,
        "schedules": list(law.points),
        "left_out": [{"schedule": name, "reason": why} for name, why in law.left_out],
        "free_floor_check": _offset(law.offset, unit),
    }


def laws_off(study: Study) -> dict[str, float]:
    """Law -> the law over what is found for the chosen schedule, 1 where it is exact; nan where nothing compares.

    Floor and costs are compared with the exact figures where there are any, else with the simulated ones; the
    discretisation, which the exact engine does not tell from its lean on the floor, always with the simulated ones.
    Laws of equal intervals are compared for a schedule that has them, and none where no schedule is chosen.
    """
    told, best = study.exactness, study.choice.chosen
    if told is None:
        return {}
    place = np.flatnonzero(study.frequency.rows == best)
    if not len(place) or not study.choice.comparable:
        return {law.name: math.nan for law in told.laws}
    trades, equal = float(study.frequency.trades[place[0]]), study.frequency.equal[place[0]]
    exact = None if told.agreement is None else told.agreement.figures
    costs = study.breakdown.mean[best, -1, study.breakdown.components.index("costs")]
    found = {
        "discretisation": study.variances.value.discretisation[best],
        "floor": study.variances.value.floor[best] if exact is None else exact.variance_floor[best],
        "cost": -(costs if exact is None else exact.mean_costs[best]),
    }
    return {
        law.name: float(misses(law, trades, found[law.quantity])) if equal or law.quantity == "floor" else math.nan
        for law in told.laws
    }


def _exact(study: Study, told: Exactness, cash: str) -> dict[str, Any]:
    """What needs no random numbers."""
    agreement, curve, gain = told.agreement, told.curve, told.gain
    off = laws_off(study)
    rows = range(0 if agreement is None else len(study.schedules))
    return {
        "reason": told.reason,
        "notes": list(told.notes),
        "tolerance": study.settings.tolerance,
        "schedules": [
            {
                "schedule": study.schedules[i],
                "mean": _exactly(agreement.mean[i], agreement.mean_error[i], cash),
                "std": _exactly(agreement.std[i], agreement.std_error[i], cash),
                "simulated_mean_off_in_se": _plain(agreement.z_mean[i]),
                "simulated_std_off_in_se": _plain(agreement.z_std[i]),
            }
            for i in rows
            if agreement is not None
        ],
        "optimum": None
        if curve is None
        else {
            "trades": int(curve.trades[curve.best]) if curve.best >= 0 else None,
            "objective": _plain(curve.objective[curve.best]) if curve.best >= 0 else None,
            "note": curve.note,
        },
        "sensitivities": [
            {
                "change": s.change,
                "trades": s.best_trades if s.best_trades >= 0 else None,
                "objective": _plain(s.objective),
            }
            for s in told.sensitivities
        ],
        "break_even": [
            {
                "schedule": row.schedule,
                "vol_shift": _plain(row.vol_shift),
                "sold_vol": _plain(row.sold_vol),
                "amount": _plain(row.amount),
                "cushion_vol_shift": _plain(row.cushion),
                "cushion_amount": _plain(row.cushion_amount),
                "note": row.note,
            }
            for row in told.break_even
        ],
        "laws": [
            {
                "name": law.name,
                "source": law.source,
                "quantity": law.quantity,
                "assumptions": list(law.assumptions),
                "holds": law.holds,
                "reason": law.reason,
                "law_over_found_for_the_choice": _plain(off[law.name]),
            }
            for law in told.laws
        ],
        "effective_paths_gained_by_exact_scaling": None
        if gain is None
        else {
            "note": gain.note,
            "schedules": {
                name: {
                    figure: _figure(gain.quantile_ratio[i, k], gain.ratio_error[i, k], "times the paths")
                    for k, figure in enumerate(SCALED_QUANTILES)
                }
                for i, name in enumerate(study.schedules)
            },
        },
    }


def _exactly(value: float, error: float, unit: str) -> dict[str, Any]:
    return {"value": _plain(value), "own_error": _plain(error), "unit": unit}


def _offset(offset: Offset | None, unit: str) -> dict[str, Any] | None:
    if offset is None:
        return None
    return {
        "floor_less_stated_floor": _figure(offset.value, offset.value_se, unit),
        "exponent": _figure(offset.exponent, offset.exponent_se, "power of trades"),
    }


def _figure(value: float, error: float, unit: str) -> dict[str, Any]:
    return {"value": _plain(value), "se": _plain(error), "unit": unit}


def _plain(value: float | np.floating[Any] | None) -> float | None:
    return None if value is None or not math.isfinite(value) else float(value)
