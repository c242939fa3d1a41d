"""Why there is no power at the observed effect, and what answers the question behind it."""

from __future__ import annotations

from dataclasses import dataclass

from withstand.engine.executors import open_executor
from withstand.engine.noise import BlockNoise
from withstand.errors import ScenarioError
from withstand.lab.budget import DETECTED, detectable_effect_at
from withstand.lab.size_plan import Condition, Effort, chosen_focus
from withstand.procedures.base import Procedure
from withstand.procedures.fit import Fit, IntervalFit, WaldFit
from withstand.procedures.sample import Sample
from withstand.study.study import Study

WHY_NOT = (
    "Power at the observed effect is not given. It is the p-value in another guise: the smaller the one, the larger the other, "
    "so it cannot say whether a result that is not significant speaks for a small effect (Hoenig & Heisey 2001; Lenth 2001)."
)


@dataclass(frozen=True)
class Instead:
    """What is offered in place of power at the observed effect.

    Parameters
    ----------
    focus, procedure : str
        What it is about.
    estimate, low, high : float
        Fitted value and interval, in the unit of the focal quantity.
    level : float
        Of the interval.
    detectable : float
        The smallest effect with power 0.8 on these rows when nothing is wrong.
    """

    focus: str
    procedure: str
    estimate: float
    low: float
    high: float
    level: float
    detectable: float

    @property
    def sentences(self) -> tuple[str, ...]:
        """The explanation, then the two answers."""
        return (
            WHY_NOT,
            f"{self.focus} by {self.procedure}: {self.estimate:.4g}, {100 * self.level:g} % interval {self.low:.4g} to "
            f"{self.high:.4g}. Effects outside it are what these data speak against.",
            f"These rows would notice an effect of {self.detectable:.4g} with power {DETECTED:g}. "
            "State the smallest effect that matters to ask about power.",
        )


def instead_of_observed_power(
    study: Study, procedure: Procedure, focus: str | None = None, effort: Effort | None = None
) -> Instead:
    """Interval and detectable effect.

    Parameters
    ----------
    study : Study
        With data.
    procedure : Procedure
        That gives an interval.
    focus : str, optional
        A single quantity by name; the first if left out.
    effort : Effort, optional
        How hard to look for the detectable effect.

    Raises
    ------
    ScenarioError
        If the study has no data, or the procedure gives no interval for the focus.
    """
    chosen = chosen_focus(study, focus)
    if study.residuals is None:
        raise ScenarioError(
            "a plan has no observed effect", where="size", remedy="State the smallest effect that matters: effect = { ... }."
        )
    reason = procedure.not_applicable(study.design, chosen)
    if reason is not None or not chosen.scalar:
        why = reason or "not applicable, because there is no single interval for several coefficients at once"
        raise ScenarioError(
            f"'{procedure.identity}' for '{chosen.name}' is {why}", where="focus", remedy="Choose another focus."
        )
    effort = effort or Effort()
    errors = (study.residuals / study.error_sd)[:, None]
    sample = Sample(
        study.design, errors, BlockNoise(effort.seed, 0, 1), coefficients=study.coefficients, error_sd=study.error_sd
    )
    fit = procedure.prepare(study.design, [chosen], study.level)(sample)[0]
    centre = float((chosen.L @ study.coefficients)[0])
    low, high = _ends(fit, centre, study.error_sd) if procedure.equivariant else _ends(fit, 0.0, 1.0)
    shift, unit = (centre, study.error_sd) if procedure.equivariant else (0.0, 1.0)
    estimate = shift + unit * float(fit.estimate[0, 0])
    with open_executor(1) as executor:
        detectable = detectable_effect_at(study, study.n, procedure, chosen, Condition(), effort, executor)
    return Instead(chosen.name, procedure.identity, estimate, low, high, study.level, detectable)


def _ends(fit: Fit, centre: float, unit: float) -> tuple[float, float]:
    """Ends of the interval of the only replicate.

    Raises
    ------
    ScenarioError
        If there is no interval.
    """
    match fit:
        case WaldFit():
            low, high = fit.estimate[0, 0] - fit.half[0], fit.estimate[0, 0] + fit.half[0]
        case IntervalFit(low=before, high=after) if before is not None and after is not None:
            low, high = before[0], after[0]
        case _:
            raise ScenarioError(
                "this procedure gives no interval", where="--procedure", remedy="Choose one that does, such as ols."
            )
    return centre + unit * float(low), centre + unit * float(high)
