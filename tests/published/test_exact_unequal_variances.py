"""Size and power of the classical test when the last group has another SD, without simulation.

Source of the two tables: Delacre, Leys, Mora & Lakens (2019), International Review of Social Psychology 32(1):13, supplementary
data. Column `published`: 1,000,000 replicates a cell (tier: simulation). Column `closed_form`: inversion of the characteristic
function of the quadratic form, computed independently of this project, six decimals (tier: closed form).
"""

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from withstand.departures import LevelSpread, World
from withstand.exact import coverage, moments, power
from withstand.procedures import make_procedure

from .simulation import ALLOWED, coefficient, groups, joint
from .test_unequal_variances import HERE, last_group_focus, world

SIZES = pd.read_csv(HERE / "unequal_variance_sizes.csv")
POWER = pd.read_csv(HERE / "unequal_variance_power.csv")
OLS = make_procedure("ols")
ROUNDING = 5.1e-7


def cell(row):
    sizes = [row.n_each] * (row.k - 1) + [row.n_last]
    design = groups(sizes)
    return design, World(world(row.k, row.sd_last / 2.0)).on(design), np.repeat([2.0] * (row.k - 1) + [row.sd_last], sizes)


@pytest.mark.parametrize("row", list(SIZES.itertuples(index=False)), ids=lambda row: f"k{row.k}-{row.n_last}-{row.sd_last:g}")
def test_size(row):
    design, disturbance, _ = cell(row)
    size = coverage(OLS, design, last_group_focus(design, row.k), disturbance, 0.95).size
    assert size == pytest.approx(row.closed_form, abs=ROUNDING)
    assert abs(size - row.published) <= ALLOWED * np.sqrt(size * (1 - size) / 1e6)


@pytest.mark.parametrize("row", list(POWER.itertuples(index=False)), ids=lambda row: f"k{row.k}-{row.sd_last:g}")
def test_power(row):
    """The last mean is 1, the others 0; effects count in the root mean square of the SDs."""
    design, disturbance, sds = cell(row)
    effect = 1.0 / np.sqrt(np.mean(sds**2))
    focus = coefficient(design, "group1") if row.k == 2 else joint(design, range(1, row.k))
    effects = np.array([[0.0] * (row.k - 2) + [effect]])
    found = power(OLS, design, focus, disturbance, 0.95, effects)[0]
    assert found == pytest.approx(row.closed_form, abs=ROUNDING)
    assert abs(found - row.published) <= ALLOWED * np.sqrt(found * (1 - found) / 1e6)


@pytest.mark.parametrize(("ratio", "theta", "size"), [(2, 1 / 5, 0.1179), (5, 1 / 2, 0.1179), (2, 5, 0.0140)])
def test_large_samples(ratio, theta, size):
    """Scheffe (1959), section 10.2: P = 2 Phi(-1.96 sqrt((R theta + 1) / (theta + R))), R = n1/n2, theta = var1/var2 (closed).

    The moments give the limit, and the exact size at 60,000 rows and more is there to four decimals.
    """
    design = groups([50_000 * ratio, 50_000])
    noisy, sd = ("group1", np.sqrt(1 / theta)) if theta < 1 else ("group0", np.sqrt(theta))
    level = noisy.replace("group", "g")
    disturbance = World(((LevelSpread((sd,), along="group", noisy=(level,)), sd),)).on(design)
    focus = coefficient(design, "group1")
    closed = 2 * stats.norm.sf(1.96 * np.sqrt((ratio * theta + 1) / (theta + ratio)))
    found = moments(OLS, design, focus, disturbance)
    assert 1 - found.large_sample_coverage(0.95) == pytest.approx(closed, abs=2e-5)
    assert found.se_ratio**2 == pytest.approx((ratio * theta + 1) / (theta + ratio), rel=1e-4)
    assert coverage(OLS, design, focus, disturbance, 0.95).size == pytest.approx(size, abs=6e-5)
