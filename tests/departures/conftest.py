import numpy as np
import pytest

from withstand.engine.noise import BlockNoise
from withstand.study.design import Design, Factor
from withstand.study.focus import Focus


@pytest.fixture
def design():
    """Forty rows: a skewed positive x, a factor, a series with interleaved groups."""
    rng = np.random.default_rng(11)
    n = 40
    x = rng.lognormal(1.0, 0.6, n)
    codes = rng.integers(0, 3, n)
    X = np.column_stack([np.ones(n), x, codes == 1, codes == 2]).astype(float)
    return Design(
        X=X,
        names=("Intercept", "x", "species[elm]", "species[oak]"),
        columns={"x": x, "flat": np.ones(n), "half": (np.arange(n) % 2).astype(float), "signed": rng.standard_normal(n)},
        factors={"species": Factor(codes.astype(np.int64), ("ash", "elm", "oak"))},
        fitted=3.0 + 0.5 * x,
        order=np.arange(n, dtype=float),
        groups=rng.permutation(np.arange(n) % 8).astype(np.int64),
    )


@pytest.fixture
def line():
    """Twenty rows, intercept and x = 1..20."""
    x = np.arange(1.0, 21.0)
    return Design(X=np.column_stack([np.ones(20), x]), names=("Intercept", "x"), columns={"x": x}, fitted=x, order=x)


@pytest.fixture
def focus(design):
    return Focus.coefficient("x", design.names)


@pytest.fixture
def noise():
    return BlockNoise(seed=5, block=0, width=4000)
