"""Numbers, severities and verdicts as people say them. Rounding happens here and nowhere before."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from withstand.report.view import Reading

SIGNS = {"holds": "✓", "gives": "✗", "unsettled": "?"}
"""A sign for every verdict, so that none depends on colour."""


def number(value: float, digits: int = 3) -> str:
    """A number with `digits` significant digits, without exponent where that is readable."""
    if not math.isfinite(value):
        return "not known" if math.isnan(value) else ("unlimited" if value > 0 else "-unlimited")
    if value != 0.0 and not 1e-4 <= abs(value) < 1e6:
        return f"{value:.{digits - 1}e}"
    decimals = 0 if value == 0.0 else max(0, digits - 1 - math.floor(math.log10(abs(value))))
    told = f"{value:,.{decimals}f}"
    return told.rstrip("0").rstrip(".") if "." in told else told


def count(value: float) -> str:
    """A whole number with thousands marked."""
    return f"{int(value):,}"


def plural(value: int, noun: str) -> str:
    """'1 row', '2 rows'."""
    return f"{count(value)} {noun}{'' if value == 1 else 's'}"


def listing(items: Sequence[str], joint: str = "and") -> str:
    """'a', 'a and b', 'a, b and c'."""
    if len(items) < 2:
        return "".join(items)
    return f"{', '.join(items[:-1])} {joint} {items[-1]}"


def percent(value: float, bounds: Sequence[float] = (), decimals: int = 1) -> str:
    """A share in percent, without the sign, with as many decimals as it takes to be on its own side of the bounds.

    Parameters
    ----------
    value : float
        Share, 0 to 1.
    bounds : sequence of float
        Shares that a verdict compares it with.
    decimals : int
        At least that many.
    """
    if math.isnan(value):
        return "not known"
    while decimals < 5 and any(_crosses(value, bound, decimals) for bound in bounds):
        decimals += 1
    return f"{100.0 * value:.{decimals}f}"


def _crosses(value: float, bound: float, decimals: int) -> bool:
    shown = round(100.0 * value, decimals)
    return value != bound and (shown == round(100.0 * bound, decimals) or (shown < 100.0 * bound) != (value < bound))


def share(reading: Reading, bounds: Sequence[float] = ()) -> str:
    """A share with its error: '81.2 % (exact)', '95.1 ± 0.1 %'."""
    if reading.exact:
        return f"{percent(reading.value, bounds)} % (exact)"
    return f"{short_share(reading, bounds)} %"


def short_share(reading: Reading, bounds: Sequence[float] = ()) -> str:
    """The same for a cell of a table: '81.2' is exact, '95.1 ± 0.1' is simulated; both in percent."""
    if reading.exact:
        return percent(reading.value, bounds)
    reach = 100.0 * reading.reach
    decimals = 1 if reach >= 0.05 else 2 if reach >= 0.005 else 3
    told = percent(reading.value, bounds, decimals)
    decimals = len(told.partition(".")[2])
    return f"{told} ± {max(round(reach, decimals), 10.0**-decimals):.{decimals}f}"


def points(difference: float) -> str:
    """A difference of shares in percentage points, signed; U+2212 is the minus sign."""
    if math.isnan(difference):
        return "not known"
    told = f"{100.0 * difference:+.1f}"
    return "0.0" if float(told) == 0.0 else told.replace("-", "−")


def times(ratio: float) -> str:
    """A ratio of widths in words: '8 % wider'."""
    change = round(100.0 * (ratio - 1.0))
    if change == 0:
        return "as wide"
    return f"{abs(change)} % {'wider' if change > 0 else 'narrower'}"


@dataclass(frozen=True)
class SeverityWords:
    """Says any severity of an axis in the manner of the labels on its ladder.

    Parameters
    ----------
    before, after : str
        What stands around the number.
    inverse : bool
        Whether the label shows the reciprocal of the severity.
    """

    before: str
    after: str
    inverse: bool = False

    @classmethod
    def of(cls, ladder: Sequence[tuple[float, str]]) -> SeverityWords:
        """The manner that reproduces every label of a ladder; 'severity 2' where there is none."""
        for severity, label in ladder:
            for inverse in (False, True):
                told = _figure(severity, inverse)
                places = [i for i in range(len(label)) if label.startswith(told, i)] if told else []
                for place in reversed(places):
                    words = cls(label[:place], label[place + len(told) :], inverse)
                    if all(words.label(s, rounded=False) == text for s, text in ladder):
                        return words
        return cls("severity ", "")

    def label(self, severity: float, *, rounded: bool = True) -> str:
        """One severity, to three digits unless told otherwise."""
        if self.inverse and severity <= 0.0:
            return "normal"
        return f"{self.before}{self.figure(severity, rounded=rounded)}{self.after}"

    def figure(self, severity: float, *, rounded: bool = True) -> str:
        """The number alone."""
        if not rounded:
            return _figure(severity, self.inverse)
        if self.inverse:
            return "∞" if severity <= 0.0 else number(1.0 / severity, 3)
        return number(severity, 2)

    def span(self, low: float, high: float) -> str:
        """A range of severities."""
        if self.inverse and low <= 0.0:
            return self.label(high) if high <= 0.0 else f"normal to {self.label(high)}"
        return f"{self.before}{self.figure(low)} to {self.figure(high)}{self.after}"

    @property
    def axis(self) -> str:
        """The label of an axis of a figure."""
        return f"{self.before}… {self.after.strip()}" if self.after.strip() else self.before.strip()


def _figure(severity: float, inverse: bool) -> str:
    if inverse:
        return f"{1.0 / severity:g}" if severity > 0.0 else ""
    return f"{severity:g}"
