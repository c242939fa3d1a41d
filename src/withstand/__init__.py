"""Which broken regression assumption matters at your sample size, on your own design matrix.

Names are loaded when first used, so that the command line answers `--help` without loading the numerical libraries.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_HOME = {
    "Bowtie": "departures",
    "Clusters": "departures",
    "Contaminated": "departures",
    "Curvature": "departures",
    "Custom": "procedures",
    "Fan": "departures",
    "HeavyTails": "departures",
    "LevelSpread": "departures",
    "Outliers": "departures",
    "PowerSpread": "departures",
    "Pretest": "diagnostics",
    "Result": "report.result",
    "Serial": "departures",
    "Skew": "departures",
    "Study": "study.study",
    "Tolerance": "judgement.tolerance",
    "WithstandError": "errors",
    "WorstFan": "departures",
    "inspect": "front",
    "run": "front",
    "size": "front",
}

__all__ = sorted(_HOME)


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module 'withstand' has no attribute '{name}'")
    return getattr(import_module(f"withstand.{_HOME[name]}"), name)


def __dir__() -> list[str]:
    return __all__
