"""Variances consistent under serial correlation: Bartlett lags, and equal-weighted cosines."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from withstand import tails
from withstand.errors import ScenarioError
from withstand.procedures.base import LinearProcedure, register
from withstand.procedures.fixed_b import bartlett_quantile
from withstand.procedures.forms import Banded, ResidualForm, Squares
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus

NO_ORDER = "not applicable, because the study names no order of the rows in time"


@register
@dataclass(frozen=True)
class Hac(LinearProcedure):
    """Bartlett-weighted autocovariances of the scores a_t e_t.

    Parameters
    ----------
    lag : int or None
        Largest lag L; None takes floor(4 (n / 100)^(2/9)).
    reference : {"t", "fixed-b"}
        Student's t with n - p degrees of freedom, or the fixed-b limit law of the t statistic (Kiefer & Vogelsang 2005).
    """

    lag: int | None = None
    reference: str = "t"

    name = "hac"
    family = "serial"
    title = "Newey-West sandwich"
    formula = "V = n/(n - p) (sum a_t^2 e_t^2 + 2 sum_l (1 - l/(L+1)) sum_t a_t a_(t-l) e_t e_(t-l)), t(n - p) or fixed-b"
    source = "Newey & West (1987); Kiefer & Vogelsang (2005)"

    def __post_init__(self) -> None:
        if self.lag is not None and self.lag < 0:
            raise ScenarioError(f"lag is {self.lag}", where="procedures.use: hac.lag", remedy="Give a whole number from 0 up.")
        if self.reference not in ("t", "fixed-b"):
            raise ScenarioError(
                f"reference is '{self.reference}'", where="procedures.use: hac.reference", remedy='Give "t" or "fixed-b".'
            )

    def lags(self, n: int) -> int:
        """The largest lag with n rows."""
        chosen = math.floor(4.0 * (n / 100.0) ** (2.0 / 9.0)) if self.lag is None else self.lag
        return min(chosen, n - 1)

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if design.order is None:
            return NO_ORDER
        if self.reference == "fixed-b" and not focus.scalar:
            return "not applicable, because the fixed-b law used here is that of a single quantity"
        return None

    def form(self, design: Design, A: Floats) -> ResidualForm:
        """See LinearProcedure."""
        L = self.lags(design.n)
        return Banded(A, 1.0 - np.arange(L + 1) / (L + 1.0), design.n / design.df)

    def critical(self, design: Design, A: Floats, level: float) -> float:
        """See LinearProcedure."""
        if self.reference == "fixed-b":
            return bartlett_quantile((self.lags(design.n) + 1) / design.n, level)
        return super().critical(design, A, level)


@register
@dataclass(frozen=True)
class HacCosine(LinearProcedure):
    """Mean of squared cosine transforms of the scores a_t e_t.

    Parameters
    ----------
    terms : int or None
        Number of cosines nu; None takes floor(0.4 n^(2/3)), at least 1.
    """

    terms: int | None = None

    name = "hac-cosine"
    family = "serial"
    title = "equal-weighted cosine variance"
    formula = "V = mean over j = 1..nu of (sqrt(2) sum_t cos(pi j (t - 1/2)/n) a_t e_t)^2, t(nu)"
    source = "Lazarus, Lewis, Stock & Watson (2018)"

    def __post_init__(self) -> None:
        if self.terms is not None and self.terms < 1:
            raise ScenarioError(
                f"terms is {self.terms}", where="procedures.use: hac-cosine.terms", remedy="Give a whole number from 1 up."
            )

    def cosines(self, n: int) -> int:
        """Number of cosines with n rows."""
        return max(1, math.floor(0.4 * n ** (2.0 / 3.0))) if self.terms is None else min(self.terms, n - 1)

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if design.order is None:
            return NO_ORDER
        nu = self.cosines(design.n)
        if focus.k >= nu:
            return f"not applicable, because {nu} cosines cannot carry a joint test of {focus.k} quantities"
        return None

    def form(self, design: Design, A: Floats) -> ResidualForm:
        """See LinearProcedure."""
        n = design.n
        nu = self.cosines(n)
        basis = np.sqrt(2.0) * np.cos(np.pi * np.arange(1, nu + 1)[:, None] * (np.arange(n) + 0.5) / n)
        return Squares(A[:, None, :] * basis, 1.0 / nu)

    def degrees_of_freedom(self, design: Design, A: Floats) -> float:
        """See LinearProcedure."""
        return self.cosines(design.n)

    def critical(self, design: Design, A: Floats, level: float) -> float:
        """See LinearProcedure; a joint statistic is Hotelling's, scaled to F(k, nu - k + 1)."""
        k, nu = A.shape[0], self.cosines(design.n)
        if k == 1:
            return super().critical(design, A, level)
        return float(tails.f_isf(1.0 - level, k, nu - k + 1) * nu / (nu - k + 1))
