"""What a command prints: findings for people, or JSON for a machine."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import click
import pandas as pd

from withstand.cli.layout import visible
from withstand.lab.outcome import Outcome
from withstand.report.plain import plain
from withstand.report.screen import screen


def say_findings(outcome: Outcome, page: Path | None, quiet: bool, as_json: bool) -> None:
    """Print what a run found."""
    if as_json:
        say_json(findings(outcome) | {"page": None if page is None else str(page)})
    elif not quiet:
        click.echo(visible(screen(outcome, page)), nl=False)


def say_json(record: Any) -> None:
    """Print standard JSON; a number that is not finite becomes null."""
    click.echo(json.dumps(_finite(plain(record)), indent=2, ensure_ascii=False, allow_nan=False))


def findings(outcome: Outcome) -> dict[str, Any]:
    """An outcome as plain values."""
    return {
        "title": outcome.title,
        "headline": list(outcome.headline),
        "facts": dict(outcome.facts),
        "notices": list(outcome.notices),
        "refusals": [{"procedure": a, "focus": b, "reason": c} for a, b, c in outcome.refusals],
        "ranking": records(outcome.ranking),
        "tipping": records(outcome.tipping),
        "verdicts": records(outcome.verdicts),
        "measures": records(outcome.measures),
        "provenance": dict(outcome.provenance),
    }


def records(table: pd.DataFrame) -> list[dict[str, Any]]:
    """Rows of a table; missing cells are None."""
    return [
        {str(name): None if value is None or value is pd.NA or value != value else value for name, value in row.items()}
        for row in table.to_dict("records")
    ]


def _finite(value: Any) -> Any:
    if isinstance(value, float) and not math.isfinite(value):
        return None
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_finite(item) for item in value]
    return value
