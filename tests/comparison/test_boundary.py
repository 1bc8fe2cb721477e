"""Likelihood ratios at the boundary: exact weights, simulated weights, and rates of rejection."""

import numpy as np
import pytest
from scipy import stats

from portfire.comparison import (
    cone_weights,
    count_parameters,
    expected_cost,
    likelihood_ratio_p,
    mixture_weights,
)
from portfire.errors import PortfireError


def draw_projection(dim, n, rng):
    """Squared length of the positive part of symmetric Gaussian matrices in the Frobenius metric."""
    g = rng.normal(size=(n, dim, dim))
    eigenvalues = np.linalg.eigvalsh((g + g.transpose(0, 2, 1)) / 2.0)
    return (np.maximum(eigenvalues, 0.0) ** 2).sum(1)


def test_one_variance_is_half_and_half():
    # Self & Liang (1987), case 5. [M]
    assert cone_weights(1) == pytest.approx([0.5, 0.5], abs=1e-14)
    assert likelihood_ratio_p(2.705543454, 0, [1]) == pytest.approx(0.05, abs=1e-9)


def test_two_by_two_is_the_circular_cone_of_half_angle_45_degrees():
    # The solid angle of that cone is the share (1 - cos 45°) / 2; the rest by Gauss-Bonnet. [C]
    corner = (1 - np.sqrt(0.5)) / 2
    assert cone_weights(2) == pytest.approx([corner, 0.5 - corner, 0.5 - corner, corner], abs=1e-13)


def test_three_by_three_is_definite_with_the_published_probability():
    # P(GOE of size 3 positive definite) = (π - 2√2) / 4π, Dean & Majumdar (2006). [M]
    assert cone_weights(3)[-1] == pytest.approx((np.pi - 2 * np.sqrt(2)) / (4 * np.pi), abs=1e-13)


@pytest.mark.parametrize("dim", range(1, 9))
def test_weights_are_those_of_a_self_dual_cone(dim):
    weights = cone_weights(dim)
    assert len(weights) == dim * (dim + 1) // 2 + 1
    assert weights.min() > 0
    assert weights.sum() == pytest.approx(1.0, abs=1e-12)
    assert weights[::2].sum() == pytest.approx(0.5, abs=1e-12)  # Gauss-Bonnet
    assert weights == pytest.approx(weights[::-1], abs=1e-12)
    # The expected squared length is half the dimension of the space.
    assert weights @ np.arange(len(weights)) == pytest.approx(dim * (dim + 1) / 4, abs=1e-10)


@pytest.mark.parametrize("dim", [1, 2, 3, 5, 8])
def test_survival_agrees_with_simulated_projections(dim):
    draws = draw_projection(dim, 20_000, np.random.default_rng(dim))
    for level in (0.5, 0.2, 0.05, 0.01):
        stat = np.quantile(draws, 1 - level)
        if stat > 0:
            error = np.sqrt(level * (1 - level) / len(draws))
            assert likelihood_ratio_p(stat, 0, [dim]) == pytest.approx(level, abs=4 * error)


def test_fixed_effects_alone_are_chi_square():
    assert likelihood_ratio_p(7.0, 3) == pytest.approx(stats.chi2.sf(7.0, 3))


def test_fixed_effects_and_a_covariance_add_up():
    rng = np.random.default_rng(9)
    draws = draw_projection(2, 40_000, rng) + rng.chisquare(3, 40_000)
    for level in (0.5, 0.05, 0.01):
        error = np.sqrt(level * (1 - level) / len(draws))
        p = likelihood_ratio_p(float(np.quantile(draws, 1 - level)), 3, [2])
        assert p == pytest.approx(level, abs=4 * error)
    assert mixture_weights(3, [2])[:3].tolist() == [0, 0, 0]
    assert mixture_weights(0, [1, 1]) == pytest.approx([0.25, 0.5, 0.25])


def test_rejections_of_a_random_effects_model_keep_the_level():
    """Vectors N(0, I + S) at S = 0: the exact likelihood ratio has a closed form in the eigenvalues."""
    rng = np.random.default_rng(11)
    n, reps, dim = 400, 2000, 3
    scatter = stats.wishart.rvs(n, np.eye(dim), size=reps, random_state=rng) / n
    eigenvalues = np.maximum(np.linalg.eigvalsh(scatter), 1.0)
    statistics = n * (eigenvalues - 1.0 - np.log(eigenvalues)).sum(1)
    rejected = np.mean([likelihood_ratio_p(stat, 0, [dim]) <= 0.05 for stat in statistics])
    assert rejected == pytest.approx(0.05, abs=4 * np.sqrt(0.05 * 0.95 / reps))
    naive = np.mean(stats.chi2.sf(statistics, dim * (dim + 1) // 2) <= 0.05)
    assert naive < 0.02


def test_tail_stays_accurate_far_out():
    p = likelihood_ratio_p(300.0, 0, [2])
    leading = cone_weights(2)[3] * stats.chi2.sf(300.0, 3)
    assert leading < p < 1.05 * leading + cone_weights(2)[2] * stats.chi2.sf(300.0, 2)
    assert p > 0


def test_edges():
    assert likelihood_ratio_p(0.0, 0, [3]) == 1.0
    assert likelihood_ratio_p(-1e-6, 2) == 1.0
    assert likelihood_ratio_p(1e-12, 0, [1]) == pytest.approx(0.5, abs=1e-5)
    assert count_parameters(2, [3]) == 8
    with pytest.raises(PortfireError, match="got nan"):
        likelihood_ratio_p(float("nan"), 1)
    with pytest.raises(PortfireError, match="got 0 and no covariance"):
        likelihood_ratio_p(1.0, 0)
    for dim in (0, 9):
        with pytest.raises(PortfireError, match=f"got {dim}"):
            cone_weights(dim)


@pytest.mark.parametrize("dim", range(1, 9))
def test_a_covariance_at_its_boundary_costs_half_of_its_entries(dim):
    """The cone and its polar are mirror images, so that the mean of the mixture is half of its top."""
    assert expected_cost(0, (dim,)) == pytest.approx(dim * (dim + 1) / 4)
    assert expected_cost(3, (dim, dim)) == pytest.approx(3 + dim * (dim + 1) / 2)
    assert expected_cost(3) == 3
