"""Poisson cases whose likelihood is known exactly, by quadrature."""

from __future__ import annotations

import jax.numpy as jnp
import numpy as np
import pytest

from portfire.dynamics import path_prior
from portfire.inference import (
    Posterior,
    filter_particles,
    importance,
    lane_keys,
    laplace,
    laplace_gradient,
    particle_posterior,
    start_path,
)

from ._cases import Case, autoregressive_case, check_sampled, log_factorials, simple_case
from ._data import CASE_A, CASE_B, MOTONEURONE, POLIO

N_SEEDS = 200


def case_a(n_lanes: int) -> Case:
    initial = 0.16 / 0.19 * np.ones((1, 1))
    matrix, level = np.array([[0.8], [-0.5], [1.2]]), np.array([0.5, 1.0, -0.3])
    return simple_case(CASE_A, matrix, level, 0.9 * np.ones((1, 1)), 0.16, initial, n_lanes)


def case_b(n_lanes: int) -> Case:
    turn = 0.95 * np.array([[np.cos(0.3), -np.sin(0.3)], [np.sin(0.3), np.cos(0.3)]])
    matrix = np.array([[1.0, 0.0], [0.0, 1.0], [0.7, -0.7], [-0.5, -0.8]])
    return simple_case(CASE_B, matrix, np.array([0.4, 0.2, 0.0, 0.6]), turn, 0.09, np.eye(2), n_lanes)


def run_laplace(case: Case, given=None) -> Posterior:
    return laplace(case.params, case.setup, case.chunk, start_path(case.setup, case.chunk), given)


# Exact [C: trapezoid and Gauss-Legendre grids, 1e-12; three grids for B], Laplace at the exact mode [C].
SMALL = [(case_a, -59.584723609, -59.572271961), (case_b, -33.163164517, -33.139498134)]


@pytest.mark.parametrize(("build", "exact", "at_mode"), SMALL, ids=["A", "B"])
def test_sampled_likelihoods_of_the_small_cases_are_right_and_unbiased(build, exact, at_mode) -> None:
    case = build(N_SEEDS)
    posterior = run_laplace(case)
    # Newton stops a little short of the mode; the first-order correction makes up for it.
    assert float(posterior.value[0]) == pytest.approx(at_mode, abs=1e-3)
    correction = laplace_gradient(case.params, case.setup, case.chunk, posterior)[2]
    assert float(posterior.value[0] + correction[0]) == pytest.approx(at_mode, abs=1e-6)
    if build is case_a:
        mode = np.asarray(posterior.mode.x)[[0, 5, 11], 0, 0]
        np.testing.assert_allclose(mode, [0.208599, 1.329783, -0.378737], atol=2e-4)  # [C]
    keys = lane_keys(0, case.chunk)
    sampled = importance(case.params, case.setup, case.chunk, posterior, keys, 64)
    assert float(jnp.median(sampled.se)) < 0.02
    check_sampled(sampled, exact)
    check_sampled(filter_particles(case.params, case.setup, case.chunk, posterior, keys, 64, 8), exact)


def test_filtered_moments_of_case_a() -> None:
    # Lanes that saw 1, 6 and 12 bins; the state in the last bin is then a prediction from the filtered one.
    n_seen = np.resize([1, 6, 12], N_SEEDS)
    case = case_a(N_SEEDS)
    mask = (np.arange(12)[:, None] < n_seen).astype(float)
    case = case.with_chunk(mask=mask, counts=np.asarray(case.chunk.counts) * mask)
    found = particle_posterior(
        case.params, case.setup, case.chunk, run_laplace(case), lane_keys(1, case.chunk), 64, 8
    )
    # Filtered mean and variance [C: grid of 1601 nodes].
    exact = {1: (0.007481105, 0.238523244), 6: (1.369299998, 0.074134963), 12: (-0.410183597, 0.175415233)}
    for seen, (mean, variance) in exact.items():
        decay = 0.9 ** (12 - seen)
        lanes = n_seen == seen
        means = np.asarray(found.mean)[0, lanes]
        assert means.mean() == pytest.approx(decay * mean, abs=4 * means.std() / np.sqrt(len(means)))
        spreads = np.asarray(found.covariance)[0, 0, lanes]
        predicted = decay**2 * variance + 0.16 * (1 - decay**2) / 0.19
        # The mean of 8 runs of 64 particles spreads by means.var(), which the covariance falls short of.
        assert spreads.mean() + means.var() == pytest.approx(
            predicted, abs=4 * spreads.std() / np.sqrt(len(means))
        )


def polio_case(n_lanes: int) -> tuple[Case, tuple]:
    coefficients = np.array([0.241572, -3.81430, 0.162091, -0.481715, 0.413095, -0.0109086])
    t = np.arange(1, len(POLIO) + 1)
    angle = 2 * np.pi * t / 12
    design = [np.ones(len(t)), t / 1000, np.cos(angle), np.sin(angle), np.cos(2 * angle), np.sin(2 * angle)]
    coefficient = 0.627366125345
    case = autoregressive_case(POLIO, coefficient, np.exp(-0.619824344724), n_lanes)
    # The regression enters as known inputs: the state is log rate, its mean the regression line.
    mean = coefficients @ np.array(design)
    inputs = np.concatenate([mean[:1], mean[1:] - coefficient * mean[:-1]])
    prior = path_prior(case.params, case.setup, len(t))
    return case, (prior, jnp.asarray(np.repeat(inputs[:, None, None], n_lanes, axis=2)))


def test_polio_laplace_is_what_admb_publishes(tight: None) -> None:
    case, given = polio_case(1)
    value = float(run_laplace(case, given).value[0])
    # Published objective 107.677 without the sum of log y! [P: ADMB's polio example; its parameters].
    assert -value - log_factorials(POLIO) == pytest.approx(107.677, abs=5e-4)
    # [C: own code and glmmTMB 1.1.5]
    assert value == pytest.approx(-248.139822, abs=1e-6)


def test_polio_needs_the_particle_filter() -> None:
    exact = -248.273118727  # [C: three quadratures, 1e-10]
    case, given = polio_case(64)
    posterior = run_laplace(case, given)
    keys = lane_keys(2, case.chunk)
    sampled = importance(case.params, case.setup, case.chunk, posterior, keys, 64)
    assert float(jnp.median(sampled.effective)) < 0.30
    found = filter_particles(case.params, case.setup, case.chunk, posterior, keys, 256, 8)
    assert float(jnp.min(found.effective)) > 0.30
    check_sampled(found, exact)
    # All lanes together: half a million draws.
    pooled = np.asarray(found.loglik)
    assert pooled.mean() == pytest.approx(exact, abs=3 * pooled.std() / np.sqrt(len(pooled)))
    assert pooled.std() < 0.06


# log rate, coefficient, SD; exact and Laplace [C: trapezoid and Gauss-Legendre agree].
MOTONEURONE_ROWS = [
    (np.log(38.6), 0.5, 0.6, -217.907549559, -217.993994396),
    (3.5, 0.8, 0.5, -221.779906962, -221.850541960),
]


@pytest.mark.parametrize(("level", "coefficient", "sd", "exact", "at_mode"), MOTONEURONE_ROWS)
def test_motoneurone_counts(level, coefficient, sd, exact, at_mode) -> None:
    # A sharp case: 163 spikes in one bin, 8 and 2 in the next two.
    case = autoregressive_case(MOTONEURONE, coefficient, sd, 64, level)
    posterior = run_laplace(case)
    assert bool(np.all(posterior.converged))
    correction = laplace_gradient(case.params, case.setup, case.chunk, posterior)[2]
    assert float(posterior.value[0] + correction[0]) == pytest.approx(at_mode, abs=1e-6)
    keys = lane_keys(3, case.chunk)
    check_sampled(importance(case.params, case.setup, case.chunk, posterior, keys, 64), exact)
