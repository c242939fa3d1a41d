"""A reader's view of an outcome: what was tried, in which order to show it, and one value at a time."""

from __future__ import annotations

import math
from collections.abc import Hashable, Iterable, Mapping
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import Any

import pandas as pd

from withstand.departures import REGISTRY
from withstand.lab.outcome import Outcome

NOTHING = "none"
"""The departure column of the baseline."""


@dataclass(frozen=True)
class Axis:
    """A departure tried along its ladder, as the tables name it."""

    departure: str
    along: str
    stack: str


BASELINE = Axis(NOTHING, "", "")


@dataclass(frozen=True)
class Reading:
    """One value of the table of measures with its errors."""

    value: float
    mc_se: float
    low: float
    high: float
    shift: float
    shift_se: float
    method: str
    repetitions: int
    failures: int

    @property
    def exact(self) -> bool:
        """Whether no simulation stands behind it."""
        return self.method == "exact"

    @property
    def reach(self) -> float:
        """Half the width of the Monte Carlo interval, on its longer side; 0 for exact values."""
        sides = [side for side in (self.value - self.low, self.high - self.value) if math.isfinite(side)]
        return max(sides, default=0.0) if not self.exact else 0.0


@dataclass(frozen=True, eq=False)
class View:
    """Looks things up in an outcome.

    Parameters
    ----------
    outcome : Outcome
        What a run found. Where it holds several sample sizes, the view shows that of the study.
    """

    outcome: Outcome

    @cached_property
    def n(self) -> int | None:
        """Rows of the study; None where nothing was measured."""
        sizes = unique(self.outcome.measures["n"])
        stated = self.outcome.facts.get("n")
        if stated is not None and (stated in sizes or not sizes):
            return int(stated)
        return int(sizes[0]) if sizes else None

    @property
    def other_sizes(self) -> list[int]:
        """Sample sizes in the tables that the view does not show."""
        return [int(size) for size in unique(self.outcome.measures["n"]) if size != self.n]

    @cached_property
    def procedures(self) -> list[str]:
        """In the order they were named; the first is the user's own. Those that were planned, where nothing is measured yet."""
        measured = [str(name) for name in unique(self.outcome.measures["procedure"])]
        return measured or list(self.outcome.provenance.get("procedures", []))

    @cached_property
    def foci(self) -> list[str]:
        """Names of the focal quantities."""
        named = [str(focus["name"]) for focus in self.outcome.facts.get("focus", [])]
        return unique([*named, *map(str, self.outcome.measures["focus"])])

    def planned_procedures(self, focus: str) -> list[str]:
        """Every procedure that was to be judged for a focal quantity, whether it has been or not."""
        refused = {procedure for procedure, refused_focus, _ in self.outcome.refusals if refused_focus == focus}
        return [name for name in self.outcome.provenance.get("procedures", self.procedures) if name not in refused]

    @property
    def reference(self) -> str:
        """The procedure that premium and protection are counted against: ols, or the first named."""
        return "ols" if "ols" in self.procedures else self.procedures[0]

    @property
    def level(self) -> float:
        """Confidence level of intervals."""
        return float(self.outcome.facts.get("level", 0.95))

    @property
    def bounds(self) -> tuple[float, float] | None:
        """Accepted coverage, where the run had a tolerance on it."""
        tolerance = self.outcome.provenance.get("tolerance", {})
        pair = tolerance.get("coverage_low"), tolerance.get("coverage_high")
        return None if pair[0] is None or pair[1] is None else (float(pair[0]), float(pair[1]))

    @cached_property
    def _readings(self) -> dict[tuple[Hashable, ...], Reading]:
        found: dict[tuple[Hashable, ...], Reading] = {}
        for row in self._of_this_size(self.outcome.measures):
            found[(_axis(row), float(row.severity), row.procedure, row.focus, row.measure)] = Reading(
                float(row.value), float(row.mc_se), float(row.low), float(row.high), float(row.shift), float(row.shift_se),
                str(row.method), _count(row.repetitions), _count(row.failures),
            )  # fmt: skip
        return found

    @cached_property
    def _verdicts(self) -> dict[tuple[Hashable, ...], tuple[str, str, float]]:
        return {
            (_axis(row), float(row.severity), row.procedure, row.focus): (row.verdict, row.deciding_measure, float(row.value))
            for row in self._of_this_size(self.outcome.verdicts)
        }

    @cached_property
    def ladders(self) -> dict[Axis, list[tuple[float, str]]]:
        """Severities tried with their labels in increasing order, by axis in the order of the run.

        Those below neutral are the departure turned round.
        """
        found: dict[Axis, dict[float, str]] = {}
        for told in self.outcome.facts.get("axes", []):
            rungs = {float(severity): str(label) for severity, label in told["ladder"]}
            found[Axis(told["departure"], told["along"], told["stack"])] = rungs
        for row in self._of_this_size(self.outcome.measures):
            if row.departure != NOTHING:
                found.setdefault(_axis(row), {})[float(row.severity)] = str(row.severity_label)
        return {axis: sorted(rungs.items()) for axis, rungs in found.items()}

    def _of_this_size(self, table: pd.DataFrame) -> Iterable[Any]:
        return _rows(table[table["n"] == self.n])

    def reading(self, axis: Axis, severity: float, procedure: str, focus: str, measure: str) -> Reading | None:
        """One measure; None where it was not reported."""
        return self._readings.get((axis, severity, procedure, focus, measure))

    def baseline(self, procedure: str, focus: str, measure: str) -> Reading | None:
        """One measure when nothing is wrong."""
        return self.reading(BASELINE, 0.0, procedure, focus, measure)

    def verdict(self, axis: Axis, severity: float, procedure: str, focus: str) -> tuple[str, str, float] | None:
        """Verdict, the measure that decided it and its value; None where there is none."""
        return self._verdicts.get((axis, severity, procedure, focus))

    def most_failures(self, procedure: str, focus: str) -> float:
        """The largest share of replicates without an answer, in any world; 0 where it is not reported."""
        rates = (
            reading.value
            for (_, _, name, where, measure), reading in self._readings.items()
            if (name, where, measure) == (procedure, focus, "failure_rate")
        )
        return max(rates, default=0.0)

    def has(self, measure: str, focus: str) -> bool:
        """Whether any procedure reports the measure for the focal quantity."""
        return any(self.baseline(procedure, focus, measure) is not None for procedure in self.procedures)

    def has_answer(self, procedure: str, focus: str) -> bool:
        """Whether the procedure reports coverage or size for the focal quantity."""
        return any(self.baseline(procedure, focus, measure) is not None for measure in ("coverage", "size"))

    def leading(self, focus: str) -> str:
        """The first procedure that answers for the focal quantity, or is to; empty where there is none."""
        answered = (name for name in self.procedures if self.has_answer(name, focus))
        table = self.outcome.tipping
        return next(answered, next(iter(table.loc[table["focus"] == focus, "procedure"]), ""))

    @cached_property
    def _ranks(self) -> dict[tuple[Hashable, ...], Any]:
        return _first_rows(self.outcome.ranking)

    @cached_property
    def _tippings(self) -> dict[tuple[Hashable, ...], Any]:
        return _first_rows(self.outcome.tipping)

    @property
    def tipping_rows(self) -> list[Any]:
        """The rows of tipping severities, as named tuples."""
        return list(self._tippings.values())

    def ranked(self, focus: str) -> list[Axis]:
        """Every axis, what to worry about first coming first."""
        order = [axis for axis, _, ranked_focus in self._ranks if ranked_focus == focus]
        return [axis for axis in unique([*order, *self.ladders]) if axis in self.ladders]

    def rank(self, axis: Axis, procedure: str, focus: str) -> Any | None:
        """The row of the ranking, as a named tuple; None where there is none."""
        return self._ranks.get((axis, procedure, focus))

    def tipping(self, axis: Axis, procedure: str, focus: str) -> Any | None:
        """The row of tipping severities, as a named tuple; None where there is none.

        Of two rows, one for each direction, the first: that of the worst severity.
        """
        return self._tippings.get((axis, procedure, focus))

    def worst(self, axis: Axis, focus: str) -> float:
        """The severity to compare procedures at: the worst that the ranking names and the table has, else the last tried."""
        tried = [severity for severity, _ in self.ladders[axis]]
        for (ranked_axis, _, ranked_focus), row in self._ranks.items():
            if (ranked_axis, ranked_focus) == (axis, focus):
                return min(tried, key=lambda severity: abs(severity - row.worst_severity))
        return tried[-1]

    def name(self, axis: Axis) -> str:
        """An axis as it is shown to people."""
        if axis == BASELINE:
            return "nothing wrong"
        facts: Mapping[str, Any] = self.outcome.facts
        for told in facts.get("axes", []):
            if Axis(told["departure"], told["along"], told["stack"]) == axis:
                return str(told["name"])
        along = f" along {axis.along}" if axis.along and " along " not in axis.departure else ""
        return f"{axis.departure}{along}{f' with {axis.stack}' if axis.stack else ''}"

    def neutral(self, axis: Axis) -> float:
        """The severity at which the assumption holds."""
        known = REGISTRY.get(axis.departure)
        return 0.0 if known is None else known.neutral


def unique(values: Iterable[Any]) -> list[Any]:
    """Values without repeats, in the order of their first appearance."""
    return list(dict.fromkeys(values))


@lru_cache(maxsize=1)
def view_of(outcome: Outcome) -> View:
    """The view of an outcome; that of the last one asked for is kept, since the files of a report read the same tables."""
    return View(outcome)


def _rows(table: pd.DataFrame) -> Iterable[Any]:
    # Plain Python values: iterating over packed text columns is many times slower.
    return table.astype(object).itertuples(index=False)


def _first_rows(table: pd.DataFrame) -> dict[tuple[Hashable, ...], Any]:
    """The first row of each axis, procedure and focal quantity."""
    found: dict[tuple[Hashable, ...], Any] = {}
    for row in _rows(table):
        found.setdefault((_axis(row), row.procedure, row.focus), row)
    return found


def _axis(row: Any) -> Axis:
    return Axis(str(row.departure), _text(row.along), _text(row.stack))


def _text(value: object) -> str:
    """A text cell; a missing one is empty."""
    return value if isinstance(value, str) else ""


def _count(value: float) -> int:
    return 0 if math.isnan(value) else int(value)
