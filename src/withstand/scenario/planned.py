"""The part of a scenario that describes a study still to be done."""

from __future__ import annotations

from typing import Any, Literal, Self

from pydantic import Field, model_validator

from withstand.scenario.options import Part

_WAYS = {
    "levels": frozenset({"levels"}),
    "law": frozenset({"law", "mean", "sd", "low", "high", "correlated"}),
    "shares": frozenset({"shares", "by_count"}),
    "sequence": frozenset({"sequence"}),
    "blocks_of": frozenset({"blocks_of"}),
}
"""Keys by the one that says what a column is."""


class ColumnPart(Part):
    """A column of a planned table: one of levels, law, shares, sequence and blocks_of says what it is."""

    levels: list[float] | list[str] | None = Field(default=None, description="Fixed levels; several such columns are crossed.")
    law: Literal["normal", "lognormal", "uniform", "integers"] | None = Field(default=None, description="A drawn column.")
    mean: float | None = Field(default=None, description="Of a normal or lognormal column.")
    sd: float | None = Field(default=None, description="Of a normal or lognormal column.")
    low: float | None = Field(default=None, description="Of a uniform or integers column.")
    high: float | None = Field(default=None, description="Of a uniform or integers column.")
    correlated: dict[str, float] | None = Field(default=None, description="Correlation with other numeric columns.")
    shares: dict[str, float] | None = Field(default=None, description="Share of each level of a categorical column.")
    by_count: bool | None = Field(default=None, description="Fix the counts of the levels rather than draw them.")
    sequence: Literal[True] | None = Field(default=None, description="1, 2, 3, ... down the rows.")
    blocks_of: int | None = Field(default=None, description="Runs of so many rows in one block.")

    @property
    def way(self) -> str:
        """The key that says what the column is."""
        return next(way for way in _WAYS if way in self.model_fields_set)

    @property
    def settings(self) -> dict[str, Any]:
        """The other keys that were written down."""
        return {key: getattr(self, key) for key in self.model_fields_set if key != self.way}

    @model_validator(mode="after")
    def _one_way(self) -> Self:
        given = self.model_fields_set
        ways = [way for way in _WAYS if way in given]
        if len(ways) != 1:
            found = f"it has {' and '.join(ways)}" if ways else "it does not say what the column is"
            raise ValueError(f"{found}; give one of {', '.join(_WAYS)}")
        strange = sorted(given - _WAYS[ways[0]])
        if strange:
            raise ValueError(f"'{strange[0]}' does not go with '{ways[0]}'; leave it out")
        return self


class PlanPart(Part):
    """A study still to be done: rows, columns, coefficients and the size of the errors."""

    rows: int = Field(ge=2, description="Number of rows.")
    error_sd: float | None = Field(default=None, gt=0.0, description="SD of the errors, in the unit of the response.")
    r_squared: float | None = Field(default=None, gt=0.0, lt=1.0, description="Share of variance explained, in its place.")
    pilot: str | None = Field(default=None, description="A small table to take the error SD and coefficients from.")
    coefficients: dict[str, float] = Field(default={}, description="True coefficients by name of the model column.")
    columns: dict[str, ColumnPart] = Field(description="The predictors.", min_length=1)
    attrition: float = Field(default=0.0, ge=0.0, lt=1.0, description="Share of the rows lost at random.")
    draw: Literal["fresh", "once"] = Field(
        default="fresh", description='Random columns drawn anew in each block of replicates, or "once" for all.'
    )

    @model_validator(mode="before")
    @classmethod
    def _draw_among_columns(cls, given: Any) -> Any:
        """In TOML, a key below the header of the columns is one of them; text can only be meant for the plan."""
        columns = given.get("columns") if isinstance(given, dict) else None
        if isinstance(columns, dict) and isinstance(columns.get("draw"), str) and "draw" not in given:
            return {**given, "draw": columns["draw"], "columns": {k: v for k, v in columns.items() if k != "draw"}}
        return given

    @model_validator(mode="after")
    def _one_size_of_errors(self) -> Self:
        given = [key for key in ("error_sd", "r_squared", "pilot") if getattr(self, key) is not None]
        if len(given) != 1:
            found = f"it has {' and '.join(given)}" if given else "it does not say how large the errors are"
            raise ValueError(f"{found}; give one of error_sd, r_squared and pilot")
        return self
