"""What the user has: a design, a focus, and a reference fit that gives the size of things."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Literal, Self

import numpy as np
import pandas as pd

from withstand.study.build import fields_from_frame, fields_from_results
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus
from withstand.study.focusing import Effect, FocusEntry
from withstand.study.rows import Account, Rows


@dataclass(frozen=True, eq=False)
class Study:
    """Data or plan, model formula and focus.

    Parameters
    ----------
    name : str
        Title of the study, shown to people.
    formula : str
        Model formula, as written.
    design : Design
        The rows as they are; of a plan, one draw of it.
    focus : tuple of Focus
        At least one.
    coefficients : ndarray of shape (p,)
        Reference coefficients: fitted to the data, or stated in the plan.
    error_sd : float
        Reference error SD, in the unit of the response.
    rows : Rows
        Fixed, resampled or drawn afresh.
    response : ndarray of shape (n,), optional
        Observed response in the order of the design's rows; None for a plan.
    level : float
        Confidence level; tests are at 1 - level.
    account : Account, optional
        What was read and dropped.
    notices : tuple of str
        What the user should know about how the table was read.
    labels : tuple of str, length n
        What the user calls each row, in the order of the design's rows; empty for a plan.
    roles : mapping of str to str
        Names of the columns that give order, groups and weights, by role.
    digest : str
        Hash of everything above that can change a result.
    grow : callable, optional
        Makes the study at another number of rows to collect; a plan has it, data grow by a rule (see `growth`).
    """

    name: str
    formula: str
    design: Design
    focus: tuple[Focus, ...]
    coefficients: Floats
    error_sd: float
    rows: Rows
    response: Floats | None = None
    level: float = 0.95
    account: Account | None = None
    notices: tuple[str, ...] = ()
    labels: tuple[str, ...] = ()
    roles: Mapping[str, str] = field(default_factory=dict)
    digest: str = ""
    grow: Callable[[int], Study] | None = None

    @classmethod
    def from_frame(
        cls,
        frame: pd.DataFrame,
        formula: str,
        *,
        focus: FocusEntry | Sequence[FocusEntry] = (),
        order: str | None = None,
        groups: str | None = None,
        weights: str | None = None,
        level: float = 0.95,
        rows: Literal["fixed", "resampled"] = "fixed",
        effect: Mapping[str, Effect] | None = None,
        name: str = "",
    ) -> Self:
        """A study of a table.

        Parameters
        ----------
        frame : DataFrame
            One row an observation. It is not changed.
        formula : str
            Model, such as "y ~ a + b".
        focus : str, mapping, or sequence of them
            What the decision hangs on: coefficients, terms, contrasts ("g[a] - g[b]"), or points ({"at": {...}, "of": "mean"
            or "new"}). Left out: every term of the model.
        order : str, optional
            Column with the order in time, numbers or dates.
        groups : str, optional
            Column with the clusters.
        weights : str, optional
            Column with known weights, proportional to reciprocals of the error variance.
        level : float
            Confidence level, in (0, 1); tests are at 1 - level.
        rows : {"fixed", "resampled"}
            The rows as they are, or drawn with replacement in each block of replicates.
        effect : mapping of str to float or sequence of float, optional
            The smallest effect that matters, by entry of the focus, in its own unit.
        name : str
            Title.

        Raises
        ------
        InputError
            If the table, the formula, the focus or the model matrix cannot be used; the message says where and how to mend it.
        """
        return cls(
            **fields_from_frame(
                frame,
                formula,
                focus=focus,
                order=order,
                groups=groups,
                weights=weights,
                level=level,
                rows=rows,
                effect=effect,
                name=name,
            )
        )

    @classmethod
    def from_results(cls, results: Any, **options: Any) -> Self:
        """A study of a model that was fitted with statsmodels.

        Parameters
        ----------
        results : RegressionResults
            Of an OLS or WLS fit, made with or without a formula. The weights of a WLS fit are its known weights.
        **options
            focus, order, groups, level, rows, effect and name, as for `from_frame`; `order` and `groups` name columns of the
            frame the model was fitted to.

        Raises
        ------
        InputError
            If the fit is of another kind, or its repetition here gives other fitted values.
        """
        return cls(**fields_from_results(results, **options))

    @property
    def n(self) -> int:
        """Number of rows in a replicate."""
        return self.design.n

    @property
    def alpha(self) -> float:
        """Nominal test size."""
        return 1.0 - self.level

    @property
    def residuals(self) -> Floats | None:
        """Residuals of the reference fit, (n,), in the unit of the response."""
        if self.response is None:
            return None
        return np.asarray(self.response - self.design.X @ self.coefficients)
