"""Heteroscedasticity-consistent variances HC0 to HC5, and HC2 with Bell-McCaffrey degrees of freedom."""

from __future__ import annotations

from abc import abstractmethod
from dataclasses import dataclass

import numpy as np

from withstand.procedures.base import LinearProcedure, pairwise, register
from withstand.procedures.forms import Diagonal, ResidualForm
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus


@dataclass(frozen=True)
class Sandwich(LinearProcedure):
    """V = sum_t a_t^2 w_t e_t^2 with weights w that depend on the leverages h."""

    family = "sandwich"
    divides_by_residual_share = True
    """Whether the weights divide by a power of 1 - h, which leverage 1 makes zero."""

    @abstractmethod
    def inflation(self, design: Design) -> Floats:
        """w, (n,)."""

    def form(self, design: Design, A: Floats) -> ResidualForm:
        """See LinearProcedure."""
        return Diagonal(pairwise(A) * self.inflation(design))

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if self.divides_by_residual_share and len(design.saturated_rows):
            rows = ", ".join(str(row + 1) for row in design.saturated_rows[:5])
            return (
                f"not applicable, because row {rows} (in analysis order) has leverage 1: "
                f"{self.name.upper()} would divide by zero there"
            )
        return None


@register
@dataclass(frozen=True)
class Hc0(Sandwich):
    """Squared residuals as they are."""

    name = "hc0"
    title = "White's sandwich"
    formula = "w = 1, t(n - p)"
    source = "White (1980)"
    divides_by_residual_share = False

    def inflation(self, design: Design) -> Floats:
        """See Sandwich."""
        return np.ones(design.n)


@register
@dataclass(frozen=True)
class Hc1(Sandwich):
    """Squared residuals times n / (n - p)."""

    name = "hc1"
    title = "sandwich with a degrees-of-freedom factor"
    formula = "w = n / (n - p), t(n - p)"
    source = "Hinkley (1977); MacKinnon & White (1985)"
    divides_by_residual_share = False

    def inflation(self, design: Design) -> Floats:
        """See Sandwich."""
        return np.full(design.n, design.n / design.df)


@register
@dataclass(frozen=True)
class Hc2(Sandwich):
    """Unbiased when variances are equal."""

    name = "hc2"
    title = "sandwich, unbiased under equal variances"
    formula = "w = 1 / (1 - h), t(n - p)"
    source = "Horn, Horn & Duncan (1975); MacKinnon & White (1985)"

    def inflation(self, design: Design) -> Floats:
        """See Sandwich."""
        return 1.0 / (1.0 - design.leverage)


@register
@dataclass(frozen=True)
class Hc2Bm(Hc2):
    """HC2 with the Satterthwaite degrees of freedom of Bell and McCaffrey."""

    name = "hc2-bm"
    title = "HC2 with Bell-McCaffrey degrees of freedom"
    formula = "w = 1 / (1 - h), t(df), df = (sum D(1-h))^2 / (sum D^2 (1-2h) + ||Q'DQ||^2), D = a^2/(1-h)"
    source = "Bell & McCaffrey (2002); Imbens & Kolesar (2016)"

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if not focus.scalar:
            return "not applicable, because the Bell-McCaffrey degrees of freedom are for a single quantity"
        return super().not_applicable(design, focus)

    def degrees_of_freedom(self, design: Design, A: Floats) -> float:
        """See LinearProcedure."""
        h = design.leverage
        D = A[0] ** 2 / (1.0 - h)
        inner = design.Q.T @ (D[:, None] * design.Q)
        return float(np.sum(D * (1 - h)) ** 2 / (np.sum(D**2 * (1 - 2 * h)) + np.sum(inner**2)))


@register
@dataclass(frozen=True)
class Hc3(Sandwich):
    """Close to the jackknife."""

    name = "hc3"
    title = "sandwich close to the jackknife"
    formula = "w = 1 / (1 - h)^2, t(n - p)"
    source = "MacKinnon & White (1985)"

    def inflation(self, design: Design) -> Floats:
        """See Sandwich."""
        return (1.0 - design.leverage) ** -2.0


@register
@dataclass(frozen=True)
class Hc4(Sandwich):
    """More discount the higher the leverage."""

    name = "hc4"
    title = "sandwich that discounts high leverage"
    formula = "w = (1 - h)^-min(4, h/hbar), t(n - p)"
    source = "Cribari-Neto (2004)"

    def inflation(self, design: Design) -> Floats:
        """See Sandwich."""
        ratio = design.leverage * design.n / design.p
        return np.asarray((1.0 - design.leverage) ** -np.minimum(4.0, ratio))


@register
@dataclass(frozen=True)
class Hc4m(Sandwich):
    """HC4 with a gentler discount."""

    name = "hc4m"
    title = "HC4, modified"
    formula = "w = (1 - h)^-(min(1, h/hbar) + min(1.5, h/hbar)), t(n - p)"
    source = "Cribari-Neto & da Silva (2011)"

    def inflation(self, design: Design) -> Floats:
        """See Sandwich."""
        ratio = design.leverage * design.n / design.p
        return np.asarray((1.0 - design.leverage) ** -(np.minimum(1.0, ratio) + np.minimum(1.5, ratio)))


@register
@dataclass(frozen=True)
class Hc5(Sandwich):
    """HC4 that also looks at the largest leverage."""

    name = "hc5"
    title = "sandwich tied to the largest leverage"
    formula = "w = (1 - h)^-(min(h/hbar, max(4, 0.7 hmax/hbar)) / 2), t(n - p)"
    source = "Cribari-Neto, Souza & Vasconcellos (2007)"

    def inflation(self, design: Design) -> Floats:
        """See Sandwich."""
        ratio = design.leverage * design.n / design.p
        bound = max(4.0, 0.7 * float(ratio.max()))
        return np.asarray((1.0 - design.leverage) ** -(np.minimum(ratio, bound) / 2.0))
