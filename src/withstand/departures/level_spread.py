"""The spread layer: the error SD differs between the levels of a factor."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from withstand.departures.along import factor_along
from withstand.departures.base import register
from withstand.departures.spread import RatioSpread
from withstand.errors import ScenarioError, nearest
from withstand.study.design import Design, Floats
from withstand.study.focus import Point


@register
@dataclass(frozen=True)
class LevelSpread(RatioSpread):
    """Some levels of a factor have a larger error SD than the others.

    Parameters
    ----------
    severity : float or sequence of float
        Ratio of the error SD in the noisy levels to that in the others, 1 or more.
    along : str
        A categorical column.
    noisy : tuple of str
        The noisy levels; at least one, and not all.
    """

    along: str = ""
    noisy: tuple[str, ...] = ()

    kind = "level-spread"
    title = "error SD larger in some levels of a factor"
    construction = "s = ratio in the noisy levels, 1 in the others, mean square 1"
    source = "unequal group variances; Scheffe (1959), ch. 10"

    def __post_init__(self) -> None:
        super().__post_init__()
        levels = (self.noisy,) if isinstance(self.noisy, str) else self.noisy
        object.__setattr__(self, "noisy", tuple(levels))

    @property
    def name(self) -> str:
        """See Departure."""
        return f"{super().name} (noisy: {', '.join(self.noisy)})" if self.noisy else super().name

    def not_applicable(self, design: Design) -> str | None:
        """See Departure."""
        noisy = self._noisy_rows(design)
        if noisy.all() or not noisy.any():
            return (
                f"not applicable, because {'every row' if noisy.all() else 'no row'} is in the noisy levels of '{self.along}'; "
                "name levels that some rows have and others have not"
            )
        return None

    def profile(self, design: Design, severity: float) -> Floats:
        """See SpreadDeparture."""
        return np.where(self._noisy_rows(design), severity, 1.0)

    def profile_at(self, design: Design, point: Point, severity: float) -> float:
        """See SpreadDeparture."""
        if self.along not in point.levels:
            raise ScenarioError(
                f"'level-spread' acts along '{self.along}', and the point of the focus gives no level of it",
                where="study.focus.at",
                remedy=f'Add {self.along} = "..." to the point.',
            )
        return severity if point.levels[self.along] in self.noisy else 1.0

    def _noisy_rows(self, design: Design) -> NDArray[np.bool_]:
        factor = factor_along(design, self.along, self.kind)
        for level in self.noisy:
            if level not in factor.levels:
                raise ScenarioError(
                    f"'{self.along}' has no level '{level}'", where="departure.noisy", remedy=nearest(level, factor.levels)
                )
        if not self.noisy:
            raise ScenarioError(
                f"'level-spread' along '{self.along}' does not say which levels are noisy",
                where="departure.noisy",
                remedy=f"Name one or more of: {', '.join(factor.levels)}.",
            )
        return np.isin(factor.codes, [factor.levels.index(level) for level in self.noisy])
