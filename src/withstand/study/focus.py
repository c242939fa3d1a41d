"""The linear quantities that the decision hangs on."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum

import numpy as np

from withstand.study.design import Floats


class FocusKind(StrEnum):
    """What a focal quantity is."""

    COEFFICIENT = "coefficient"
    CONTRAST = "contrast"
    JOINT = "joint"
    MEAN = "mean"
    NEW = "new"


@dataclass(frozen=True, eq=False)
class Point:
    """Predictor values at which a mean or a new response is asked for.

    Parameters
    ----------
    columns : mapping of str to float
        Numeric predictors, in their own units.
    levels : mapping of str to str
        Levels of the categorical predictors.
    fitted : float
        Reference mean at the point, in the unit of the response.
    """

    columns: Mapping[str, float] = field(default_factory=dict)
    levels: Mapping[str, str] = field(default_factory=dict)
    fitted: float = 0.0


@dataclass(frozen=True, eq=False)
class Focus:
    """theta = L beta, what the analyst reads off the fit.

    Parameters
    ----------
    name : str
        As the user wrote it.
    kind : FocusKind
        Joint quantities have k > 1 rows, all others one.
    L : ndarray of shape (k, p)
        Rows in the coordinates of the model matrix.
    null : ndarray of shape (k,)
        Value under the null hypothesis, in units of theta.
    effect : ndarray of shape (k,), optional
        The smallest difference from `null` that matters, in units of theta. Power is judged at it.
    point : Point, optional
        For a mean or a new response.
    """

    name: str
    kind: FocusKind
    L: Floats
    null: Floats
    effect: Floats | None = None
    point: Point | None = None

    @property
    def k(self) -> int:
        """Number of rows."""
        return self.L.shape[0]

    @property
    def scalar(self) -> bool:
        """Whether the quantity is a single number."""
        return self.k == 1

    @classmethod
    def coefficient(cls, name: str, names: tuple[str, ...], effect: float | None = None) -> Focus:
        """The focus on one column of the model matrix, null value 0."""
        L = np.zeros((1, len(names)))
        L[0, names.index(name)] = 1.0
        return cls(name, FocusKind.COEFFICIENT, L, np.zeros(1), None if effect is None else np.array([effect]))
