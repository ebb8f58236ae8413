"""The search's formulas against their published sources and scipy."""

import math

import numpy as np
import pytest
from scipy import stats

from hyperforecast.workshop.searching.tpe import WIDTHS, ParzenDensity, count_good, expected_improvement


@pytest.mark.parametrize("good, bad, gamma, expected", [
    (0.8, 0.2, 0.25, 1 / (0.25 + 0.75 * 0.25)),  # 2.285714
    (0.8, 0.0, 0.25, 4.0),  # supremum 1 / gamma
    (0.3, 0.3, 0.25, 1.0),  # nothing to tell them apart
])
def test_expected_improvement(good, bad, gamma, expected):
    # Bergstra et al. 2011, "Algorithms for Hyper-Parameter Optimization" (formula from memory).
    with np.errstate(divide="ignore"):
        assert expected_improvement(np.log(good), np.log(bad), gamma) == pytest.approx(expected)


def test_size_of_the_good_set():
    # Bergstra et al.'s constants of 2013 (from memory): ceil(sqrt(n) / 4), at most 25.
    assert [count_good(n) for n in (0, 1, 16, 17, 64, 65, 144, 145)] == [0, 1, 1, 2, 2, 3, 3, 4]
    assert count_good(10_000) == count_good(10**6) == 25
    assert all(count_good(n) == min(25, math.ceil(math.sqrt(n) / 4)) for n in range(1, 3000))


def test_density_is_the_published_mixture():
    # Bergstra et al. 2011 (from memory): prior and truncated Gaussians with equal weights; recomputed with scipy.
    centers = np.array([[0.03], [0.10], [0.11], [0.7]])
    widths = np.clip([0.07, 0.07, 0.59, 0.59], *WIDTHS)  # the larger gap to a neighbour or an edge, clipped
    points = np.linspace(0.0, 1.0, 21)[:, None]
    parts = [stats.truncnorm.pdf(points[:, 0], (0 - center) / width, (1 - center) / width, center, width)
             for center, width in zip(centers[:, 0], widths)]
    expected = (1.0 + np.sum(parts, axis=0)) / 5
    np.testing.assert_allclose(np.exp(ParzenDensity(centers).log_density(points)), expected, rtol=1e-10)


def test_dimensions_are_independent():
    centers = np.array([[0.2, 0.9], [0.5, 0.4]])
    points = np.random.default_rng(0).random((30, 2))
    apart = [ParzenDensity(centers[:, [d]]).log_density(points[:, [d]]) for d in range(2)]
    np.testing.assert_allclose(ParzenDensity(centers).log_density(points), apart[0] + apart[1])
