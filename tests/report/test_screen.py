import dataclasses
from pathlib import Path

import pytest

from withstand.report.screen import WIDTH, screen


@pytest.fixture(params=["rich", "planned", "hostile", "crowded", "bare"])
def outcome(request):
    return request.getfixturevalue(request.param)


def test_it_fits_the_terminal_and_moves_no_cursor(outcome):
    told = screen(outcome, Path("outputs/run/report.html"))
    assert max(len(line) for line in told.splitlines()) <= WIDTH
    assert not any(ord(sign) < 32 for sign in told.replace("\n", ""))
    assert told.endswith("Full page: outputs/run/report.html\n")
    assert told == screen(outcome, Path("outputs/run/report.html"))


def test_it_answers_before_it_shows(rich):
    told = screen(rich)
    wanted = ["36 rows used of 39 read", "94 to 96 %, following Cochran (1954)", "Worry first about clusters"]
    wanted += [
        "clusters by charge",
        "gives from icc 0.05",
        "It holds at the worst your data allow (where they do not say, the most tried): skew, 94.8 ± 0.4 %",
        "species[oak]",
        "at most 1 %",
        "Gave no answer in some replicates (counted as not covering): huber",
    ]
    told = " ".join(told.split())
    places = [told.index(text) for text in wanted]
    assert places == sorted(places)
    assert "-> cr2 holds, 21 % wider when nothing is wrong; more rows: no cure (covers 62.0 % in the limit)" in told


def test_control_signs_of_a_name_are_blanked(rich):
    told = screen(dataclasses.replace(rich, headline=("red \x1b[31m alert\x07",)))
    assert "\x1b" not in told
    assert "\x07" not in told
    assert "* red  [31m alert" in told
