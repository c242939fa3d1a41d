import numpy as np
import pandas as pd
import pytest

from withstand.errors import TableError
from withstand.study.columns import Drawn, Levels, Shares
from withstand.study.pilot import Pilot


def frame(n=8, seed=2):
    rng = np.random.default_rng(seed)
    age = rng.normal(50, 12, n)
    return pd.DataFrame(
        {
            "dose": np.tile([0.0, 2.0], n)[:n],
            "age": age,
            "weight": 1.2 * age + rng.normal(0, 5, n),
            "site": (["s", "n"] * n)[:n],
        }
    )


def test_laws_are_read_off_the_pilot():
    given = frame()
    found = Pilot(given).columns(["site", "dose", "age", "weight"])
    assert found["site"] == Shares({"n": 0.5, "s": 0.5})
    assert found["dose"] == Levels((0.0, 2.0))
    age, weight = found["age"], found["weight"]
    assert isinstance(age, Drawn)
    assert isinstance(weight, Drawn)
    assert (age.law, age.mean, age.sd) == ("normal", given["age"].mean(), given["age"].std())
    assert weight.correlated == {"age": pytest.approx(given["age"].corr(given["weight"]))}
    for name, column in found.items():
        column.check(name)


def test_the_range_of_the_error_sd_covers_it():
    rng = np.random.default_rng(8)
    pilot, hits, trials, df = Pilot(frame()), 0, 4000, 6
    for _ in range(trials):
        sd = np.sqrt(rng.chisquare(df) / df)
        low, high = pilot.sd_range(sd, df)
        hits += low <= 1.0 <= high
    assert abs(hits / trials - 0.9) < 4.5 * np.sqrt(0.09 / trials)


def test_the_warning_says_what_it_does_to_the_number_of_rows():
    # Chi-square quantiles on 6 degrees of freedom, from tables: 1.635 and 12.592.
    told = Pilot(frame()).warning(2.0, 6)
    assert "pilot of 8 rows (6 degrees of freedom)" in told
    assert f"{2 * np.sqrt(6 / 12.592):.4g} to {2 * np.sqrt(6 / 1.635):.3g}" in told
    assert f"{6 / 12.592:.2f} to {6 / 1.635:.2f}" in told


@pytest.mark.parametrize(("n", "remedy"), [(4, "error_sd"), (21, "data")])
def test_too_few_or_too_many_rows_are_refused(n, remedy):
    with pytest.raises(TableError, match=f"this one has {n}") as caught:
        Pilot(frame(n))
    assert remedy in caught.value.remedy


def test_blank_cells_and_constant_columns_are_refused():
    given = frame()
    given.loc[2, "age"] = np.nan
    with pytest.raises(TableError, match="row 3 of the pilot has a blank cell"):
        Pilot(given)
    with pytest.raises(TableError, match="'age' is the same in every row"):
        Pilot(frame().assign(age=4.0)).columns(["age"])
