"""What the exact engine and the laws say, as the pages read it: schedules in the order of the view."""

from dataclasses import dataclass

import numpy as np

from hedgesim.market import Floats
from hedgesim.study.exactness import SCALED_QUANTILES, BreakEven, Curve, Sensitivity
from hedgesim.study.findings import laws_off
from hedgesim.study.studies import Study
from hedgesim.study.theory import Law, Quantity

# Laws whose ratio to each other stays this close over the chart are one line to the eye.
_SAME_LINE = 0.015
_LEGEND_LETTERS = 30


@dataclass(frozen=True)
class ExactFiguresShown:
    """Exact figures beside the simulated ones; arrays are by schedule in the order of the view.

    Attributes
    ----------
    mean, std : of the P&L, in currency
    z_mean, z_std : simulated less exact, in simulated standard errors
    objective : mean cost + cost_of_risk x risk, nan where the risk has no exact figure
    """

    mean: Floats
    std: Floats
    z_mean: Floats
    z_std: Floats
    objective: Floats


@dataclass(frozen=True)
class ExactView:
    """Everything that needs no random numbers.

    Attributes
    ----------
    figures : None where the exact engine cannot answer
    curve, sensitivities, laws, reason : as in `Exactness`
    off : law -> the law over what is found for the chosen schedule, nan where nothing compares
    break_even : by schedule in the order of the view, empty without exact figures
    gain, gain_se : (schedule, quantile as in `SCALED_QUANTILES`) effective paths gained by exact scaling, or None
    notes : in words
    """

    figures: ExactFiguresShown | None
    curve: Curve | None
    sensitivities: tuple[Sensitivity, ...]
    laws: tuple[Law, ...]
    off: dict[str, float]
    break_even: tuple[BreakEven, ...]
    gain: Floats | None
    gain_se: Floats | None
    gain_note: str
    reason: str
    notes: tuple[str, ...]

    def lines(self, quantity: Quantity, trades: Floats) -> list[tuple[str, Floats]]:
        """Name and values at `trades` of the laws of a quantity that hold; those that coincide there are one line.

        Names of the same line are joined by an equals sign, as far as a legend has room.
        """
        found: list[tuple[list[str], Floats]] = []
        for law in self.laws:
            if law.quantity != quantity or not law.holds or law.curve is None:
                continue
            value = law.curve(trades)
            if not (np.isfinite(value).all() and (value > 0.0).any()):
                continue
            twin = next((f for f in found if np.allclose(value, f[1], rtol=_SAME_LINE, atol=0.0)), None)
            if twin is None:
                found.append(([law.name], value))
            else:
                twin[0].append(law.name)
        return [(_joined(names), value) for names, value in found]


def _joined(names: list[str]) -> str:
    label = names[0]
    for k, name in enumerate(names[1:], start=1):
        if len(label) + len(name) + 3 > _LEGEND_LETTERS:
            return f"{label} and {len(names) - k} alike"
        label += f" = {name}"
    return label


def exact_view(study: Study, order: np.ndarray) -> ExactView | None:
    """`study.exactness` with its schedules in `order`, None where nothing was asked."""
    told = study.exactness
    if told is None:
        return None
    figures = None
    if told.agreement is not None:
        exact, settings = told.agreement.figures, study.settings
        paid = -exact.mean_costs if settings.mean == "costs" else -exact.mean
        risk = {"std": exact.std, "variance": exact.variance}.get(settings.risk, np.full(len(paid), np.nan))
        figures = ExactFiguresShown(
            mean=told.agreement.mean[order],
            std=told.agreement.std[order],
            z_mean=told.agreement.z_mean[order],
            z_std=told.agreement.z_std[order],
            objective=(paid + settings.cost_of_risk * risk)[order],
        )
    gain = told.gain
    return ExactView(
        figures=figures,
        curve=told.curve,
        sensitivities=told.sensitivities,
        laws=told.laws,
        off=laws_off(study),
        break_even=tuple(told.break_even[k] for k in order) if told.break_even else (),
        gain=None if gain is None else gain.quantile_ratio[order],
        gain_se=None if gain is None else gain.ratio_error[order],
        gain_note="" if gain is None else gain.note,
        reason=told.reason,
        notes=told.notes,
    )


def gain_words(view: ExactView, names: tuple[str, ...], best: int) -> str:
    """What exact scaling is worth to the sampled tail, in one sentence; empty without exact figures."""
    if view.gain is None or view.gain_se is None:
        return f"{view.notes[0]}." if view.notes else ""
    rows = [
        f"{ratio:.2f} (\u00b1{error:.2f}) for {name.replace('es975', 'ES 97.5 %')}"
        for name, ratio, error in zip(SCALED_QUANTILES, view.gain[best], view.gain_se[best], strict=True)
        if np.isfinite(ratio)
    ]
    known = view.gain[np.isfinite(view.gain)]
    if not rows or not known.size:
        return ""
    low, high = float(known.min()), float(known.max())
    if high <= 1.0:
        verdict = "it helps nowhere"
    elif low < 1.0:
        verdict = "below 1 it does harm"
    else:
        sure = bool(np.nanmin(view.gain - 2.0 * view.gain_se) > 1.0)
        verdict = "it helps everywhere" if sure else "within two errors of 1 the gain is not certain"
    return (
        f"Shifting and scaling the simulated totals to their exact mean and std multiplies the effective paths under "
        f"{names[best]} by {', '.join(rows)}, and by {low:.2f} to {high:.2f} over all schedules and these figures "
        f"({view.gain_note}); {verdict}."
    )
