"""The kernel against a plain loop over statsmodels fits on the very same responses, and its promises about noise."""

import numpy as np
import pytest
import statsmodels.api as sm

from withstand.departures import Fan, Skew
from withstand.engine.block import BASELINE, Kernel
from withstand.engine.job import block_width
from withstand.engine.noise import BlockNoise
from withstand.engine.tally import Feature

from .conftest import make_study


def statsmodels_loop(design, errors, use_t_cov):
    covered, error, variance = [], [], []
    for column in errors.T:
        fit = sm.OLS(column, design.X).fit(cov_type=use_t_cov, use_t=True)
        low, high = fit.conf_int(0.05)[1]
        covered.append(low <= 0.0 <= high)
        error.append(fit.params[1])
        variance.append(fit.bse[1] ** 2)
    return np.array(covered), np.array(error), np.array(variance)


@pytest.mark.parametrize(("procedure", "cov_type"), [("ols", "nonrobust"), ("hc3", "HC3")])
def test_block_agrees_with_a_loop_of_statsmodels(study, make_job, procedure, cov_type):
    departure = Fan(along="x1", severity=(3.0,))
    job = make_job(study, worlds=[[(departure, 3.0)]], procedures=[procedure])
    tally = Kernel(job).run(range(4, 5), {0: (0,), BASELINE: (0,)})[(0, 0)][0]
    errors = job.worlds[0].on(study.design).draw(BlockNoise(job.seed, 4, job.width), np.empty((study.n, job.width)))[:, :300]
    # The block's first 300 replicates, one at a time.
    covered, error, variance = statsmodels_loop(study.design, errors, cov_type)
    kernel = Kernel(job)
    kernel.run(range(4, 5), {0: (0,)})
    pair = kernel._pair(0, 0)
    assert np.array_equal(pair[Feature.COVERED, :300].astype(bool), covered)
    np.testing.assert_allclose(pair[Feature.ERROR, :300], error, rtol=1e-8, atol=1e-12)
    np.testing.assert_allclose(pair[Feature.VARIANCE, :300], variance, rtol=1e-8)
    assert tally.products[Feature.ONE, Feature.COVERED] == pair[Feature.COVERED].sum()


def test_a_cell_does_not_depend_on_its_company(study, make_job):
    worlds = [[(Skew((1.0,)), 1.0)], [(Fan(along="x1", severity=(2.0,)), 2.0)]]
    alone = Kernel(make_job(study, worlds=worlds[:1], procedures=["ols"])).run(range(2), {0: (0,)})
    together = Kernel(make_job(study, worlds=worlds, procedures=["ols", "hc3"])).run(
        range(2), {BASELINE: (0, 1), 0: (0, 1), 1: (0, 1)}
    )
    assert np.array_equal(alone[(0, 0)][0].products, together[(0, 0)][0].products)


def test_noise_depends_on_seed_stream_and_block_alone():
    from withstand.departures.base import NoiseStream

    first = BlockNoise(3, 7, 50).normal(NoiseStream.ERRORS, 10).copy()
    assert np.array_equal(first, BlockNoise(3, 7, 50).normal(NoiseStream.ERRORS, 10))
    for other in (BlockNoise(4, 7, 50), BlockNoise(3, 8, 50)):
        assert not np.array_equal(first, other.normal(NoiseStream.ERRORS, 10))
    assert not np.array_equal(first, BlockNoise(3, 7, 50).normal(NoiseStream.NEW, 10))


@pytest.mark.parametrize("n", [2, 24, 100, 1000, 100_000])
def test_block_width_divides_a_task(n):
    assert 2000 % block_width(n) == 0


def test_shared_noise_is_not_written_to(study, make_job):
    worlds = [[(Fan(along="x1", severity=(5.0,)), 5.0)]]
    kernel = Kernel(make_job(study, worlds=worlds))
    kernel.run(range(1), {BASELINE: (0, 1), 0: (0, 1)})
    again = kernel.run(range(1), {BASELINE: (0, 1), 0: (0, 1)})
    fresh = Kernel(make_job(make_study(), worlds=worlds)).run(range(1), {BASELINE: (0, 1), 0: (0, 1)})
    for key, tallies in fresh.items():
        assert np.array_equal(again[key][0].products, tallies[0].products)
