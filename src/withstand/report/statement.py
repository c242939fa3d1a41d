"""What a reviewer needs: a paragraph, a table and the citations."""

from __future__ import annotations

from withstand.lab.outcome import Outcome
from withstand.report import account, markdown, prose
from withstand.report.sources import citations
from withstand.report.tables import worry_table
from withstand.report.view import View, view_of
from withstand.report.words import listing, plural
from withstand.report.worry import worries


def statement(outcome: Outcome) -> str:
    """The statement in Markdown.

    Parameters
    ----------
    outcome : Outcome
        What a run found.
    """
    view = view_of(outcome)
    parts = [f"# Statement: {markdown.text(outcome.title)}"]
    paragraph = [_what(view), *(_found(view, focus) for focus in view.foci), _repeat(view)]
    parts.append(" ".join(sentence for sentence in paragraph if sentence))
    parts += [markdown.table(worry_table(view, view.leading(focus), focus)) for focus in view.foci if view.leading(focus)]
    parts += ["## Citations", "\n".join(f"- {markdown.text(what)}: {markdown.text(who)}" for what, who in citations(view))]
    parts += ["## Caution", markdown.text(prose.CAUTION)]
    return "\n\n".join(parts) + "\n"


def _what(view: View) -> str:
    formula = view.outcome.facts.get("formula")
    model = f" for the model {markdown.code(str(formula))}" if formula else ""
    procedures = listing([markdown.text(name) for name in view.procedures])
    departures = listing([markdown.text(view.name(axis)) for axis in view.ladders]) or "no departure"
    rows = markdown.text(account.rows_sentence(view))
    return (
        f"On the design of this study ({rows}){model}, we examined {procedures} when the assumptions hold and under "
        f"{departures}. Tolerance: {markdown.text(account.tolerance_sentence(view))}"
    )


def _found(view: View, focus: str) -> str:
    lead = view.leading(focus)
    if not lead:
        return f"No procedure applies to {markdown.text(focus)}."
    told = worries(view, lead, focus)
    start = account.baseline_sentence(view, lead, focus)
    start = f"{start[0].lower()}{start[1:]}" if start else ""
    sentences = [f"For {markdown.text(focus)} by {markdown.text(lead)}: {markdown.text(start)}"]
    for verdict, verb in (("gives", "It gives under"), ("unsettled", "It is unsettled under"), ("holds", "It holds under")):
        those = [f"{worry.name} ({worry.covers})" for worry in told if worry.verdict == verdict]
        if those:
            sentences.append(f"{verb} {markdown.text(listing(those))}.")
    return " ".join(sentences)


def _repeat(view: View) -> str:
    run = view.outcome.provenance
    parts = [account.effort_sentence(view)]
    if run.get("seed") is not None:
        digests = [
            f"{name} {run[key][:12]}" for name, key in (("study", "study_digest"), ("plan", "plan_digest")) if run.get(key)
        ]
        told = f" (digests: {listing(digests)})" if digests else ""
        version = (run.get("versions") or {}).get("withstand")
        by = f" with withstand {version}" if version else ""
        parts.append(f"Seed {run['seed']}{by}{told} repeats every number.")
    if view.outcome.refusals:
        parts.append(f"{plural(len(view.outcome.refusals), 'combination')} of procedure and focus did not apply.")
    return markdown.text(" ".join(part for part in parts if part))
