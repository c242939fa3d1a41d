"""What a report needs to say about the study and to repeat the run: facts and provenance, as plain values."""

from __future__ import annotations

import platform
from contextlib import suppress
from importlib import metadata
from typing import Any

from withstand import __version__
from withstand.lab.plan import Plan
from withstand.study.facts import design_facts, focal_estimates
from withstand.study.study import Study

_LIBRARIES = ("numpy", "scipy", "pandas", "statsmodels", "formulaic")


def study_facts(study: Study) -> dict[str, Any]:
    """Design, reference fit and focus, for people; of plain Python types throughout.

    Parameters
    ----------
    study : Study
        What the user has.
    """
    facts: dict[str, Any] = {
        "name": study.name,
        "formula": study.formula,
        "n": study.n,
        "p": study.design.p,
        "df": study.design.df,
        "level": study.level,
        "error_sd": float(study.error_sd),
        "rows_mode": "fixed" if study.rows.fixed else "drawn anew in each block",
        "focus": [
            {
                "name": focus.name,
                "kind": str(focus.kind),
                "effect": None if focus.effect is None else focus.effect.tolist() if focus.k > 1 else float(focus.effect[0]),
                **estimate,
            }
            for focus, estimate in zip(study.focus, focal_estimates(study), strict=True)
        ],
    }
    if study.account is not None:
        facts |= {"rows_read": study.account.read, "dropped": dict(study.account.dropped)}
    return facts | design_facts(study).as_record()


def library_versions() -> dict[str, str]:
    """Versions of what computed the numbers; a package that runs from its sources, not installed, has none."""
    versions = {"withstand": __version__, "python": platform.python_version()}
    for name in _LIBRARIES:
        with suppress(metadata.PackageNotFoundError):
            versions[name] = metadata.version(name)
    return versions


def tolerance_record(plan: Plan, level: float) -> dict[str, Any]:
    """The tolerance in numbers, with who set it."""
    low, high = plan.tolerance.size_range(1.0 - level)
    coverage_low, coverage_high = plan.tolerance.coverage_range(1.0 - level)
    return {
        "size": plan.tolerance.size if isinstance(plan.tolerance.size, str) else list(plan.tolerance.size),
        "low": low,
        "high": high,
        "coverage_low": coverage_low,
        "coverage_high": coverage_high,
        "source": plan.tolerance.source,
        "bias": plan.tolerance.bias,
        "bias_absolute": plan.tolerance.bias_absolute,
        "tails": plan.tolerance.tails,
    }
