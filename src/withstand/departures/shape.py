"""The law layer: errors that are not normal."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from withstand.departures.base import LawDeparture, as_ladder, register
from withstand.departures.law import Law
from withstand.departures.quantiles import contaminated, gamma, lognormal, student
from withstand.errors import ScenarioError

_FAMILIES = {"gamma": gamma, "lognormal": lognormal}


@register
@dataclass(frozen=True)
class HeavyTails(LawDeparture):
    """Errors follow Student's t.

    Parameters
    ----------
    severity : float or sequence of float
        Tail index 1/df, from 0 (normal) to below 0.5 (where the variance ends).
    df : float or sequence of float, optional
        Degrees of freedom, above 2, in place of the severity.

    Notes
    -----
    The table of the law covers scores up to 9 in absolute value, and the variance within it is 1. Beyond
    it, where no simulation would get, lies less than 0.03 % of the variance of t with 2.5 degrees of freedom, but 2 % with 2.2.
    """

    df: float | Sequence[float] = ()

    kind = "heavy-tails"
    title = "heavy tails: Student's t"
    unit = "tail index (1 over the degrees of freedom of t)"
    neutral = 0.0
    default_ladder = (1.0 / 30.0, 0.1, 0.2, 1.0 / 3.0)
    construction = "Student's t, scaled to variance 1"
    source = "Student (1908)"

    def __post_init__(self) -> None:
        freedom = as_ladder(self.df)
        if freedom:
            if as_ladder(self.severity):
                raise ScenarioError(
                    "'heavy-tails' has both severity and df", where="departure.df", remedy="Give one of them; severity is 1/df."
                )
            for value in freedom:
                if not value > 2.0:
                    raise ScenarioError(
                        f"df {value:g} is out of range for 'heavy-tails'",
                        where="departure.df",
                        remedy="Give degrees of freedom above 2; with 2 or fewer the errors have no variance.",
                    )
            object.__setattr__(self, "severity", tuple(1.0 / value for value in freedom))
            # Emptied so that a copy with another severity is not in conflict with it.
            object.__setattr__(self, "df", ())
        super().__post_init__()

    def check(self, severity: float) -> None:
        """See Departure."""
        if not 0.0 <= severity < 0.5:
            raise self.refuse(severity, "a number from 0 to below 0.5, or df above 2")

    def label(self, severity: float) -> str:
        """See Departure."""
        return f"t with {1.0 / severity:g} df" if severity > 0.0 else "normal"

    def law(self, severity: float) -> Law | None:
        """See LawDeparture."""
        return student(severity) if severity > 0.0 else None


@register
@dataclass(frozen=True)
class Contaminated(LawDeparture):
    """A small share of the errors comes from a wider normal law.

    Parameters
    ----------
    severity : float or sequence of float
        SD of the wider law as a multiple of the narrow one, 1 or more.
    share : float
        Probability of the wider law, between 0 and 1.
    """

    share: float = 0.05

    kind = "contaminated"
    title = "contaminated normal"
    unit = "SD of the contaminating errors as a multiple"
    neutral = 1.0
    default_ladder = (3.0, 5.0, 10.0)
    construction = "(1 - share) N(0, 1) + share N(0, k^2), scaled to variance 1"
    source = "Tukey (1960)"

    def __post_init__(self) -> None:
        super().__post_init__()
        if not 0.0 < self.share < 1.0:
            raise ScenarioError(
                f"share {self.share:g} is out of range for 'contaminated'",
                where="departure.share",
                remedy="It is a probability; give a number between 0 and 1, as in share = 0.05.",
            )

    @property
    def name(self) -> str:
        """See Departure."""
        return f"{self.kind} (share {self.share:g})"

    def check(self, severity: float) -> None:
        """See Departure."""
        if not 1.0 <= severity <= 50.0:
            raise self.refuse(severity, "a number from 1 to 50")

    def label(self, severity: float) -> str:
        """See Departure."""
        return f"{100.0 * self.share:g} % with {severity:g} times the SD"

    def law(self, severity: float) -> Law | None:
        """See LawDeparture."""
        return contaminated(severity, self.share) if severity > 1.0 else None


@register
@dataclass(frozen=True)
class Skew(LawDeparture):
    """Errors are skewed to the right.

    Parameters
    ----------
    severity : float or sequence of float
        Skewness gamma_1, from 0 (normal) to 8; 2 is the exponential law under `family` gamma.
    family : {'gamma', 'lognormal'}
        The law.
    """

    family: str = "gamma"

    kind = "skew"
    title = "skewed errors"
    unit = "skewness of the errors"
    neutral = 0.0
    default_ladder = (0.5, 1.0, 2.0, 4.0)
    construction = "gamma law of shape 4/skewness^2 (or lognormal), centred, scaled to variance 1"
    source = "Pearson type III; common practice"

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.family not in _FAMILIES:
            raise ScenarioError(
                f"unknown family '{self.family}' for 'skew'",
                where="departure.family",
                remedy=f"Known: {', '.join(sorted(_FAMILIES))}.",
            )

    @property
    def name(self) -> str:
        """See Departure."""
        return self.kind if self.family == "gamma" else f"{self.kind} ({self.family})"

    def check(self, severity: float) -> None:
        """See Departure."""
        if not 0.0 <= severity <= 8.0:
            raise self.refuse(severity, "a number from 0 to 8")

    def label(self, severity: float) -> str:
        """See Departure."""
        return f"skewness {severity:g}"

    def law(self, severity: float) -> Law | None:
        """See LawDeparture."""
        return _FAMILIES[self.family](severity) if severity > 0.0 else None
