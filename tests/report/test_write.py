import os
import stat

import pytest

from withstand.errors import InputError
from withstand.lab.outcome import Outcome
from withstand.procedures.classical import Ols
from withstand.report import files
from withstand.report.markdown import code, text
from withstand.report.result import Result
from withstand.report.statement import statement
from withstand.report.store import restore
from withstand.report.summary import summary
from withstand.report.write import figure_file, write_report


def contents(folder):
    return {str(path.relative_to(folder)): path.read_bytes() for path in sorted(folder.rglob("*")) if path.is_file()}


def test_a_report_is_whole_and_the_same_from_what_was_stored(bare, tmp_path):
    place = Result.of(bare).report(tmp_path / "one")
    assert place == tmp_path / "one" / "report.html"
    first = contents(tmp_path / "one")
    tables = {"measures.csv", "verdicts.csv", "tipping.csv", "ranking.csv", "run.json"}
    texts = {"report.html", "summary.md", "statement.md"}
    figures = {f"figures/{name}-1-dry-hours.{end}" for name in ("coverage", "premium") for end in ("svg", "png")}
    assert set(first) == tables | texts | figures
    write_report(restore(tmp_path / "one"), tmp_path / "two")
    assert contents(tmp_path / "two") == first
    mask = os.umask(0)
    os.umask(mask)
    assert stat.S_IMODE(place.stat().st_mode) == 0o666 & ~mask


def test_a_full_disk_leaves_no_half_report(bare, tmp_path, monkeypatch):
    def full(handle):
        raise OSError(28, os.strerror(28))

    monkeypatch.setattr(files.os, "fsync", full)
    with pytest.raises(InputError, match="No space left on device"):
        Result.of(bare).report(tmp_path / "run")
    assert contents(tmp_path / "run") == {}


def test_a_result_is_an_outcome_and_no_tuple(rich):
    result = Result.of(rich)
    assert isinstance(result, Outcome)
    assert result.measures is rich.measures
    with pytest.raises(TypeError):
        iter(result)
    assert rich.headline[0] in result._repr_html_()
    assert result.figure("size", "species[oak] - species[ash]").axes


def test_the_summary_has_the_answer_first(rich, hostile):
    told = summary(rich)
    assert told.splitlines()[0] == "# Does drying time warp the boards?"
    assert told.splitlines()[2] == f"- {rich.headline[0]}"
    assert "huber" in told.split("## Failures")[1]
    assert "<script" not in summary(hostile).replace("\\<script", "")
    rows = [line for line in summary(hostile).splitlines() if line.startswith("|")]
    assert rows
    columns = {len([1 for i, sign in enumerate(line) if sign == "|" and line[i - 1] != "\\"]) for line in rows}
    assert columns <= set(range(4, 12))


def test_the_statement_cites_what_was_used(rich):
    told = statement(rich)
    assert f"- ols: {Ols.title}: {Ols.source}" in told
    for wanted in ("Moulton (1986)", "Harvey (1976)", "tolerance: Cochran (1954)", "Morris, T. P., White, I. R. and Crowther"):
        assert wanted in told
    assert "licensed or qualified" in told
    assert "Seed 7 with withstand 0.1.0" in told
    assert "`cup_mm ~ dry_hours + thickness_mm + C(species)`" in told


def test_a_procedure_without_a_source_says_so(crowded):
    assert "- method-0: the user's own procedure" in statement(crowded)


def test_markdown_is_made_harmless():
    assert text("a|b <i> *x* `c` $y$\nz") == "a\\|b \\<i\\> \\*x\\* \\`c\\` \\$y\\$ z"
    assert text("dry_hours _x_") == "dry_hours \\_x\\_"
    assert text("1. first") == "\\1. first" or text("1. first").startswith("\\")
    assert code("a`b") == "``a`b``"
    assert code("`a`") == "`` `a` ``"


def test_figure_files_have_plain_names():
    assert figure_file("size", 2, "../x y<木>") == "size-2-x-y"
    assert figure_file("size", 3, "木") == "size-3"
