"""What a run found: tables, what was left out and why, and what is needed to repeat it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import pandas as pd

MEASURE_COLUMNS = (
    "n", "departure", "along", "severity", "severity_label", "stack", "procedure", "focus", "measure", "value", "mc_se",
    "low", "high", "shift", "shift_se", "method", "repetitions", "failures",
)  # fmt: skip
VERDICT_COLUMNS = (
    "n", "departure", "along", "severity", "stack", "procedure", "focus", "verdict", "deciding_measure", "value", "low",
    "high", "method", "repetitions",
)  # fmt: skip
TIPPING_COLUMNS = (
    "departure", "along", "stack", "procedure", "focus", "tipping", "last_holds", "first_gives", "plausible_low",
    "plausible_high", "observed", "detectability_at_tipping",
)  # fmt: skip
RANKING_COLUMNS = (
    "departure", "along", "stack", "procedure", "focus", "worst_severity", "worst_label", "coverage_there", "shift_there",
    "method", "verdict_there", "cure", "limit", "holding_procedure", "premium",
)  # fmt: skip


@dataclass(frozen=True, eq=False)
class Outcome:
    """What a run found.

    Parameters
    ----------
    title : str
        Of the study.
    measures, verdicts, tipping, ranking : DataFrame
        Columns as listed in this module. `ranking` is ordered: what to worry about first comes first.
    headline : tuple of str
        Sentences that answer in words, the most important first.
    facts : mapping
        Design summary: n, p, formula, focus names, level, leverage, rows read and dropped, coefficients.
    notices : tuple of str
        What the user should know about how the table was read and what was capped.
    refusals : tuple of (str, str, str)
        Procedure, focus and the reason why it does not apply.
    provenance : mapping
        Seed, versions, hashes, tolerance, effort, timings.
    """

    title: str
    measures: pd.DataFrame
    verdicts: pd.DataFrame
    tipping: pd.DataFrame
    ranking: pd.DataFrame
    headline: tuple[str, ...] = ()
    facts: Mapping[str, Any] = field(default_factory=dict)
    notices: tuple[str, ...] = ()
    refusals: tuple[tuple[str, str, str], ...] = ()
    provenance: Mapping[str, Any] = field(default_factory=dict)
