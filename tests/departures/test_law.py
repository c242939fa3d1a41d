import numpy as np
import pytest

from withstand.departures.law import tabulate


@pytest.fixture
def cubic():
    return tabulate("cubic", lambda z: 4.0 + 2.0 * z + z**3, skewness=0.0, kurtosis=3.0)


def test_the_normal_is_left_as_it_is():
    """Any location and scale; also beyond the table."""
    law = tabulate("normal", lambda z: 7.0 + 3.0 * z, skewness=0.0, kurtosis=3.0)
    z = np.array([-30.0, -9.0, -1.3, 0.0, 0.001, 4.0, 9.0, 25.0])
    assert law(z) == pytest.approx(z, abs=1e-12)


def test_mean_and_variance_are_taken_out(cubic):
    """Of 2z + z^3: variance 4 + 2*2*3 + 15 = 31 by the normal moments 1, 3, 15."""
    z = np.linspace(-4, 4, 33)
    assert cubic(z) == pytest.approx((2 * z + z**3) / np.sqrt(31), abs=1e-5)


def test_any_shape_any_layout_and_in_place(cubic):
    z = np.random.default_rng(1).standard_normal((37, 501))
    expected = np.array([cubic(row) for row in z])
    assert np.array_equal(cubic(z), expected)
    assert np.array_equal(cubic(z.T), expected.T)
    out = np.empty((37, 1002))
    assert np.array_equal(cubic(z, out[:, ::2]), expected)
    assert np.array_equal(out[:, ::2], expected)
    assert np.array_equal(cubic(z.reshape(37, 3, 167)), expected.reshape(37, 3, 167))
    kept = z.copy()
    assert cubic(z, z) is z
    assert np.array_equal(z, expected)
    assert not np.array_equal(kept, z)
    assert cubic(np.empty((0, 5))).shape == (0, 5)
