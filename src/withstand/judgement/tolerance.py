"""How much shift the user can live with: published criteria by name, or numbers of their own."""

from __future__ import annotations

from dataclasses import dataclass

from withstand.errors import ScenarioError, nearest


@dataclass(frozen=True)
class Criterion:
    """A published tolerance on the size of a test.

    Parameters
    ----------
    name : str
        As written in a scenario.
    low, high : float
        Accepted size as multiples of the nominal one.
    source : str
        Who set it.
    """

    name: str
    low: float
    high: float
    source: str


CRITERIA = {
    criterion.name: criterion
    for criterion in (
        Criterion("cochran", 0.8, 1.2, "Cochran (1954)"),
        Criterion("bradley-liberal", 0.5, 1.5, "Bradley (1978)"),
        Criterion("bradley-strict", 0.9, 1.1, "Bradley (1978)"),
    )
}


@dataclass(frozen=True)
class Tolerance:
    """Bounds on the measures that decide a verdict.

    Parameters
    ----------
    size : str or (float, float)
        A published criterion by name, or the accepted range of the size itself. Coverage has the mirror image.
    bias : float or None
        Largest accepted bias in empirical SDs of the estimate; Schafer & Graham (2002) suggest 0.4. None: not judged.
    bias_absolute : float or None
        Largest accepted bias in the unit of the focal quantity, instead of `bias`.
    tails : bool
        Whether each tail's miss rate is judged too, at half the accepted size.

    Raises
    ------
    ScenarioError
        If the criterion is unknown or a bound is impossible.
    """

    size: str | tuple[float, float] = "cochran"
    bias: float | None = 0.4
    bias_absolute: float | None = None
    tails: bool = False

    def __post_init__(self) -> None:
        if isinstance(self.size, str):
            if self.size not in CRITERIA:
                raise ScenarioError(
                    f"unknown tolerance '{self.size}'", where="tolerance.size", remedy=nearest(self.size, CRITERIA)
                )
        elif not 0.0 <= self.size[0] < self.size[1] <= 1.0:
            raise ScenarioError(
                f"the accepted size [{self.size[0]:g}, {self.size[1]:g}] is not a range within 0 to 1",
                where="tolerance.size",
                remedy="Give two shares, the smaller first, such as [0.03, 0.07].",
            )
        for name, bound in (("bias", self.bias), ("bias_absolute", self.bias_absolute)):
            if bound is not None and not bound > 0.0:
                raise ScenarioError(
                    f"the accepted {name} is {bound:g}", where=f"tolerance.{name}", remedy="Give a positive number."
                )

    @property
    def source(self) -> str:
        """Who set the tolerance on size."""
        return CRITERIA[self.size].source if isinstance(self.size, str) else "the user"

    def size_range(self, alpha: float) -> tuple[float, float]:
        """Accepted size of a test at nominal size alpha."""
        if isinstance(self.size, str):
            criterion = CRITERIA[self.size]
            return criterion.low * alpha, criterion.high * alpha
        return self.size

    def coverage_range(self, alpha: float) -> tuple[float, float]:
        """Accepted coverage of an interval of level 1 - alpha."""
        low, high = self.size_range(alpha)
        return 1.0 - high, 1.0 - low
