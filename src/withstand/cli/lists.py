"""The command `list`: what the registries hold."""

from __future__ import annotations

import json
import textwrap
from typing import Any

from withstand.departures import REGISTRY as DEPARTURES
from withstand.departures import Departure, HeavyTails
from withstand.judgement.tolerance import CRITERIA
from withstand.measures.compute import MEASURES
from withstand.measures.names import ADJUSTED_POWER, GIVEN_PASS
from withstand.procedures import REGISTRY as PROCEDURES
from withstand.scenario.options import parameter_texts

WIDTH = 100


def listing(what: str, as_json: bool) -> str:
    """A list as text or JSON.

    Parameters
    ----------
    what : {"departures", "procedures", "measures", "tolerances"}
        Which.
    as_json : bool
        For a machine.
    """
    records = {"departures": _departures, "procedures": _procedures, "measures": _measures, "tolerances": _tolerances}[what]()
    if as_json:
        return json.dumps(records, indent=2, ensure_ascii=False)
    return _lines([[str(cell) for cell in list(record.values())[:3]] for record in records])


def _usual(cls: type[Departure]) -> list[str]:
    """The default ladder; that of heavy tails, which is in tail indices, with the degrees of freedom it stands for."""
    if cls is HeavyTails:
        return [f"{value:.3g} ({1.0 / value:.3g} df)" for value in cls.default_ladder]
    return [f"{value:.3g}" for value in cls.default_ladder]


def _departures() -> list[dict[str, Any]]:
    return [
        {
            "kind": kind,
            "title": cls.title,
            "severity": f"Severity: {cls.unit}; usual: {', '.join(_usual(cls))}",
            "unit": cls.unit,
            "default_ladder": list(cls.default_ladder),
            "layer": str(cls.layer),
            "construction": cls.construction,
            "source": cls.source,
            "options": _options(cls),
        }
        for kind, cls in DEPARTURES.items()
    ]


def _procedures() -> list[dict[str, Any]]:
    return [
        {
            "name": name,
            "title": cls.title,
            "source": cls.source,
            "family": cls.family,
            "formula": cls.formula,
            "options": _options(cls),
        }
        for name, cls in PROCEDURES.items()
    ]


def _measures() -> list[dict[str, Any]]:
    return [{"name": name, "meaning": _MEANING[name]} for name in (*MEASURES, ADJUSTED_POWER, *GIVEN_PASS.values())]


def _tolerances() -> list[dict[str, Any]]:
    return [
        {
            "name": name,
            "size": f"{criterion.low:g} to {criterion.high:g} times the nominal size",
            "source": criterion.source,
            "low": criterion.low,
            "high": criterion.high,
        }
        for name, criterion in CRITERIA.items()
    ]


def _options(cls: type) -> dict[str, str]:
    return {name: told for name, told in parameter_texts(cls).items() if name not in ("", "severity", "row", "new")}


def _lines(rows: list[list[str]]) -> str:
    """A name with what is said of it, folded to the width of a terminal."""
    width = max(len(row[0]) for row in rows) + 2
    lines = []
    for name, *told in rows:
        indent = " " * width
        lines += textwrap.wrap(f"{name.ljust(width)}{'. '.join(told)}", WIDTH, subsequent_indent=indent, break_long_words=False)
    return "\n".join(lines)


_MEANING = {
    "bias": "mean estimate minus the true value, in the unit of the focal quantity",
    "bias_in_sd": "bias divided by the empirical SD of the estimate",
    "empirical_sd": "SD of the estimates over replicates: how far they really scatter",
    "claimed_sd": "root mean square of the standard errors the procedure reports",
    "se_ratio": "claimed SD divided by empirical SD; below 1 the procedure claims too much",
    "coverage": "share of intervals that hold the true value",
    "miss_below": "share of intervals that lie wholly below the true value",
    "miss_above": "share of intervals that lie wholly above the true value",
    "width": "mean width of the interval, in the unit of the focal quantity",
    "size": "share of tests that reject although there is no effect",
    "power": "share of tests that reject at the smallest effect that matters",
    "rmse": "root mean square error of the estimate",
    "failure_rate": "share of replicates in which the procedure gives no answer",
    "coverage_given_answer": "coverage among the replicates with an answer, where some have none",
    "size_given_answer": "size among the replicates with an answer, where some have none",
    "pass_rate": "for rules that check first: share of replicates in which the check passed",
    "coverage_given_pass": "for rules that check first: coverage where the check passed",
    "size_given_pass": "for rules that check first: size where the check passed",
    ADJUSTED_POWER: "power with the critical value that makes the size nominal, where the size is off",
}
