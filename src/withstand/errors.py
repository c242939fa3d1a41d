"""What can go wrong, in two branches: the input is wrong, or the numbers went wrong.

Every message names what is wrong, where, and how to mend it; the parts stay available as attributes so that callers need
not parse text.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable

_SHOWN = 400
"""Letters kept at each end of a part of a message."""


class WithstandError(Exception):
    """Base of every error this package raises on purpose."""


class InputError(WithstandError, ValueError):
    """The input cannot be used as it is.

    Parameters
    ----------
    what : str
        What is wrong, naming the offending value.
    where : str, optional
        File, row, column or key, as the user would look for it.
    remedy : str, optional
        How to mend it.
    """

    def __init__(self, what: str, *, where: str = "", remedy: str = "") -> None:
        self.what = what
        self.where = where
        self.remedy = remedy
        sentence = what if what.endswith((".", "?", "!")) else f"{what}."
        parts = [_shortened(part) for part in (f"{where}:" if where else "", sentence, remedy) if part]
        super().__init__(" ".join(parts))

    def __reduce__(self) -> tuple[object, ...]:
        return _rebuild, (type(self), self.what, self.where, self.remedy)


class ScenarioError(InputError):
    """A scenario file or an option of a command is wrong."""


class TableError(InputError):
    """A data table cannot be read as it is."""


class FormulaError(InputError):
    """A model formula is not one this package evaluates."""


class DesignError(InputError):
    """The model matrix cannot carry the regression (rank, too few rows, leverage)."""


class LedgerError(InputError):
    """A ledger cannot be read, or belongs to another study."""


class NumericalError(WithstandError, ArithmeticError):
    """A computation did not reach its stated accuracy; no number is given."""


def _rebuild(kind: type[InputError], what: str, where: str, remedy: str) -> InputError:
    return kind(what, where=where, remedy=remedy)


def _shortened(text: str) -> str:
    """Text that fits a screen: of a cell or name of many thousand letters, the beginning and the end say enough."""
    return text if len(text) <= 2 * _SHOWN else f"{text[:_SHOWN]} […] {text[-_SHOWN:]}"


def nearest(word: str, known: Iterable[str]) -> str:
    """Return a sentence that offers the nearest known word and the choices.

    Parameters
    ----------
    word : str
        What the user wrote.
    known : iterable of str
        What could have been meant.

    Returns
    -------
    str
        "Did you mean 'x'? Known: x, y." or the choices alone when nothing is near.
    """
    choices = sorted(known)
    close = difflib.get_close_matches(word, choices, n=1, cutoff=0.6)
    offer = f"Did you mean '{close[0]}'? " if close else ""
    return f"{offer}Known: {', '.join(choices)}."
