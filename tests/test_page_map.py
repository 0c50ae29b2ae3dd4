"""The curve between the samples of the map, against scipy's."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.interpolate import PchipInterpolator

from benchtool.page_map import monotone_cubic


@pytest.mark.parametrize("points", [2, 3, 4, 15])
@pytest.mark.parametrize("seed", range(5))
def test_monotone_cubic_is_that_of_scipy(points, seed):
    # scipy.interpolate.PchipInterpolator: Fritsch and Butland, with its own rule at the ends.
    rng = np.random.default_rng(seed)
    x = np.cumsum(rng.uniform(0.2, 3.0, points))
    y = rng.normal(size=(3, points))
    y[1] = np.sort(y[1])
    y[2, points // 2 :] = y[2, points // 2]  # a level stretch
    at = np.unique([*np.linspace(x[0], x[-1], 97), *x])
    assert_allclose(monotone_cubic(x, y, at), PchipInterpolator(x, y, axis=1)(at), rtol=1e-10, atol=1e-12)


def test_it_shows_nothing_that_no_sample_shows():
    x = np.array([0.0, 1.0, 2.0, 3.0])
    found = monotone_cubic(x, np.array([0.0, 0.0, 5.0, 5.0]), np.linspace(0.0, 3.0, 301))
    assert found.min() >= 0.0
    assert found.max() <= 5.0
    assert np.all(np.diff(found) >= 0.0)
