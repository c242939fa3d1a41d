"""What more rows do in a world, by growing the study once for all of them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from withstand.departures.world import World
from withstand.judgement.findings import Aspect
from withstand.judgement.limit import Limit, doublings, limit_of
from withstand.procedures.base import Procedure
from withstand.study.focus import Focus
from withstand.study.growth import Extend, growth_of
from withstand.study.study import Study


class Limits:
    """Large-sample limits on one study.

    Parameters
    ----------
    study : Study
        Grows by the rule that is its default; worlds in which the errors follow the order through all rows, groups or not, need
        one long series instead.
    accepted : Aspect
        The tolerance on coverage.
    """

    def __init__(self, study: Study, accepted: Aspect) -> None:
        self._study = study
        self._accepted = accepted
        self._grown: dict[str, list[Study]] = {}

    def of(self, procedure: Procedure, focus: Focus, world: World) -> Limit | None:
        """The limit of a procedure in a world; None where it is not known, or the world cannot be built on more rows."""
        for studies in (self._default(), self._series()):
            if _buildable(world, studies):
                return limit_of(studies, procedure, focus, world, self._accepted)
        return None

    def _default(self) -> list[Study]:
        if "default" not in self._grown:
            self._grown["default"] = doublings(growth_of(self._study))
        return self._grown["default"]

    def _series(self) -> list[Study]:
        """The study as one longer series, its groups forgotten; nothing where it has no order."""
        if "series" not in self._grown:
            design = self._study.design
            ungrouped = replace(self._study, design=replace(design, groups=None))
            self._grown["series"] = [] if design.order is None else doublings(Extend(ungrouped))
        return self._grown["series"]


def _buildable(world: World, studies: Sequence[Study]) -> bool:
    reasons = [departure.not_applicable(study.design) for departure, _ in world.stack for study in studies]
    return bool(studies) and not any(reasons)
