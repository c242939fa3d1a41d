"""What a scenario file may say. The checks here are of form; what suits the data is checked when the study is built."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated, Any, ClassVar, Literal, Self

from pydantic import Discriminator, Field, Tag, model_validator

from withstand.departures import REGISTRY as DEPARTURES
from withstand.diagnostics import Pretest
from withstand.diagnostics.base import REGISTRY as DIAGNOSTICS
from withstand.procedures.base import REGISTRY as PROCEDURES
from withstand.scenario.options import Part, option_model, tagged_union
from withstand.scenario.planned import PlanPart


class CompanionPart(Part):
    """A departure that acts all the while, at one severity."""

    kind: str


class DeparturePart(Part):
    """A departure that is tried along its ladder."""

    kind: str
    companions: list[CompanionPart] = Field(default=[], alias="with")


class ProcedurePart(Part):
    """A procedure with options that are not at their defaults."""

    name: str


class PretestPart(Part):
    """A rule: a diagnostic decides between two procedures."""

    name: ClassVar[str] = Pretest.name

    if_: str = Field(alias="if", description=f"The diagnostic that decides. Known: {', '.join(DIAGNOSTICS)}.")
    then: str = Field(description="The procedure where the diagnostic fails.")
    otherwise: str = Field(alias="else", description="The procedure where it passes.")
    alpha: float = Field(default=Pretest.alpha, description="Size of the diagnostic.")
    branch: Literal["both", "passed", "failed"] = Field(
        default="both", description="Judge the rule, or only the replicates in which the diagnostic passed (or failed)."
    )


def _written_as(value: Any) -> str:
    return "table" if isinstance(value, dict) else "text"


def _procedure_written_as(value: Any) -> str:
    return "rule" if isinstance(value, dict) and "if" in value else _written_as(value)


def _companion_models() -> list[type[Part]]:
    models: list[type[Part]] = []
    for kind, cls in DEPARTURES.items():
        # Either the severity or an option that stands for it, such as df; the class insists on one value.
        more: dict[str, Any] = {"severity": (float, Field(default=None, description=f"One {cls.unit}."))}
        models.append(option_model(CompanionPart, f"{cls.__name__}Companion", "kind", kind, cls, skip=["severity"], **more))
    return models


def _departure_models() -> list[type[Part]]:
    companions = list[tagged_union(_companion_models(), "kind")]  # type: ignore[misc, valid-type]  # known at run time only
    more: dict[str, Any] = {
        "companions": (companions, Field(default=[], alias="with", description="Further departures that act all the while."))
    }
    return [option_model(DeparturePart, f"{cls.__name__}Table", "kind", kind, cls, **more) for kind, cls in DEPARTURES.items()]


def _procedure_models() -> list[type[Part]]:
    named = {name: cls for name, cls in PROCEDURES.items() if cls is not Pretest}
    return [option_model(ProcedurePart, f"{cls.__name__}Choice", "name", name, cls) for name, cls in named.items()]


if TYPE_CHECKING:
    DepartureEntry = DeparturePart
    ProcedureEntry = ProcedurePart
else:
    DepartureEntry = tagged_union(_departure_models(), "kind")
    ProcedureEntry = tagged_union(_procedure_models(), "name")


class PointPart(Part):
    """A mean or a new response at a point."""

    at: dict[str, float | str] = Field(min_length=1, description="Value of every predictor in the model.")
    of: Literal["mean", "new"] = Field(
        default="mean", description='"mean" for the expected response there, "new" for a single new response.'
    )


class StudyPart(Part):
    """What the user has: data or a plan, a model and the quantities of interest."""

    data: str | None = Field(
        default=None, description="Table: csv, tsv, parquet or xlsx, also gzipped; relative to the scenario file."
    )
    decimal: Literal[".", ","] | None = Field(default=None, description='Decimal sign of the table, "." or ",".')
    plan: PlanPart | None = Field(default=None, description="A study that is still to be done, in place of data.")
    model: str = Field(description='Model formula, such as "y ~ a + b".')
    focus: (
        str | list[Annotated[Annotated[str, Tag("text")] | Annotated[PointPart, Tag("table")], Discriminator(_written_as)]]
    ) = Field(default=[], description="What the decision hangs on: coefficients, terms, contrasts, means, new responses.")
    order: str | None = Field(default=None, description="Column with the order in time; needed for serial correlation.")
    groups: str | None = Field(default=None, description="Column with the groups whose rows may share an error.")
    weights: str | None = Field(default=None, description="Column with known weights: reciprocals of the error variance.")
    level: float = Field(default=0.95, gt=0.0, lt=1.0, description="Confidence level; tests are at 1 - level.")
    rows: Literal["fixed", "resampled"] = Field(
        default="fixed", description='The rows "fixed" as they are, or "resampled" with replacement in each block.'
    )
    effect: dict[str, float | list[float]] = Field(
        default={}, description="The smallest effect that matters, by focal quantity, in its own unit."
    )

    @model_validator(mode="after")
    def _data_or_plan(self) -> Self:
        if (self.data is None) == (self.plan is None):
            raise ValueError(
                'it names neither data nor a plan; add data = "table.csv"'
                if self.data is None
                else "it names both data and a plan; keep one of them"
            )
        return self


class ProceduresPart(Part):
    """The procedures to judge; the first is the user's own."""

    use: list[
        Annotated[
            Annotated[str, Tag("text")] | Annotated[ProcedureEntry, Tag("table")] | Annotated[PretestPart, Tag("rule")],
            Discriminator(_procedure_written_as),
        ]
    ] = Field(min_length=1, description=f"Names, tables of a name and options, or rules. Known: {', '.join(PROCEDURES)}.")


class TolerancePart(Part):
    """How much shift the user can live with."""

    size: str | Annotated[list[float], Field(min_length=2, max_length=2)] = Field(
        default="cochran", description="A published criterion by name, or the accepted range of the size."
    )
    bias: float | Literal[False] = Field(default=0.4, description="Largest accepted bias in SDs of the estimate; false: any.")
    bias_absolute: float | None = Field(default=None, description="Largest accepted bias in the unit of the focal quantity.")
    tails: bool = Field(default=False, description="Whether each tail's miss rate is judged too.")


class SimulationPart(Part):
    """How much work a run may do."""

    seed: int = Field(default=1, ge=0, description="Same seed, same numbers.")
    repetitions: int = Field(default=10_000, ge=100, description="Replicates a simulated cell gets at least.")
    most: int | None = Field(default=None, ge=100, description="Replicates a simulated cell gets at most; 160000 if left out.")
    wrong_verdict: float = Field(default=0.01, gt=0.0, lt=0.5, description="Accepted chance that a verdict is wrong.")
    method: Literal["auto", "simulated"] = Field(
        default="auto", description='"auto" answers exactly what can be; "simulated" simulates everything.'
    )


class Scenario(Part):
    """A scenario file."""

    title: str | None = Field(default=None, description="What people see; the file name if left out.")
    study: StudyPart
    departure: list[DepartureEntry] = Field(
        default=[], description="Departures to try; left out: every one that makes sense for the columns at hand."
    )
    procedures: ProceduresPart | None = Field(default=None, description="Left out: those that answer the departures.")
    tolerance: TolerancePart = TolerancePart()
    simulation: SimulationPart = SimulationPart()
