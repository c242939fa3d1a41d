"""Makes the tables of the demo scenarios. All data are invented; the same seed gives the same files.

Run it in this folder: python make_data.py
"""

from pathlib import Path

import numpy as np
import pandas as pd

HERE = Path(__file__).parent


def kiln_boards(generator: np.random.Generator) -> pd.DataFrame:
    """36 boards dried in 6 kiln charges; how far each has cupped.

    Boards of one charge share part of their error (one kiln, one weather), and errors are skewed to the right: a board can
    cup far more than the others, hardly far less.
    """
    rows = []
    run_no = 0
    species = np.array(["oak", "ash", "beech"])
    for charge, hours in enumerate((52.0, 76.0, 64.0, 98.0, 86.0, 110.0)):
        shared = generator.normal(0.0, 0.45)
        kinds = species[generator.permutation([0, 0, 0, 1, 1, 2] if charge % 2 else [0, 0, 1, 1, 2, 2])]
        for board, kind in enumerate(kinds):
            run_no += 1
            dry_hours = hours + 3.0 * board
            thickness = generator.choice([19.0, 22.0, 25.0, 32.0], p=[0.2, 0.3, 0.35, 0.15])
            own = (generator.gamma(1.2, 1.0) - 1.2) / np.sqrt(1.2) * 0.75
            level = {"oak": 0.9, "ash": 0.4, "beech": 1.6}[str(kind)]
            cup = 2.2 + 0.026 * (dry_hours - 60.0) - 0.045 * (thickness - 25.0) + level + shared + own
            rows.append((round(max(cup, 0.1), 2), dry_hours, thickness, kind, f"C{charge + 1}", run_no))
    return pd.DataFrame(rows, columns=["cup_mm", "dry_hours", "thickness_mm", "species", "charge", "run_no"])


def reservoir(generator: np.random.Generator) -> pd.DataFrame:
    """130 weekly nitrate samples from a reservoir, with weeks in which nobody could sample.

    A slow fall, a season, more nitrate when much water flows in, and errors that carry over from week to week.
    """
    weeks = np.arange(1, 140)
    missing = {9, 10, 31, 57, 58, 59, 84, 103, 121}
    season = 2.0 * np.pi * weeks / 52.18
    wet = np.zeros(len(weeks))
    error = np.zeros(len(weeks))
    for t in range(len(weeks)):
        wet[t] = (0.7 * wet[t - 1] if t else 0.0) + generator.normal(0.0, 0.35)
        error[t] = (0.55 * error[t - 1] if t else 0.0) + generator.normal(0.0, 0.9)
    inflow = np.exp(0.9 + 0.5 * np.cos(season - 0.4) + wet)
    nitrate = 11.5 - 0.012 * weeks + 1.9 * np.cos(season - 0.6) + 0.8 * np.log(inflow) + error
    table = pd.DataFrame(
        {
            "week": weeks,
            "nitrate_mg_l": nitrate.round(2),
            "inflow_m3_s": inflow.round(2),
            "season_sin": np.sin(season).round(4),
            "season_cos": np.cos(season).round(4),
        }
    )
    return table[~table["week"].isin(missing)]


def main() -> None:
    """Write both tables beside this script."""
    for place, make in enumerate((kiln_boards, reservoir)):
        table = make(np.random.default_rng([20, place]))
        table.to_csv(HERE / f"{make.__name__}.csv", index=False, lineterminator="\n")


if __name__ == "__main__":
    main()
