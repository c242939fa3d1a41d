"""Size and power when the last group has another SD.

Source of `unequal_variance_sizes.csv` and `unequal_variance_power.csv`, column `published`: Delacre, Leys, Mora & Lakens
(2019), International Review of Social Psychology 32(1):13, supplementary data, 1,000,000 replicates a cell (tier: simulation).
Column `closed_form`: inversion of the characteristic function of the quadratic form, eigenvalue route, computed independently
of this project (tier: closed form).
"""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from withstand.departures import Contaminated, LevelSpread
from withstand.departures.base import LawDeparture, Layer
from withstand.departures.law import tabulate
from withstand.procedures.base import Procedure
from withstand.procedures.fit import WaldFit

from .simulation import agrees, coefficient, groups, joint, simulate

HERE = Path(__file__).parent
SIZES = pd.read_csv(HERE / "unequal_variance_sizes.csv")
POWER = pd.read_csv(HERE / "unequal_variance_power.csv")
REPLICATES = 60_000


def world(k, ratio):
    """The last group has `ratio` times the SD of the others; a ratio below 1 makes the others the noisy ones."""
    if ratio == 1.0:
        return ()
    if ratio > 1.0:
        return ((LevelSpread((ratio,), along="group", noisy=(f"g{k - 1}",)), ratio),)
    others = tuple(f"g{g}" for g in range(k - 1))
    return ((LevelSpread((1 / ratio,), along="group", noisy=others), 1 / ratio),)


def last_group_focus(design, k):
    return coefficient(design, "group1") if k == 2 else joint(design, range(1, k))


@pytest.mark.parametrize("row", list(SIZES.itertuples(index=False)), ids=lambda row: f"k{row.k}-{row.n_last}-{row.sd_last:g}")
def test_size_of_the_classical_test(row):
    design = groups([row.n_each] * (row.k - 1) + [row.n_last])
    found = simulate(design, last_group_focus(design, row.k), world(row.k, row.sd_last / 2.0), ["ols"], replicates=REPLICATES)
    size = found["ols"]["size"]
    assert agrees(size, row.closed_form)
    assert agrees(size, row.published, published_replicates=1_000_000)


@pytest.mark.parametrize("row", list(POWER.itertuples(index=False)), ids=lambda row: f"k{row.k}-{row.sd_last:g}")
def test_power_of_the_classical_test(row):
    """The last mean is 1, the others 0."""
    design = groups([row.n_each] * (row.k - 1) + [row.n_last])
    sds = np.repeat([2.0] * (row.k - 1) + [row.sd_last], [row.n_each] * (row.k - 1) + [row.n_last])
    effect = 1.0 / np.sqrt(np.mean(sds**2))  # in units of the root mean square of the SDs, which is the engine's unit
    if row.k == 2:
        focus = coefficient(design, "group1", effect)
    else:
        focus = joint(design, range(1, row.k), np.array([0.0] * (row.k - 2) + [effect]))
    power = simulate(design, focus, world(row.k, row.sd_last / 2.0), ["ols"], replicates=REPLICATES)["ols"]["power"]
    assert agrees(power, row.closed_form)
    assert agrees(power, row.published, published_replicates=1_000_000)


@dataclass(frozen=True)
class Welch(Procedure):
    """Welch's test for the slope of a dummy: HC2 with degrees of freedom estimated from the two sample variances.

    Only for this test: the Bell-McCaffrey degrees of freedom that the product offers are those of the design, not of the data.
    """

    name = "welch"
    family = title = formula = source = "Welch (1947)"

    def prepare(self, design, foci, level):
        second = design.X[:, 1] == 1.0

        def fit(sample):
            parts = [sample.errors[~second], sample.errors[second]]
            variances = [part.var(axis=0, ddof=1) / len(part) for part in parts]
            total = variances[0] + variances[1]
            df = total**2 / sum(v**2 / (len(part) - 1) for v, part in zip(variances, parts, strict=True))
            estimate = parts[1].mean(axis=0) - parts[0].mean(axis=0)
            return [WaldFit(estimate[None], None, total[None, None], stats.t.isf((1 - level) / 2, df))]

        return fit


class Laplace(LawDeparture):
    """Laplace errors; enough of a departure for the test, not registered."""

    kind = "laplace"
    layer = Layer.LAW
    title = unit = construction = source = "Laplace"
    neutral = 0.0
    default_ladder = (1.0,)

    def check(self, severity):
        """Accept anything."""

    def law(self, severity):
        return tabulate("Laplace", laplace_quantile, skewness=0.0, kurtosis=6.0)


def laplace_quantile(z):
    return np.where(z < 0, stats.norm.logcdf(z) + np.log(2), -stats.norm.logsf(z) - np.log(2))


@pytest.mark.parametrize(
    ("law", "sd", "pooled", "welch"),
    [
        ("laplace", 4, 0.107418, 0.044476),
        ("laplace", 8, 0.158674, 0.043098),
        ("contaminated", 2, 0.044735, 0.040311),
        ("contaminated", 8, 0.147372, 0.039842),
    ],
)
def test_other_laws(law, sd, pooled, welch):
    """Same source, k = 2, n = 20 and 10, SDs 2 and `sd`; contaminated = 0.9 N(0, (.6325 sd)^2) + 0.1 N(0, (2.53 sd)^2).

    Digits as given by the source, 1,000,000 replicates (tier: simulation).
    """
    shape = Laplace((1.0,)) if law == "laplace" else Contaminated((2.53 / 0.6325,), share=0.1)
    stack = (*world(2, sd / 2.0), (shape, shape.ladder[0]))
    design = groups([20, 10])
    found = simulate(design, coefficient(design, "group1"), stack, ["ols", Welch()], replicates=200_000)
    assert agrees(found["ols"]["size"], pooled, published_replicates=1_000_000)
    assert agrees(found[Welch()]["size"], welch, published_replicates=1_000_000)


@pytest.mark.parametrize(("ratio", "theta", "size"), [(2, 1 / 5, 0.1179), (5, 1 / 2, 0.1179), (2, 5, 0.0140)])
def test_large_samples(ratio, theta, size):
    """Scheffe (1959), section 10.2: P = 2 Phi(-1.96 sqrt((R theta + 1) / (theta + R))), R = n1/n2, theta = var1/var2 (closed).

    At n = 3000 the t and normal critical values differ by less than the Monte Carlo error.
    """
    closed = 2 * stats.norm.sf(1.96 * np.sqrt((ratio * theta + 1) / (theta + ratio)))
    assert closed == pytest.approx(size, abs=6e-5)
    design = groups([500 * ratio, 500])
    found = simulate(design, coefficient(design, "group1"), world(2, np.sqrt(1 / theta)), ["ols"], replicates=20_000)
    assert agrees(found["ols"]["size"], closed)
