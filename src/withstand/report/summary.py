"""The findings as text, the answer first."""

from __future__ import annotations

from withstand.lab.outcome import Outcome
from withstand.report import account, markdown, prose
from withstand.report.comparison import comparisons
from withstand.report.facts import provenance_facts
from withstand.report.tables import failures_table, premium_table, protection_table, verdict_table, worry_table
from withstand.report.view import View, view_of


def summary(outcome: Outcome) -> str:
    """The findings in Markdown.

    Parameters
    ----------
    outcome : Outcome
        What a run found.
    """
    view = view_of(outcome)
    parts = [f"# {markdown.text(outcome.title)}"]
    if outcome.headline:
        parts.append(markdown.bullets(outcome.headline))
    name = str(outcome.facts.get("name") or outcome.title)
    parts.append(f"{markdown.text(name)}: {markdown.text(account.rows_sentence(view))}.")
    if outcome.facts.get("formula"):
        parts.append(f"Model: {markdown.code(str(outcome.facts['formula']))}")
    parts.append(f"Tolerance: {markdown.text(account.tolerance_sentence(view))}")
    parts.append(markdown.text(account.effort_sentence(view)))
    for focus in view.foci:
        parts += _focus(view, focus)
    parts += _left_out(view)
    parts += ["## Caution", markdown.text(prose.CAUTION)]
    parts += ["## Provenance", markdown.bullets([f"{name}: {value}" for name, value in provenance_facts(view)])]
    return "\n\n".join(part for part in parts if part) + "\n"


def _focus(view: View, focus: str) -> list[str]:
    parts = [f"## {markdown.text(focus)}"]
    lead = view.leading(focus)
    if not lead:
        return [*parts, "No procedure applies to this focal quantity."]
    estimate = account.estimate_sentence(view, focus)
    parts.append(markdown.text(f"The fit: {estimate}.") if estimate else "")
    parts.append(markdown.text(account.baseline_sentence(view, lead, focus)))
    parts += [markdown.table(worry_table(view, lead, focus)), markdown.table(premium_table(view, focus))]
    if view.ladders:
        parts += [markdown.table(protection_table(view, focus))]
        parts += [markdown.table(table) for table in comparisons(view, focus)]
        parts.append(markdown.table(verdict_table(view, focus)))
    return parts


def _left_out(view: View) -> list[str]:
    outcome = view.outcome
    parts = []
    if outcome.refusals:
        told = [f"{procedure} for {focus}: {reason}" for procedure, focus, reason in outcome.refusals]
        parts += ["## Procedures that do not apply", markdown.bullets(told)]
    failures = failures_table(view)
    if failures is not None:
        parts += ["## Failures", markdown.table(failures)]
    if outcome.notices:
        parts += ["## Notices", markdown.bullets(outcome.notices)]
    return parts
