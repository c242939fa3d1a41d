"""Answers without simulation: moments for any law, coverage, size and power for normal errors.

`problem` brings a question into unit coordinates; a structure (`grouped`, `compressed`, `chain`, `band`, `modes`) gives the
tilted laws of `tilt` without an n x n matrix; `contour` and `path` integrate them to probabilities.
"""

from withstand.exact.coverage import ExactResult, coverage
from withstand.exact.moments import Moments, moments
from withstand.exact.power import adjusted_power, detectable_effect, power
from withstand.exact.structure import can_be_exact

__all__ = ["ExactResult", "Moments", "adjusted_power", "can_be_exact", "coverage", "detectable_effect", "moments", "power"]
