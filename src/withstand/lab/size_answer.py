"""The answer to 'how many rows': a size for each procedure, everything that was looked at, and the sentences that say it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import pandas as pd

CURVE_COLUMNS = (
    "n", "analysed", "procedure", "focus", "world", "measure", "value", "mc_se", "low", "high", "needed_low", "needed_high",
    "method", "repetitions", "look",
)  # fmt: skip
"""`n` rows to collect, `analysed` rows left after losses; `look` is 'search' or 'confirmation'."""


@dataclass(frozen=True)
class ProcedureSize:
    """The answer for one procedure.

    Parameters
    ----------
    procedure : str
        Its identity.
    n : int or None
        Rows to collect; None where no number of rows will do, none up to the largest did, or the procedure does not apply.
    low, high : int or None
        Interval of n; the same as n where it is exact, None where there is none.
    least : bool
        Whether n is the smallest number of rows that was possible.
    bounded : bool
        Whether `high` is an end of the interval; False where the search ended first.
    method : str
        "exact" or "simulated": how the requirement was answered that asks for the most rows.
    binding : str
        That requirement, or the one that fails.
    no_cure : bool
        Whether the large-sample limit itself is outside what is asked.
    limit : float or None
        The large-sample limit of the coverage in the worst world, where it is known.
    confirmed_at : int or None
        The number of rows, n or very near it, of the second look, with fresh noise.
    confirmed, confirmed_se : float or None
        The binding measure there, and its Monte Carlo standard error.
    reason : str
        Why there is no n.
    instead : tuple of str
        Procedures whose limit is within what is asked, where this one's is not.
    """

    procedure: str
    n: int | None
    low: int | None = None
    high: int | None = None
    least: bool = False
    bounded: bool = True
    method: str = "exact"
    binding: str = ""
    no_cure: bool = False
    limit: float | None = None
    confirmed_at: int | None = None
    confirmed: float | None = None
    confirmed_se: float | None = None
    reason: str = ""
    instead: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False, repr=False)
class SizeAnswer:
    """What was found.

    Parameters
    ----------
    title, focus : str
        Of the study, and of the focal quantity.
    asked : tuple of str
        The requirements in words, each with its world.
    sizes : tuple of ProcedureSize
        In the order asked for.
    curve : DataFrame
        CURVE_COLUMNS: everything that was looked at.
    growth : str
        How the rows grow, in a sentence.
    level : float
        Level of the interval of n.
    notices : tuple of str
        What the user should know about the study.
    have : int or None
        Rows of the data in hand; None for a plan.
    range_sentences : tuple of str
        What the answer is over the range of an uncertain input.
    range_record : tuple of mapping
        The same as plain values, one a corner and procedure.
    bounds, worlds : tuple of str
        The requirements in words without their worlds, and the worlds, each once.
    """

    title: str
    focus: str
    asked: tuple[str, ...]
    sizes: tuple[ProcedureSize, ...]
    curve: pd.DataFrame
    growth: str
    level: float
    notices: tuple[str, ...] = ()
    have: int | None = None
    range_sentences: tuple[str, ...] = ()
    range_record: tuple[dict[str, Any], ...] = ()
    bounds: tuple[str, ...] = ()
    worlds: tuple[str, ...] = ()

    @property
    def best(self) -> ProcedureSize | None:
        """The procedure that needs the fewest rows; of equals the one named first."""
        found = [size for size in self.sizes if size.n is not None]
        return min(found, key=lambda size: size.n or 0) if found else None

    @property
    def n(self) -> int | None:
        """Rows to collect with the procedure that needs the fewest."""
        return None if self.best is None else self.best.n

    @property
    def sentences(self) -> tuple[str, ...]:
        """The answer in words, the most important first."""
        return (*(_told(size, self) for size in self.sizes), *self._choice(), *self.range_sentences, self.growth)

    def _choice(self) -> tuple[str, ...]:
        if len(self.sizes) < 2 or self.best is None:
            return ()
        *others, last = (size.procedure for size in self.sizes if size.n == self.n)
        return (f"The fewest rows: {', '.join(others) + ' and ' if others else ''}{last}, with {self.n}.",)

    def __repr__(self) -> str:
        return "\n".join([self.title, *self.sentences])

    def as_record(self) -> dict[str, Any]:
        """Everything as plain values, for machines."""
        return {
            "title": self.title,
            "focus": self.focus,
            "asked": list(self.bounds),
            "worlds": list(self.worlds),
            "n": self.n,
            "best": None if self.best is None else self.best.procedure,
            "level": self.level,
            "sizes": [{**size.__dict__, "instead": list(size.instead)} for size in self.sizes],
            "growth": self.growth,
            "notices": list(self.notices),
            "ranges": list(self.range_record),
            "curve": [
                {str(key): None if isinstance(v, float) and not math.isfinite(v) else v for key, v in row.items()}
                for row in self.curve.to_dict("records")
            ],
        }


def _told(size: ProcedureSize, answer: SizeAnswer) -> str:
    if size.n is None:
        return _none(size)
    if size.n == answer.have:
        told = f"{size.procedure}: the {size.n} rows there are do, for {size.binding}; fewer were not looked at."
    else:
        told = f"{size.procedure}: {size.n} rows ({_span(size, answer.level)}), for {size.binding}."
    if size.confirmed is not None and size.confirmed_se is not None:
        reach = f"{size.confirmed:.4f} +- {1.96 * size.confirmed_se:.4f}"
        told += f" Looked at again with fresh noise at {size.confirmed_at} rows: {reach}."
    return told


def _none(size: ProcedureSize) -> str:
    told = f"{size.procedure}: {size.reason}."
    if not size.no_cure:
        return told
    if size.limit is not None:
        told += f" With ever more rows it covers {100 * size.limit:.1f} %, and what is asked is {size.binding}."
    if not size.instead:
        return f"{told} No procedure with a known limit meets it."
    return f"{told} With enough rows these meet it: {', '.join(size.instead)}."


def _span(size: ProcedureSize, level: float) -> str:
    if size.low == size.high == size.n and size.least:
        return "the fewest that were possible"
    if size.low == size.high == size.n and size.method == "exact":
        return "exact"
    return f"{100 * level:g} % interval {size.low} to {size.high}{'' if size.bounded else ' or more'}"
