"""From what the user writes as a focus to linear quantities of the coefficients."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from withstand.errors import ScenarioError, nearest
from withstand.study.design import Floats
from withstand.study.focus import Focus, FocusKind, Point
from withstand.study.model import Model

FocusEntry = str | Mapping[str, Any]
"""A coefficient, a term, a contrast written out, or {"at": {...}, "of": "mean" or "new"}."""

Effect = float | Sequence[float]

_WHERE = "study.focus"
_LARGEST = 1e50
"""Factors beyond, or below its reciprocal, have no square in double precision once a variance is scaled by it."""
_NUMBER = re.compile(r"(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?\s*\*\s*")


def foci_of(
    model: Model, entries: Sequence[FocusEntry], effects: Mapping[str, Effect] | None, coefficients: Floats
) -> tuple[Focus, ...]:
    """The focal quantities.

    Parameters
    ----------
    model : Model
        The formula bound to its table.
    entries : sequence of str or mapping
        As the user wrote them; every term but the intercept if there are none.
    effects : mapping of str to float or sequence of float, optional
        The smallest effect that matters, by entry; one number for each part of a joint term.
    coefficients : ndarray of shape (p,)
        Reference coefficients, for the mean at a point.

    Returns
    -------
    tuple of Focus

    Raises
    ------
    ScenarioError
        If an entry is no coefficient, term or contrast of the model, comes twice, or an effect belongs to none of them.
    """
    wanted = list(entries) or [term for term in model.terms if term != "Intercept"] or list(model.names)
    effects = dict(effects or {})
    foci = [_focus(model, entry, coefficients) for entry in wanted]
    names = [focus.name for focus in foci]
    if twice := [name for name in names if names.count(name) > 1]:
        raise ScenarioError(f"'{twice[0]}' is named twice", where=_WHERE, remedy="Name it once.")
    for name in effects:
        if name not in names:
            raise ScenarioError(f"'{name}' is not in the focus", where="study.effect", remedy=nearest(name, names))
    return tuple(_with_effect(focus, effects.get(focus.name)) for focus in foci)


def _with_effect(focus: Focus, effect: Effect | None) -> Focus:
    if effect is None:
        return focus
    values = np.atleast_1d(np.asarray(effect, dtype=np.float64))
    if focus.kind is FocusKind.NEW:
        raise ScenarioError(
            f"'{focus.name}' is a new response, which has no test and so no effect",
            where="study.effect",
            remedy="Leave it out.",
        )
    if values.shape != (focus.k,):
        raise ScenarioError(
            f"the effect of '{focus.name}' has {values.size} numbers, and {focus.k} are tested",
            where="study.effect",
            remedy=f"Give {focus.k} number{'s' if focus.k > 1 else ''}.",
        )
    if not np.isfinite(values).all() or not values.any():
        raise ScenarioError(
            f"the effect of '{focus.name}' is {effect}", where="study.effect", remedy="Give the smallest effect that matters."
        )
    if not np.abs(values).max() <= _LARGEST or np.abs(values).max() < 1.0 / _LARGEST:
        raise ScenarioError(
            f"the effect of '{focus.name}' is {effect}", where="study.effect", remedy="Write the data in another unit."
        )
    return Focus(focus.name, focus.kind, focus.L, focus.null, values, focus.point)


def _focus(model: Model, entry: FocusEntry, coefficients: Floats) -> Focus:
    if not isinstance(entry, str):
        return _at_point(model, entry, coefficients)
    # A name may hold any sign; only what is no name is read as an expression.
    name = entry if entry in model.terms or entry in model.names else " ".join(entry.split())
    if name in model.terms and name not in model.names:
        return _term(model, name)
    weights = _Expression(model, name).weights()
    single = np.count_nonzero(weights) == 1 and weights.sum() == 1.0
    if not weights.any():
        raise ScenarioError(
            f"'{name}' is 0 whatever the coefficients are", where=_WHERE, remedy="Contrast two different levels."
        )
    return Focus(name, FocusKind.COEFFICIENT if single else FocusKind.CONTRAST, weights[None, :], np.zeros(1))


def _term(model: Model, name: str) -> Focus:
    columns = model.terms[name]
    L = np.zeros((len(columns), len(model.names)))
    L[np.arange(len(columns)), columns] = 1.0
    return Focus(name, FocusKind.JOINT if len(columns) > 1 else FocusKind.COEFFICIENT, L, np.zeros(len(columns)))


def _at_point(model: Model, entry: Mapping[str, Any], coefficients: Floats) -> Focus:
    unknown = [key for key in entry if key not in ("at", "of")]
    if unknown or "at" not in entry:
        what = f"unknown key '{unknown[0]}'" if unknown else "the key 'at' is missing"
        raise ScenarioError(what, where=_WHERE, remedy='Write { at = { x = 1 }, of = "mean" }.')
    of = entry.get("of", "mean")
    if of not in ("mean", "new"):
        raise ScenarioError(f"of is '{of}'", where=_WHERE, remedy="Known: mean, new.")
    values: Mapping[str, float | str] = entry["at"]
    row = model.row(values)
    point = Point(
        columns={name: float(value) for name, value in values.items() if name not in model.levels},
        levels={name: str(value) for name, value in values.items() if name in model.levels},
        fitted=float(row @ coefficients),
    )
    told = ", ".join(f"{name} = {value if isinstance(value, str) else format(value, 'g')}" for name, value in values.items())
    kind = FocusKind.NEW if of == "new" else FocusKind.MEAN
    label = f"{'new response' if of == 'new' else 'mean'} at {told}" if told else "mean"
    return Focus(label, kind, row[None, :], np.zeros(1), point=point)


class _Expression:
    """A sum of multiples of coefficients: `g[b] - g[a]`, `0.5 * g[b] + 0.5 * g[c] - g[a]`, `x`."""

    def __init__(self, model: Model, text: str) -> None:
        self.model, self.text = model, text
        p = len(model.names)
        self.known: dict[str, Floats] = {}
        for factor, levels in model.levels.items():
            for level in levels:
                # A level without a column of its own is the reference: zero on the scale of the others.
                self.known[f"{factor}[{level}]"] = np.zeros(p)
        for place, (name, written) in enumerate(zip(model.names, model.written, strict=True)):
            self.known[name] = self.known[written] = np.eye(p)[place]
        for term, columns in model.terms.items():
            if len(columns) == 1:
                self.known.setdefault(term, np.eye(p)[columns[0]])

    def weights(self) -> Floats:
        if self.text in self.known:
            return self.known[self.text]
        total, rest, sign = np.zeros(len(self.model.names)), self.text, 1.0
        if rest.startswith("-"):
            rest, sign = rest[1:].lstrip(), -1.0
        while True:
            factor = 1.0
            if number := _NUMBER.match(rest):
                factor, rest = float(number.group(0).rstrip("* \t")), rest[number.end() :]
                if factor and not 1.0 / _LARGEST <= factor <= _LARGEST:
                    raise ScenarioError(
                        f"the factor {factor:g} in '{self.text}' is out of range",
                        where=_WHERE,
                        remedy=f"Give a number from {1.0 / _LARGEST:g} to {_LARGEST:g}, or write the data in another unit.",
                    )
            name = self._longest(rest)
            total += sign * factor * self.known[name]
            rest = rest[len(name) :].lstrip()
            if not rest:
                return total
            if rest[0] not in "+-":
                raise self._unknown(rest)
            rest, sign = rest[1:].lstrip(), 1.0 if rest[0] == "+" else -1.0

    def _longest(self, rest: str) -> str:
        """The longest known name that `rest` begins with and that ends at a boundary."""
        fitting = [
            name for name in self.known if rest.startswith(name) and (len(rest) == len(name) or rest[len(name)] in " +-")
        ]
        if not fitting:
            raise self._unknown(rest)
        return max(fitting, key=len)

    def _unknown(self, rest: str) -> ScenarioError:
        bracketed = re.match(r"([^\[\]]+)\[([^\]]*)\]", rest)
        if bracketed and bracketed.group(1) in self.model.levels:
            factor, level = bracketed.groups()
            return ScenarioError(
                f"'{factor}' has no level '{level}'", where=_WHERE, remedy=nearest(level, self.model.levels[factor])
            )
        name = re.split(r"\s+[+-]\s+", rest)[0].strip()
        what = f"'{name}' is no coefficient or term of the model"
        hidden = set(self.model.written) - set(self.model.names)
        if name != self.text:
            what += f", in '{self.text}'"
        return ScenarioError(what, where=_WHERE, remedy=nearest(name, {*self.known, *self.model.terms} - hidden))
