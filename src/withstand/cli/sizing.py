"""The command `size`: how many rows, the same over ranges of uncertain inputs, and what given numbers of rows buy."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterator, Sequence
from contextlib import closing, contextmanager
from dataclasses import fields, replace
from pathlib import Path
from typing import Any

import click
import pandas as pd

from withstand.cli.bars import Bars
from withstand.cli.inputs import loaded_from
from withstand.cli.layout import columns, visible
from withstand.cli.running import cores, default_folder
from withstand.cli.speech import records, say_json
from withstand.cli.state import State
from withstand.departures import Departure, departure_class
from withstand.errors import InputError, ScenarioError, nearest
from withstand.front.sizing import find_size, rows_buy, several_procedures, size_at_corners
from withstand.lab.plan import Axis
from withstand.lab.size_answer import SizeAnswer
from withstand.lab.size_plan import Effort, Targets
from withstand.lab.size_ranges import CornerAnswer
from withstand.report.screen import WIDTH
from withstand.report.size_report import write_size_report
from withstand.report.words import number, percent
from withstand.scenario.choices import fitting
from withstand.scenario.load import Loaded
from withstand.study.study import Study


def size_input(
    state: State, input_path: Path, *, departures: Sequence[str], severities: Sequence[float], along: str | None,
    together: bool, plausible: bool, procedures: Sequence[str], ranges: Sequence[str], at: Sequence[int], power: float | None,
    half_width: float | None, only: bool, largest: int, growth: str | None, on: str | None, out: Path | None,
    workers: int | None, quiet: bool, as_json: bool, **options: Any,
) -> None:  # fmt: skip
    """Answer the question and write size.md, size.csv and the figure."""
    loaded = loaded_from(input_path, options)
    # What the defaults of `run` left out says nothing about this question.
    study = replace(loaded.study, notices=tuple(one for one in loaded.study.notices if one not in loaded.left_out))
    plan = loaded.plan
    axes = _axes(loaded, departures, severities, along, together, plausible)
    chosen = several_procedures(list(procedures), study) if procedures else _own_procedures(loaded)
    effort = Effort(plan.seed, plan.repetitions, plan.most, largest, workers=workers or cores(), method=plan.method)
    state.out = folder = out or default_folder(loaded.name)
    if on is not None and on not in (names := [focus.name for focus in study.focus]):
        raise ScenarioError(f"'{on}' is not in the focus", where="--on", remedy=nearest(on, names))
    if at:
        _say_table(rows_buy(study, axes, chosen, effort, at, focus=on, growth=growth, plausible=plausible), quiet, as_json)
        return
    targets = Targets(not only, power, half_width)
    with _effect_is_an_option(), closing(Bars(quiet or as_json)) as bars:
        common: dict[str, Any] = {"tolerance": plan.tolerance, "focus": on, "growth": growth, "plausible": plausible}
        common["progress"] = bars
        if ranges:
            corners = size_at_corners(study, axes, chosen, targets, effort, _ranges(ranges), **common)
            told = f"At the corners of the ranges: {' '.join(corners.sentences)}"
            _say_corners(corners, write_size_report(corners.answers[0], folder, [told]), quiet, as_json)
            return
        answer = find_size(study, axes, chosen, targets, effort, **common)
    written = write_size_report(answer, folder)
    if as_json:
        say_json(answer.as_record() | {"files": [str(path) for path in written]})
    elif not quiet:
        _say_answer(answer, written)


@contextmanager
def _effect_is_an_option() -> Iterator[None]:
    """What is said of the effect is said of the option that gives it."""
    try:
        yield
    except InputError as error:
        if error.where != "study.effect":
            raise
        raise type(error)(error.what, where="--effect", remedy=error.remedy) from error


def _axes(
    loaded: Loaded, departures: Sequence[str], severities: Sequence[float], along: str | None, together: bool, plausible: bool
) -> tuple[Axis, ...]:
    """What is asked about: the departures of the options, else those the scenario names, else nothing wrong.

    Where the residuals say how far each may go, none need be named: then it is every departure that makes sense.
    """
    if not departures:
        if severities or along or together:
            raise click.UsageError("--severity, --along and --together go with --departure")
        return loaded.plan.axes if plausible or "departure" in loaded.record else ()
    if plausible and not severities and not together:
        return tuple(Axis(_departure(kind, None, along, loaded.study)) for kind in departures)
    if len(severities) != len(departures):
        ladder = ", ".join(f"{value:g}" for value in departure_class(departures[0]).default_ladder)
        raise click.UsageError(
            f"{len(departures)} --departure and {len(severities)} --severity; give one severity for each, such as "
            f"--departure {departures[0]} --severity 2 (usual for it: {ladder})"
        )
    made = [_departure(kind, severity, along, loaded.study) for kind, severity in zip(departures, severities, strict=True)]
    if together:
        (first, *rest) = made
        return (Axis(first, tuple((companion, companion.ladder[0]) for companion in rest)),)
    return tuple(Axis(departure) for departure in made)


def _departure(kind: str, severity: float | None, along: str | None, study: Study) -> Departure:
    cls = departure_class(kind)
    options: dict[str, Any] = {} if severity is None else {"severity": severity}
    if along is not None and any(option.name == "along" for option in fields(cls)):
        options["along"] = along
    try:
        return fitting(cls(**options), study)
    except InputError as error:
        key = error.where.removeprefix("departure.")
        if key in ("severity", "along") or not error.where.startswith("departure."):
            where, more = f"--{key}" if key in ("severity", "along") else "--departure", ""
        else:
            where, more = (
                "--departure",
                f" There is no option for it: give `{key}` in a scenario file, which size takes as well.",
            )
        raise type(error)(error.what, where=where, remedy=f"{error.remedy}{more}") from error


def _own_procedures(loaded: Loaded) -> tuple[Any, ...]:
    """Those the scenario names; for a table the first, which is the user's own."""
    return loaded.plan.procedures if "procedures" in loaded.record else loaded.plan.procedures[:1]


def _ranges(given: Sequence[str]) -> dict[str, list[float]]:
    ranges: dict[str, list[float]] = {}
    for text in given:
        name, _, values = text.rpartition("=")
        try:
            numbers = [float(value) for value in values.split(",")]
        except ValueError:
            numbers = []
        if not name.strip() or not numbers or not all(map(math.isfinite, numbers)):
            raise ScenarioError(
                f"the range '{text}' is not a name with numbers", where="--range", remedy="Write it as in --range error_sd=2,4."
            )
        ranges[name.strip()] = numbers
    return ranges


def _say_answer(answer: SizeAnswer, written: Sequence[Path]) -> None:
    lines = [*_asked(answer), *(line for sentence in answer.sentences for line in _folded(f"* {sentence}"))]
    lines += [line for notice in answer.notices for line in _folded(f"Note: {notice}.")]
    click.echo(visible("\n".join([*lines, f"Everything that was looked at: {written[0]}"])))


def _say_corners(corners: CornerAnswer, written: Sequence[Path], quiet: bool, as_json: bool) -> None:
    if as_json:
        say_json({"sentences": corners.sentences, "corners": corners.as_record(), "files": [str(path) for path in written]})
    elif not quiet:
        lines = [line for sentence in corners.sentences for line in _folded(f"* {sentence}")]
        click.echo(visible("\n".join([*_asked(corners.answers[0]), *lines, f"The first corner in full: {written[0]}"])))


def _asked(answer: SizeAnswer) -> list[str]:
    """What must be met, and in which worlds, each said once."""
    lines = _folded(f"Focus: {answer.focus}. Asked: {'; '.join(answer.bounds)}.")
    lines += _folded(f"{'In each of these worlds' if len(answer.worlds) > 1 else 'World'}: {'; '.join(answer.worlds)}.")
    return [answer.title, *lines, ""]


def _folded(text: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, subsequent_indent="  ", break_on_hyphens=False)


def _say_table(table: pd.DataFrame, quiet: bool, as_json: bool) -> None:
    if as_json:
        say_json(records(table))
    elif not quiet:
        shown = [["rows", "procedure", "covers", "power", "half width", "detectable effect", "world"]]
        shown += [
            [
                str(row["n"]), row["procedure"], _share(row["coverage"]), _share(row["power"]), _known(row["half_width"]),
                _known(row["detectable_effect"]), row["world"],
            ]
            for row in table.to_dict("records")
        ]  # fmt: skip
        click.echo(visible("\n".join(columns(shown, left=(1, 6)))))


def _share(value: float) -> str:
    return "" if math.isnan(value) else f"{percent(value)} %"


def _known(value: float) -> str:
    return "" if math.isnan(value) else number(value)
