"""Ordinary least squares and least squares with known weights, with the classical variance."""

from __future__ import annotations

from dataclasses import dataclass

from withstand.procedures.base import LinearProcedure, register
from withstand.procedures.forms import ResidualForm, Uniform
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind


@register
@dataclass(frozen=True)
class Ols(LinearProcedure):
    """Ordinary least squares with the classical variance, t and F with n - p degrees of freedom."""

    name = "ols"
    family = "classical"
    title = "ordinary least squares"
    formula = "V = (a'a) e'e / (n - p), t(n - p)"
    source = "Gauss-Markov; Student (1908)"

    def form(self, design: Design, A: Floats) -> ResidualForm:
        """(A A') e'e / (n - p)."""
        return Uniform.of(A @ A.T / design.df, design.n)


@register
@dataclass(frozen=True)
class KnownWeights(Ols):
    """Weighted least squares with the study's known weights."""

    name = "known-weights"
    title = "least squares with known weights"
    formula = "OLS on rows multiplied by the square root of their weight"
    source = "Aitken (1936)"
    weighted = True

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if design.weights is None:
            return "not applicable, because the study names no known weights"
        if focus.kind is FocusKind.NEW:
            return "not applicable, because the weight of a new response is not known"
        return None
