"""What each departure can do to each procedure within what the residuals allow, and what to do instead."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import pandas as pd

from withstand.judgement.ranking import Candidate, Spot, Threat, cheapest_holding, ranked, worst_of
from withstand.judgement.tipping import Tipping
from withstand.judgement.verdict import Judgement
from withstand.lab.gather import Evidence
from withstand.lab.grid import Cell
from withstand.lab.limits import Limits
from withstand.lab.outcome import RANKING_COLUMNS
from withstand.lab.plan import Axis
from withstand.lab.plausibility import Residuals, feared
from withstand.lab.speech import spoken
from withstand.lab.tipping import Line

Place = tuple[str, float, int, int]
"""Identity of an axis ('' for the baseline), severity, indices of procedure and focal quantity."""


@dataclass(frozen=True, eq=False)
class Threatened:
    """A threat with where it belongs."""

    axis: Axis
    procedure: int
    focus: int
    side: int
    threat: Threat


class Assessment:
    """Reads threats off the evidence.

    Parameters
    ----------
    evidence : Evidence
        Of the ladders and of the severities to be feared.
    residuals : mapping of str to Residuals
        By identity of the axis.
    tippings : mapping of Line to Tipping
        Where verdicts turn.
    names : mapping of str to str
        Axes as they are shown to people, by identity.
    """

    def __init__(
        self,
        evidence: Evidence,
        residuals: Mapping[str, Residuals],
        tippings: Mapping[Line, Tipping],
        names: Mapping[str, str],
    ) -> None:
        self.evidence, self.residuals, self.tippings, self.names = evidence, residuals, tippings, names
        self.grid = evidence.grid
        self.cells: dict[Place, Cell] = {}
        for cell in evidence.cells:
            axis = cell.spot.axis
            name = "" if axis is None else axis.identity
            self.cells[name, cell.spot.severity, cell.procedure_index, cell.focus_index] = cell
        self._verdicts: dict[Cell, Judgement | None] = {}
        self._limits = Limits(self.grid.study, self.grid.aspects["coverage"])

    def threats(self) -> list[Threatened]:
        """Every axis with evidence, for every procedure and focal quantity; what to worry about first comes first.

        Ordered by focal quantity, then by procedure as the user named them, then by harm.
        """
        found: list[Threatened] = []
        for focus in range(len(self.grid.study.focus)):
            for procedure in range(len(self.grid.plan.procedures)):
                some = [self._threat(axis, procedure, focus) for axis in self.grid.possible]
                known = {id(one.threat): one for one in some if one is not None}
                found += [known[id(threat)] for threat in ranked(one.threat for one in known.values())]
        return found

    def compared(self, threats: Sequence[Threatened]) -> list[Cell]:
        """Where procedures are compared: with nothing wrong, and at the worst severity of every departure.

        The first threat of a departure and focal quantity names the severity, that of the procedure judged most closely.
        """
        places = {(one.axis.identity, one.focus): (one.axis, one.threat.worst.severity) for one in reversed(threats)}
        found = []
        for focus in range(len(self.grid.study.focus)):
            for procedure in range(len(self.grid.plan.procedures)):
                found.append(self.cells.get(("", 0.0, procedure, focus)))
                found += [self.cell(*place, procedure, focus) for (_, other), place in places.items() if other == focus]
        return list(dict.fromkeys(cell for cell in found if cell is not None))

    def throughout(self, focus: int, reference: int) -> tuple[str, float] | None:
        """The cheapest procedure that holds at every severity to be feared, with its premium.

        The name is empty where none does; None where that cannot be said, or only one was judged.
        """
        plan = self.grid.plan
        everywhere = [(axis, severity) for axis in self.grid.possible for severity in self._feared(axis)]
        found = self._cheapest(everywhere, reference, focus)
        asked = [i for i in range(len(plan.procedures)) if (i, focus) not in self.grid.job.refusals]
        unknown = any(self._verdict(self.cell(*place, i, focus)) is None for i in asked for place in everywhere)
        return None if len(asked) < 2 or (unknown and not found[0]) else found

    def _feared(self, axis: Axis) -> tuple[float, ...]:
        return feared(axis, self.residuals.get(axis.identity))

    def _threat(self, axis: Axis, procedure: int, focus: int) -> Threatened | None:
        residuals = self.residuals.get(axis.identity)
        spots = [spot for s in self._feared(axis) if (spot := self._spot(axis, s, procedure, focus)) is not None]
        plausible = None if residuals is None else residuals.plausible
        if plausible is not None and (plausible.holds(axis.departure.neutral) or not self._feared(axis)):
            baseline = self._spot(axis, axis.departure.neutral, procedure, focus)
            spots += [] if baseline is None else [baseline]
        if not spots:
            return None
        worst = worst_of(spots, axis.departure.neutral)
        side = self._side(axis, worst.severity)
        tipping = self.tippings.get(Line(axis.identity, procedure, focus, side))
        if tipping is None:
            return None
        holding, premium = self._cheapest([(axis, worst.severity)], procedure, focus)
        threat = Threat(
            departure=self.names[axis.identity],
            procedure=self.grid.plan.procedures[procedure].identity,
            focus=self.grid.study.focus[focus].name,
            worst=worst,
            tipping=tipping,
            plausible=plausible,
            limit=self._limits.of(
                self.grid.plan.procedures[procedure], self.grid.study.focus[focus], axis.world(worst.severity)
            ),
            holding=holding,
            premium=premium,
        )
        return Threatened(axis, procedure, focus, side, threat)

    @staticmethod
    def _side(axis: Axis, severity: float) -> int:
        return -1 if severity < axis.departure.neutral else 1

    def cell(self, axis: Axis, severity: float, procedure: int, focus: int) -> Cell | None:
        """The cell at a severity of an axis; at its neutral value the baseline. None where nothing was looked at."""
        if severity == axis.departure.neutral and not axis.companions:
            return self.cells.get(("", 0.0, procedure, focus))
        return self.cells.get((axis.identity, severity, procedure, focus))

    def _verdict(self, cell: Cell | None) -> Judgement | None:
        if cell is None:
            return None
        if cell not in self._verdicts:
            self._verdicts[cell] = self.evidence.verdict(cell)
        return self._verdicts[cell]

    def _spot(self, axis: Axis, severity: float, procedure: int, focus: int) -> Spot | None:
        cell = self.cell(axis, severity, procedure, focus)
        judgement = self._verdict(cell)
        if cell is None or judgement is None:
            return None
        answers = self.evidence.answers(cell)
        answer = answers.get("coverage", answers.get("size"))
        if answer is None:
            return None
        estimate = answer.estimate
        turned = "coverage" not in answers
        return Spot(
            severity=severity,
            judgement=judgement,
            share=1.0 - estimate.value if turned else estimate.value,
            shift=0.0 if cell.spot.axis is None else -estimate.shift if turned else estimate.shift,
            exact=answer.method == "exact",
            mc_se=estimate.mc_se,
        )

    def _cheapest(self, places: Iterable[tuple[Axis, float]], reference: int, focus: int) -> tuple[str, float]:
        candidates = {}
        places = list(places)
        for i, procedure in enumerate(self.grid.plan.procedures):
            cells = [self.cell(axis, severity, i, focus) for axis, severity in places]
            verdicts = [self._verdict(cell) for cell in cells]
            if verdicts and all(verdict is not None for verdict in verdicts):
                judged = [verdict.verdict for verdict in verdicts if verdict is not None]
                candidates[procedure.identity] = Candidate(judged, self._width(i, focus))
        return cheapest_holding(candidates, self.grid.plan.procedures[reference].identity)

    def _width(self, procedure: int, focus: int) -> float:
        cell = self.cells.get(("", 0.0, procedure, focus))
        answer = None if cell is None else self.evidence.answers(cell).get("width")
        return math.nan if answer is None else answer.estimate.value


def ranking_frame(assessment: Assessment, threats: Sequence[Threatened]) -> pd.DataFrame:
    """The table of threats, what to worry about first coming first for each focal quantity and procedure."""
    rows = []
    for one in threats:
        threat, worst = one.threat, one.threat.worst
        rows.append(
            {
                "departure": one.axis.departure.kind,
                "along": assessment.grid.along(one.axis),
                "stack": one.axis.stack,
                "procedure": threat.procedure,
                "focus": threat.focus,
                "worst_severity": worst.severity,
                "worst_label": spoken(one.axis, worst.severity),
                "coverage_there": worst.share,
                "shift_there": worst.shift,
                "method": "exact" if worst.exact else "simulated",
                "verdict_there": str(worst.judgement.verdict),
                "cure": "" if threat.limit is None else str(threat.limit.cure),
                "limit": math.nan if threat.limit is None else threat.limit.coverage,
                "holding_procedure": threat.holding,
                "premium": threat.premium,
            }
        )
    return pd.DataFrame(rows, columns=list(RANKING_COLUMNS))
