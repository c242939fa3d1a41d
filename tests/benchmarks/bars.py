"""The closing lines of a benchmark: `BAR name figure needed met|short`, and the exit status they give."""

from __future__ import annotations

import argparse
import json
from pathlib import Path


def options(description: str | None) -> argparse.Namespace:
    """Read the options every benchmark has."""
    parser = argparse.ArgumentParser(description=description, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--json", type=Path, help="write the bars to this file as well")
    parser.add_argument("--quick", action="store_true", help="fewer repetitions; for a look, not for a figure to quote")
    return parser.parse_args()


class Bars:
    """Collects bars and prints them at the end."""

    def __init__(self, chosen: argparse.Namespace) -> None:
        self._file: Path | None = chosen.json
        self._rows: list[tuple[str, float, str, bool]] = []

    def at_least(self, name: str, figure: float, needed: float) -> None:
        """Add a bar that the figure must reach."""
        self._rows.append((name, figure, f">={needed:g}", figure >= needed))

    def at_most(self, name: str, figure: float, needed: float) -> None:
        """Add a bar that the figure must stay under."""
        self._rows.append((name, figure, f"<={needed:g}", figure <= needed))

    def close(self) -> int:
        """Print the bars; 1 if one is short, else 0."""
        print()
        for name, figure, needed, met in self._rows:
            print(f"BAR {name} {figure:.4g} {needed} {'met' if met else 'short'}")
        if self._file is not None:
            keys = ("name", "figure", "needed", "met")
            rows = [dict(zip(keys, row, strict=True)) for row in self._rows]
            self._file.write_text(json.dumps(rows, indent=1) + "\n", encoding="utf-8")
        return 0 if all(row[-1] for row in self._rows) else 1
