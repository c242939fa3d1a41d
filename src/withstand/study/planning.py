"""From a plan to a study: tables laid out by the plan, turned into designs by the model formula, at any number of rows."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any

import numpy as np
import pandas as pd

from withstand.errors import DesignError, FormulaError, ScenarioError, WithstandError, nearest
from withstand.study.build import digest_of
from withstand.study.columns import Blocks, labels_of
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus
from withstand.study.focusing import Effect, FocusEntry, foci_of
from withstand.study.formula import Formula
from withstand.study.model import Model, factors_of
from withstand.study.planned import StudyPlan
from withstand.study.rows import FixedRows, Rows, full_rank_draw
from withstand.study.study import Study

_SHOWN_STREAM = 3000
"""Separates the table that is shown from those drawn in blocks."""


@dataclass(frozen=True, eq=False)
class Planner:
    """Makes the study of a plan at any number of rows to collect.

    Parameters
    ----------
    plan : StudyPlan
        With every predictor described, every coefficient that is not 0, and `error_sd`.
    formula : Formula
        The checked model formula.
    focus : tuple of str or mapping
        As the user wrote it.
    roles : mapping of str to str
        Column by role: order, groups, weights.
    level : float
        Confidence level.
    effect : mapping of str to float or sequence of float
        The smallest effect that matters, by focal quantity.
    name : str
        Title.
    notices : tuple of str
        What the user should know.
    sd_range : tuple of float, optional
        Range of the error SD, where it rests on a pilot.

    Notes
    -----
    Centres, scales and spline bases in the formula are those of the table that is shown, at every number of rows and in every
    draw, so that a coefficient means the same throughout.
    """

    plan: StudyPlan
    formula: Formula
    focus: tuple[FocusEntry, ...]
    roles: Mapping[str, str]
    level: float = 0.95
    effect: Mapping[str, Effect] = field(default_factory=dict)
    name: str = ""
    notices: tuple[str, ...] = ()
    sd_range: tuple[float, float] | None = None

    @property
    def step(self) -> int:
        """Numbers of rows go up by whole sets of the cells of the crossing."""
        return self.plan.layout.cells

    def __call__(self, n: int) -> Study:
        """The study with n rows to collect.

        Raises
        ------
        InputError
            If n rows cannot carry the model, or something the user wrote does not suit it.
        """
        model = self._model(n)
        coefficients = self._coefficients(model)
        drawn = PlannedRows(self, model, coefficients, n)
        design = full_rank_draw(lambda: drawn.once(self._shown_generator()))
        foci = foci_of(model, self.focus, self.effect, coefficients)
        rows: Rows = FixedRows(design) if self.plan.fixed else drawn
        return Study(
            name=self.name or self.formula.text,
            formula=self.formula.text,
            design=design,
            focus=foci,
            coefficients=coefficients,
            error_sd=self.error_sd,
            rows=rows,
            level=self.level,
            notices=self.notices,
            roles=self.roles,
            digest=self._digest(design, foci, coefficients, n),
            grow=self,
        )

    @property
    def error_sd(self) -> float:
        """SD of the errors, in the unit of the response."""
        if self.plan.error_sd is None:
            raise TypeError("a plan has its error SD worked out before it is laid out")
        return self.plan.error_sd

    def frame(self, n: int, generator: np.random.Generator) -> pd.DataFrame:
        """A table as the formula takes it: columns that stand in C() as categories, rows in time order."""
        return prepared(self.plan, self.formula, self.plan.layout.table(n, generator), self.roles)

    def _shown_generator(self) -> np.random.Generator:
        return np.random.default_rng([self.plan.seed, _SHOWN_STREAM])

    def _model(self, n: int) -> Model:
        blocks = [name for name, column in self.plan.columns.items() if isinstance(column, Blocks)]
        if any(name in self.formula.columns for name in blocks):
            # More rows make more blocks, and each its own model column.
            return Model.of(self.formula, self.frame(n, self._shown_generator()))[0]
        return self._shown_model

    @cached_property
    def _shown_model(self) -> Model:
        return Model.of(self.formula, self.frame(self.plan.rows, self._shown_generator()))[0]

    def _coefficients(self, model: Model) -> Floats:
        values = dict.fromkeys(model.names, 0.0)
        written = dict(zip(model.written, model.names, strict=True))
        for name, value in self.plan.coefficients.items():
            known = written.get(name, name)
            if known not in values:
                raise ScenarioError(
                    f"'{name}' is no column of the model", where="study.plan.coefficients", remedy=nearest(name, model.names)
                )
            values[known] = value
        return np.array(list(values.values()))

    def _digest(self, design: Design, foci: Sequence[Focus], coefficients: Floats, n: int) -> str:
        told = "|".join([self.plan.digest, self.formula.text, repr(sorted(self.roles.items())), repr((self.level, n))])
        return digest_of(design, foci, coefficients, None, told)


@dataclass(frozen=True, eq=False)
class PlannedRows:
    """Tables of a plan, another in every block.

    Parameters
    ----------
    planner : Planner
        What is laid out.
    model : Model
        The formula with its bases and levels.
    coefficients : ndarray of shape (p,)
        True coefficients.
    n : int
        Rows to collect.
    """

    planner: Planner
    model: Model
    coefficients: Floats
    n: int
    fixed: bool = False

    def draw(self, generator: np.random.Generator) -> Design:
        """A table that carries the model; one that does not is drawn again."""
        return full_rank_draw(lambda: self.once(generator))

    def draw_all(self, generators: Sequence[np.random.Generator]) -> list[Design]:
        """What `draw` gives for each generator, evaluating the formula on all the tables at once."""
        frames = [self.planner.frame(self.n, generator) for generator in generators]
        X = np.split(matrix_of(self.model, pd.concat(frames, ignore_index=True)), np.cumsum([len(f) for f in frames])[:-1])
        designs = []
        for frame, part, generator in zip(frames, X, generators, strict=True):
            try:
                designs.append(self._design(frame, np.ascontiguousarray(part)))
            except DesignError:
                designs.append(self.draw(generator))
        return designs

    def once(self, generator: np.random.Generator) -> Design:
        """A table.

        Raises
        ------
        DesignError
            If it does not carry the model.
        """
        frame = self.planner.frame(self.n, generator)
        return self._design(frame, matrix_of(self.model, frame))

    def _design(self, frame: pd.DataFrame, X: Floats) -> Design:
        numeric = [name for name in frame.columns if not isinstance(frame[name].dtype, pd.CategoricalDtype)]
        roles = self.planner.roles
        order, weights = (frame[roles[role]].to_numpy(dtype=float) if role in roles else None for role in ("order", "weights"))
        groups = pd.factorize(frame[roles["groups"]], sort=False)[0].astype(np.int64) if "groups" in roles else None
        try:
            return Design(
                X=X,
                names=self.model.names,
                columns={str(name): frame[name].to_numpy(dtype=float) for name in numeric},
                factors=factors_of(frame, tuple(map(str, frame.columns))),
                fitted=X @ self.coefficients,
                order=order,
                groups=groups,
                weights=weights,
            )
        except DesignError as error:
            raise DesignError(error.what, where="study.model", remedy=error.remedy) from error


def prepared(plan: StudyPlan, formula: Formula, table: pd.DataFrame, roles: Mapping[str, str]) -> pd.DataFrame:
    """A table of the plan, or a pilot, as the formula takes it.

    Raises
    ------
    ScenarioError
        If a column that stands in C() has no fixed values.
    """
    frame = table.copy()
    for name in formula.coded:
        if not isinstance(frame[name].dtype, pd.CategoricalDtype):
            text = frame[name].map(lambda value: f"{value:.15g}")
            frame[name] = pd.Categorical(text, categories=list(labels_of(name, plan.columns[name])))
    if "order" in roles:
        frame = frame.sort_values(roles["order"], kind="stable", ignore_index=True)
    return frame


def matrix_of(model: Model, frame: pd.DataFrame) -> Floats:
    """The model matrix of other rows.

    Raises
    ------
    InputError
        If a function of the formula cannot take them, as a spline beyond the range it was made for.
    """
    try:
        return model.matrix(frame)
    except WithstandError:
        raise
    except Exception as error:  # the formula library raises many kinds, some of them of the functions it calls
        raise FormulaError(
            f"`{model.formula.text}` cannot be evaluated on a table of the plan ({str(error).splitlines()[0]})",
            where="study.model",
            remedy='A spline needs drawn columns that stay in one range, as uniform does, or draw = "once".',
        ) from error


def replanned(study: Study, **changes: Any) -> Study:
    """The same study with other plans.

    Parameters
    ----------
    study : Study
        Of a plan.
    **changes
        Fields of StudyPlan. Columns are added to those there are, or take their place.

    Raises
    ------
    InputError
        If the study has data, or the changed plan is impossible.
    """
    planner = study.grow
    if not isinstance(planner, Planner):
        raise ScenarioError("this study has data, and no plan to change", where="study", remedy="Describe it as a plan.")
    if "columns" in changes:
        changes["columns"] = {**planner.plan.columns, **changes["columns"]}
    plan = replace(planner.plan, **changes)
    kept = () if "error_sd" in changes else planner.notices
    return replace(planner, plan=plan, notices=kept, sd_range=None if "error_sd" in changes else planner.sd_range)(plan.rows)
