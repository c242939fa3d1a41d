"""From a scenario file, or the options that stand for one, to a study and a plan."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from withstand.errors import InputError, ScenarioError
from withstand.judgement.tolerance import Tolerance
from withstand.lab.plan import Plan
from withstand.procedures.base import Procedure, make_procedure
from withstand.scenario.axes import axes_of
from withstand.scenario.choices import MOST, answering
from withstand.scenario.complaints import complaint
from withstand.scenario.defaults import default_axes, default_procedures
from withstand.scenario.options import given_options
from withstand.scenario.plans import study_of_plan
from withstand.scenario.schema import ProceduresPart, Scenario, SimulationPart, StudyPart, TolerancePart
from withstand.scenario.source import Source
from withstand.study.study import Study
from withstand.study.table import read_table


@dataclass(frozen=True, eq=False)
class Loaded:
    """A scenario, ready to run.

    Parameters
    ----------
    name : str
        Short name, for folders.
    study : Study
        What the user has; its notices include what the defaults left out.
    plan : Plan
        What to try.
    record : mapping
        The scenario with all overrides and an absolute path to the data, to be run again from anywhere.
    left_out : tuple of str
        Those notices of the study that say which departures the defaults left out.
    """

    name: str
    study: Study
    plan: Plan
    record: Mapping[str, Any]
    left_out: tuple[str, ...] = ()


def load_scenario(path: Path, overrides: Mapping[str, Mapping[str, Any]] | None = None) -> Loaded:
    """Read a scenario file.

    Parameters
    ----------
    path : Path
        The file; paths in it are relative to its folder.
    overrides : mapping of str to mapping, optional
        Keys of its tables that are replaced, as in {"simulation": {"seed": 3}}.

    Raises
    ------
    InputError
        If anything in it, or in the data it names, cannot be used.
    """
    source = Source.read(path)
    return load(source.parse(), source, path.stem, overrides)


def load(raw: Mapping[str, Any], source: Source, name: str, overrides: Mapping[str, Mapping[str, Any]] | None = None) -> Loaded:
    """Turn the values of a scenario into a study and a plan.

    Parameters
    ----------
    raw : mapping
        The values as they were read.
    source : Source
        Where they were read from.
    name : str
        Short name of the scenario.
    overrides : mapping, optional
        See `load_scenario`.

    Raises
    ------
    InputError
        See `load_scenario`.
    """
    values = _overridden(raw, overrides or {})
    try:
        scenario = Scenario.model_validate(values)
    except ValidationError as error:
        raise complaint(error, values, source) from error
    try:
        study = _study(scenario, source, name)
        axes, notices = (axes_of(scenario.departure, study, source), ()) if scenario.departure else default_axes(study)
        procedures = _procedures(scenario.procedures, study, source) if scenario.procedures else default_procedures(study)
        plan = _plan(scenario, axes, procedures)
    except InputError as error:
        raise source.relocate(error) from error
    study = replace(study, notices=(*study.notices, *notices))
    return Loaded(name, study, plan, _record(values, source, study.name), notices)


def _overridden(raw: Mapping[str, Any], overrides: Mapping[str, Mapping[str, Any]]) -> dict[str, Any]:
    values = dict(raw)
    for table, keys in overrides.items():
        before = values.get(table, {})
        if keys and isinstance(before, Mapping):  # anything else is for the validator to refuse
            values[table] = {**before, **keys}
    return values


def _study(scenario: Scenario, source: Source, name: str) -> Study:
    part = scenario.study
    title = scenario.title or name
    if part.plan is not None:
        return study_of_plan(part, part.plan, title, source, scenario.simulation.seed)
    if part.data is None:
        raise ScenarioError("it names neither data nor a plan", where="study.data", remedy='Add data = "table.csv".')
    table = source.folder / part.data
    frame = read_table(table, decimal=part.decimal)
    try:
        return Study.from_frame(frame, part.model, name=title, **common_options(part))
    except InputError as error:
        if not error.where.startswith("row "):
            raise
        # A frame does not know which file it came from.
        raise type(error)(error.what, where=f"{table}, {error.where}", remedy=error.remedy) from error


def common_options(part: StudyPart) -> dict[str, Any]:
    """What data and plans are told alike."""
    focus = [part.focus] if isinstance(part.focus, str) else part.focus
    return {
        "focus": [item if isinstance(item, str) else {"at": item.at, "of": item.of} for item in focus],
        "order": part.order,
        "groups": part.groups,
        "weights": part.weights,
        "level": part.level,
        "rows": part.rows,
        "effect": part.effect,
    }


def _procedures(part: ProceduresPart, study: Study, source: Source) -> tuple[Procedure, ...]:
    made = []
    for place, entry in enumerate(part.use):
        try:
            procedure = (
                make_procedure(entry)
                if isinstance(entry, str)
                else make_procedure(entry.name, **given_options(entry, ["name"]))
            )
            made.append(answering(procedure, study))
        except InputError as error:
            where = source.where(("procedures", "use", place))
            raise type(error)(error.what, where=where, remedy=error.remedy) from error
    return tuple(made)


def _plan(scenario: Scenario, axes: tuple[Any, ...], procedures: tuple[Procedure, ...]) -> Plan:
    effort: SimulationPart = scenario.simulation
    return Plan(
        axes,
        procedures,
        _tolerance(scenario.tolerance),
        seed=effort.seed,
        repetitions=effort.repetitions,
        most=max(MOST, effort.repetitions) if effort.most is None else effort.most,
        wrong_verdict=effort.wrong_verdict,
        method=effort.method,
    )


def _tolerance(part: TolerancePart) -> Tolerance:
    size = part.size if isinstance(part.size, str) else (part.size[0], part.size[1])
    bias = None if part.bias is False or (part.bias_absolute is not None and "bias" not in part.model_fields_set) else part.bias
    return Tolerance(size, bias, part.bias_absolute, part.tails)


def _record(values: Mapping[str, Any], source: Source, title: str) -> dict[str, Any]:
    study = dict(values["study"])
    if "data" in study:
        study["data"] = str((source.folder / study["data"]).resolve())
    if "pilot" in study.get("plan", {}):
        study["plan"] = {**study["plan"], "pilot": str((source.folder / study["plan"]["pilot"]).resolve())}
    return {"title": title, **values, "study": study}
