"""The question 'how many rows', ready to be answered."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np

from withstand.departures.world import World
from withstand.errors import ScenarioError
from withstand.judgement.limit import doublings
from withstand.judgement.size_points import Requirement
from withstand.judgement.tolerance import Tolerance
from withstand.lab.size_plan import Condition, Effort, Targets, chosen_focus, requirements_of
from withstand.procedures.base import Procedure
from withstand.study.focus import Focus
from withstand.study.growth import Growth, growth_of
from withstand.study.study import Study


@dataclass(frozen=True, eq=False)
class SizeQuestion:
    """What is asked, ready to be answered.

    Parameters
    ----------
    study : Study
        Data or plan.
    procedures : sequence of Procedure
        To choose from.
    worlds : sequence of World
        The targets must be met in each of them; none named is the world in which nothing is wrong.
    targets : Targets
        What must be met.
    tolerance : Tolerance
        What the user can live with.
    focus : Focus
        The focal quantity.
    growth : Growth
        How rows multiply.
    effort : Effort
        How hard to look.
    """

    study: Study
    procedures: Sequence[Procedure]
    worlds: Sequence[World]
    targets: Targets
    tolerance: Tolerance
    focus: Focus
    growth: Growth
    effort: Effort = field(default_factory=Effort)

    @cached_property
    def doublings(self) -> tuple[Study, ...]:
        """The study and its doublings, from which large-sample limits are read."""
        return tuple(doublings(self.growth))

    @cached_property
    def conditions(self) -> tuple[Condition, ...]:
        """The worlds, each once, bound to the focal quantity."""
        bound = [Condition(world).bound_to(self.focus) for world in self.worlds] or [Condition()]
        return tuple({condition.world.key: condition for condition in bound}.values())

    def at(self, n: int) -> Study:
        """The study with n rows and its one focal quantity."""
        grown = self.growth.at(n)
        # Its own row: a study with blocks in its model has more columns when it has more rows.
        own = next(focus for focus in grown.focus if focus.name == self.focus.name)
        effect = None if self.focus.effect is None else self.focus.effect.tolist()
        digest = f"{grown.digest}|{self.focus.name}|{effect}"
        return replace(grown, focus=(replace(own, effect=self.focus.effect),), digest=digest)

    def requirements(self, procedure: Procedure) -> tuple[Requirement, ...]:
        """Targets as bounds."""
        return requirements_of(self.targets, self.tolerance, self.study, procedure, self.focus, self.conditions)


def question_of(
    study: Study,
    procedures: Sequence[Procedure],
    worlds: Sequence[World] = (),
    *,
    targets: Targets | None = None,
    tolerance: Tolerance | None = None,
    focus: str | None = None,
    effect: float | None = None,
    rule: str | None = None,
    effort: Effort | None = None,
) -> SizeQuestion:
    """The question, with its defaults filled in; for the parameters see `size_study`.

    Raises
    ------
    ScenarioError
        If there is no procedure, or focus, effect or rule do not suit the study.
    """
    if not procedures:
        raise ScenarioError("no procedure to size", where="--procedure", remedy='Name at least one, such as "ols".')
    return SizeQuestion(
        study,
        tuple(procedures),
        tuple(worlds),
        targets or Targets(),
        tolerance or Tolerance(),
        chosen_focus(study, focus, effect),
        growth_of(study, rule),
        effort or Effort(),
    )


def noise_seed(seed: int, n: int, turn: int) -> int:
    """The seed of the noise at n: other rows, other noise, and the second look shares none with the first."""
    return int(np.random.SeedSequence([seed, n, turn]).generate_state(1, np.uint64)[0] >> np.uint64(1))
