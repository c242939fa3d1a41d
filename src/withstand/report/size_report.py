"""The answer to 'how many rows' as a figure, a table and a page of text."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import NullLocator

from withstand.lab.size_answer import CURVE_COLUMNS, ProcedureSize, SizeAnswer
from withstand.report import style
from withstand.report.figures import as_png, as_svg
from withstand.report.files import write_files
from withstand.report.words import count, listing, number, percent

_SHARES = {"coverage", "size", "power", "miss_below", "miss_above"}
_LABELS = {
    "coverage": "coverage, %",
    "size": "size, %",
    "power": "power, %",
    "miss_below": "intervals below the truth, %",
    "miss_above": "intervals above the truth, %",
    "half_width": "half width",
    "bias_in_sd": "bias, SDs",
    "bias": "bias",
}
_HEIGHT = 2.1
"""Inches of a panel."""


def worst_curve(answer: SizeAnswer, procedure: str, measure: str) -> pd.DataFrame:
    """One row an n: the reading with the smallest margin over the worlds, second looks left out.

    Where not every world was looked at, because something failed in one, a reading stands only if it fails itself.
    """
    curve = answer.curve
    chosen = (curve["procedure"] == procedure) & (curve["measure"] == measure) & (curve["look"] == "search")
    asked = np.isfinite(curve["needed_low"]) | np.isfinite(curve["needed_high"])
    rows = curve[chosen & asked].copy()
    rows["margin"] = np.minimum(rows["value"] - rows["needed_low"], rows["needed_high"] - rows["value"])
    everywhere = rows.groupby("n")["world"].transform("nunique") == len(answer.worlds)
    rows = rows[everywhere | (rows["margin"] < 0.0)]
    return rows.sort_values("margin").drop_duplicates("n").sort_values("n", ignore_index=True)


def shown_measures(answer: SizeAnswer) -> list[str]:
    """Measures with a target, in order; the bias is shown where it decides, or alone."""
    curve = answer.curve
    asked = curve[np.isfinite(curve["needed_low"]) | np.isfinite(curve["needed_high"])]
    found = [measure for measure in _LABELS if measure in set(asked["measure"])]
    deciding = " ".join(size.binding for size in answer.sizes)
    return [m for m in found if not m.startswith("bias") or "bias" in deciding] or found


def size_figure(answer: SizeAnswer) -> Figure | None:
    """The n-curve: every measure with a target against n, a line a procedure, the answer marked.

    Returns
    -------
    Figure or None
        None where nothing was looked at, because the large-sample limit answered at once.
    """
    measures = shown_measures(answer)
    if not measures:
        return None
    with style.own_style():
        figure = Figure(figsize=(style.WIDTH, _HEIGHT * len(measures) + 0.55))
        top = 1.0 - 0.45 / figure.get_figheight()
        axes = figure.subplots(
            len(measures), 1, sharex=True, squeeze=False, gridspec_kw={"top": top, "left": 0.1, "right": 0.98}
        )
        figure.suptitle(
            style.drawable(f"{answer.title}: {answer.focus}", 90),
            x=0.1,
            y=0.99,
            ha="left",
            va="top",
            fontsize=9.0,
            fontweight="bold",
        )
        for panel, measure in zip(axes[:, 0], measures, strict=True):
            _draw(panel, answer, measure)
        bottom = axes[-1, 0]
        bottom.set_xscale("log")
        bottom.set_xlabel("rows to collect (the band is the 95 % Monte Carlo interval; a vertical line marks the answer)")
        _tick_rows(bottom, sorted(set(answer.curve["n"])))
        axes[0, 0].legend(loc="best")
        figure.subplots_adjust(bottom=0.42 / figure.get_figheight(), hspace=0.18)
        return figure


def _draw(panel: Axes, answer: SizeAnswer, measure: str) -> None:
    factor = 100.0 if measure in _SHARES else 1.0
    bounds: set[float] = set()
    for place, size in enumerate(answer.sizes):
        colour = style.COLOURS[place % len(style.COLOURS)]
        rows = worst_curve(answer, size.procedure, measure)
        if rows.empty:
            continue
        n = rows["n"].to_numpy(dtype=float)
        values, low, high = (factor * rows[name].to_numpy(dtype=float) for name in ("value", "low", "high"))
        panel.plot(
            n, values, color=colour, marker=style.MARKERS[place % len(style.MARKERS)], label=style.drawable(_named(size), 60)
        )
        panel.fill_between(n, low, high, color=colour, alpha=0.18, linewidth=0)
        bounds |= {*rows["needed_low"], *rows["needed_high"]}
        if size.n is not None:
            panel.axvline(size.n, color=colour, linewidth=0.9, linestyle=(0, (4, 2)))
            if size.low is not None and size.high is not None and size.high > size.low:
                panel.axvspan(size.low, size.high, color=colour, alpha=0.08, linewidth=0)
    for bound in sorted(bound for bound in bounds if math.isfinite(bound)):
        panel.axhline(factor * bound, color=style.INK, linewidth=0.8)
        panel.annotate(
            f"needed: {factor * bound:g}", (1.0, factor * bound), xycoords=("axes fraction", "data"), xytext=(-2, 2),
            textcoords="offset points", ha="right", va="bottom", fontsize=7.0,
        )  # fmt: skip
    panel.set_ylabel(_LABELS[measure])


def _named(size: ProcedureSize) -> str:
    if size.n is None:
        return f"{size.procedure}: no answer"
    return f"{size.procedure}: {count(size.n)} rows"


def _tick_rows(panel: Axes, sizes: Sequence[int]) -> None:
    kept: list[int] = []
    for n in sizes:
        if not kept or math.log(n / kept[-1]) > math.log(sizes[-1] / sizes[0] + 1.0) / 12.0:
            kept.append(n)
    panel.set_xticks(kept, [count(n) for n in kept])
    panel.xaxis.set_minor_locator(NullLocator())


def size_csv(answer: SizeAnswer) -> str:
    """Everything that was looked at, CURVE_COLUMNS; an infinite bound is an empty cell."""
    return (
        answer.curve.loc[:, list(CURVE_COLUMNS)].replace([math.inf, -math.inf], np.nan).to_csv(index=False, lineterminator="\n")
    )


def size_markdown(answer: SizeAnswer, extra: Sequence[str] = ()) -> str:
    """The answer as text, with a table of what was looked at.

    Parameters
    ----------
    answer : SizeAnswer
        What was found.
    extra : sequence of str
        Further paragraphs, such as corners of uncertain inputs.
    """
    lines = [
        f"# How many rows: {_plain(answer.title)}",
        "",
        f"Focus: {_plain(answer.focus)}. Asked: {_plain(listing(answer.bounds))}.",
        "",
        f"{'In each of these worlds' if len(answer.worlds) > 1 else 'World'}: {_plain('; '.join(answer.worlds))}.",
        "",
    ]
    lines += [f"- {_plain(sentence)}" for sentence in answer.sentences]
    lines += [f"- Note: {_plain(notice)}." for notice in answer.notices]
    for paragraph in extra:
        lines += ["", paragraph]
    measures = shown_measures(answer)
    if measures:
        lines += ["", "## What was looked at", ""]
        lines += [f"| procedure | rows | {' | '.join(measure.replace('_', ' ') for measure in measures)} | method |"]
        lines += ["| --- | ---: |" + " ---: |" * len(measures) + " --- |"]
        for size in answer.sizes:
            tables = {measure: worst_curve(answer, size.procedure, measure).set_index("n") for measure in measures}
            for n in sorted(set().union(*(table.index for table in tables.values()))):
                cells = [_cell(tables[measure], n, measure) for measure in measures]
                method = "exact" if all("±" not in cell for cell in cells) else "simulated"
                lines.append(f"| {_plain(size.procedure)} | {count(n)} | {' | '.join(cells)} | {method} |")
        lines += [
            "",
            "Each number is that of the worst world; ± is the half width of its 95 % Monte Carlo interval. A dash stands where "
            "something else failed first, and not every world was looked at.",
        ]
    return "\n".join(lines) + "\n"


def _cell(table: pd.DataFrame, n: int, measure: str) -> str:
    if n not in table.index:
        return "–"
    row = {str(name): value for name, value in table.loc[[n]].to_dict("records")[0].items()}
    value, reach = float(row["value"]), 1.96 * float(row["mc_se"])
    bounds = [bound for bound in (float(row["needed_low"]), float(row["needed_high"])) if math.isfinite(bound)]
    told = f"{percent(value, bounds)} %" if measure in _SHARES else number(value)
    if reach == 0.0:
        return told
    return told.removesuffix(" %") + (f" ± {100 * reach:.2f} %" if measure in _SHARES else f" ± {number(reach, 2)}")


def _plain(text: str) -> str:
    """Text that Markdown takes literally."""
    for sign in "\\|*_`<>[]#":
        text = text.replace(sign, "\\" + sign)
    return text.replace("\n", " ")


def write_size_report(answer: SizeAnswer, folder: Path, extra: Sequence[str] = ()) -> list[Path]:
    """Write size.md, size.csv and the figure.

    Returns
    -------
    list of Path
        What was written.

    Raises
    ------
    InputError
        If the folder cannot be written to.
    """
    contents = {"size.md": size_markdown(answer, extra).encode(), "size.csv": size_csv(answer).encode()}
    figure = size_figure(answer)
    if figure is not None:
        contents |= {"figures/size.svg": as_svg(figure), "figures/size.png": as_png(figure)}
    write_files(folder, contents)
    return [folder / name for name in contents]
