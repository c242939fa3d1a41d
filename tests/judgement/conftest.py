import numpy as np
import pytest

from withstand.engine.tally import FEATURES, Feature, Tally
from withstand.study.design import Design, Factor
from withstand.study.focus import Focus
from withstand.study.rows import FixedRows
from withstand.study.study import Study


@pytest.fixture(scope="session")
def design():
    """Thirty rows of y ~ x + site, in time order, in groups of five."""
    rng = np.random.default_rng(17)
    x = np.exp(0.5 * rng.standard_normal(30))
    site = (np.arange(30) % 3 == 0).astype(np.int64)
    X = np.column_stack([np.ones(30), x, site])
    return Design(
        X,
        ("Intercept", "x", "site[north]"),
        columns={"x": x},
        factors={"site": Factor(site, ("south", "north"))},
        fitted=X @ np.array([10.0, 2.0, 1.5]),
        order=np.arange(30.0),
        groups=(np.arange(30) // 5).astype(np.int64),
    )


@pytest.fixture(scope="session")
def study(design):
    focus = (Focus.coefficient("x", design.names),)
    return Study("thirty", "y ~ x + site", design, focus, np.array([10.0, 2.0, 1.5]), 2.0, FixedRows(design), digest="thirty")


@pytest.fixture
def counted():
    """Makes a tally of independent replicates with known numbers of hits, and errors of known mean and SD."""

    def make(replicates, missed_below=0, missed_above=0, rejected=None, bias=0.0, interval=True, fresh_blocks=0):
        pair = np.zeros((2 * FEATURES, replicates))
        pair[Feature.ONE] = pair[Feature.OK] = 1.0
        scores = np.linspace(-1.0, 1.0, replicates)
        pair[Feature.ERROR] = bias + scores / scores.std()
        pair[Feature.SQUARE] = pair[Feature.ERROR] ** 2
        if interval:
            pair[Feature.WIDTH] = 4.0
            pair[Feature.BELOW, :missed_below] = 1.0
            pair[Feature.ABOVE, replicates - missed_above :] = 1.0
            pair[Feature.COVERED] = 1.0 - pair[Feature.BELOW] - pair[Feature.ABOVE]
        if rejected is None:
            pair[Feature.REJECTED] = pair[Feature.BELOW] + pair[Feature.ABOVE]
        else:
            pair[Feature.REJECTED, :rejected] = 1.0
        pair[FEATURES:] = pair[:FEATURES]
        if not fresh_blocks:
            return Tally.of_block(pair, False)
        order = np.random.default_rng(1).permutation(replicates)
        blocks = np.array_split(order, fresh_blocks)
        return sum((Tally.of_block(pair[:, block], True) for block in blocks[1:]), Tally.of_block(pair[:, blocks[0]], True))

    return make
