"""Residual statistics of whole blocks: what a usual diagnostic would show, in every replicate at once.

One file a family; `base` holds the registry, `for_departure` chooses the statistic that answers to each departure, `critical`
turns simulated values into critical values and detection rates. `pretest` makes procedures of them.
"""

# Every family is loaded, so that the registry is complete before a pretest looks a diagnostic up.
from withstand.diagnostics import groups, influence, mean, serial, shape, shapiro, spread
from withstand.diagnostics.pretest import Pretest

__all__ = ["Pretest", "groups", "influence", "mean", "serial", "shape", "shapiro", "spread"]
