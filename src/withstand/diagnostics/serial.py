"""Do the errors of neighbouring rows go together? Rows are in time order."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand import tails
from withstand.departures.chain import Series
from withstand.diagnostics.base import Diagnostic, Statistic, Tail, register
from withstand.errors import ScenarioError
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats


@register
@dataclass(frozen=True)
class DurbinWatson(Diagnostic):
    """Squared differences of neighbouring residuals against squared residuals; near 2 without serial correlation."""

    name = "durbin-watson"
    title = "Durbin-Watson d"
    null = "neighbouring errors are uncorrelated"
    formula = "sum (e_t - e_(t-1))^2 / sum e_t^2; small under positive correlation"
    source = "Durbin & Watson (1950)"
    needs = "order"
    tail = Tail.LOWER

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""

        def statistic(sample: Sample) -> Floats:
            e = sample.residuals
            steps = e[1:] - e[:-1]
            return np.asarray(np.einsum("tb,tb->b", steps, steps) / sample.residual_sum)

        return statistic


@register
@dataclass(frozen=True)
class LagOne(Diagnostic):
    """Autocorrelation of the residuals one row apart.

    Parameters
    ----------
    within : bool
        Count neighbours within groups only.
    """

    within: bool = False

    name = "lag-one"
    title = "lag-1 residual autocorrelation"
    null = "neighbouring errors are uncorrelated"
    formula = "sum e_t e_(t-1) / sum e_t^2"
    source = "Durbin & Watson (1950); 1 - d/2 but for the ends"
    needs = "order"
    tail = Tail.BOTH

    def not_applicable(self, design: Design) -> str | None:
        """See Diagnostic."""
        if self.within and design.groups is None:
            return "not applicable, because the study names no groups to keep neighbours in; leave out within"
        return super().not_applicable(design)

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""
        previous = Series.of(np.arange(design.n, dtype=float), design.groups if self.within else None).previous
        later = np.flatnonzero(previous >= 0)
        earlier = previous[later]
        whole = len(later) == design.n - 1 and bool(np.all(earlier == later - 1))

        def statistic(sample: Sample) -> Floats:
            e = sample.residuals
            pairs = np.einsum("tb,tb->b", e[1:], e[:-1]) if whole else np.einsum("tb,tb->b", e[later], e[earlier])
            return np.asarray(pairs / sample.residual_sum)

        return statistic


@dataclass(frozen=True)
class Lags(Diagnostic):
    """A test of several lags together.

    Parameters
    ----------
    lags : int
        How many.
    """

    lags: int = 4

    null = "errors up to `lags` rows apart are uncorrelated"
    needs = "order"

    def __post_init__(self) -> None:
        if self.lags < 1:
            raise ScenarioError(f"lags is {self.lags} in '{self.name}'", where="diagnostic.lags", remedy="Give 1 or more.")

    def not_applicable(self, design: Design) -> str | None:
        """See Diagnostic."""
        if self.lags >= design.df:
            return f"not applicable, because {self.lags} lags are too many for {design.df} degrees of freedom; give fewer"
        return super().not_applicable(design)

    def p_values(self, design: Design, values: Floats) -> Floats:
        """Upper tail of chi-square with `lags` degrees of freedom."""
        return np.asarray(tails.chi2_sf(values, self.lags))


@register
@dataclass(frozen=True)
class LjungBox(Lags):
    """Weighted sum of squared autocorrelations of the residuals."""

    name = "ljung-box"
    title = "Ljung-Box Q"
    formula = "n (n + 2) sum_k r_k^2 / (n - k), r_k of the residuals about their mean, chi-square(lags)"
    source = "Ljung & Box (1978)"

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""
        n = design.n

        def statistic(sample: Sample) -> Floats:
            e = sample.residuals - sample.residuals.mean(axis=0)
            total = np.einsum("tb,tb->b", e, e)
            result = np.zeros(sample.width)
            for lag in range(1, self.lags + 1):
                r = np.einsum("tb,tb->b", e[lag:], e[:-lag]) / total
                result += r**2 / (n - lag)
            return n * (n + 2) * result

        return statistic


@register
@dataclass(frozen=True)
class BreuschGodfrey(Lags):
    """Score test of lagged residuals in the regression."""

    name = "breusch-godfrey"
    title = "Breusch-Godfrey test"
    formula = "n R^2 of e on (X, e_(t-1), ..., e_(t-lags)), zeros before the start, chi-square(lags)"
    source = "Breusch (1978); Godfrey (1978)"

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""
        n, Q = design.n, design.Q

        def statistic(sample: Sample) -> Floats:
            e = sample.residuals
            lagged = np.zeros((self.lags, n, sample.width))
            for lag in range(1, self.lags + 1):
                lagged[lag - 1, lag:] = e[:-lag]
            lagged -= Q @ (Q.T @ lagged)
            # e is orthogonal to X already, so the lags explain what e shares with their part beyond X.
            cross = np.einsum("ltb,tb->bl", lagged, e)
            inner = np.einsum("ltb,mtb->blm", lagged, lagged)
            solved = np.linalg.solve(inner, cross[:, :, None])[:, :, 0]
            return np.asarray(n * np.einsum("bl,bl->b", cross, solved) / sample.residual_sum)

        return statistic
