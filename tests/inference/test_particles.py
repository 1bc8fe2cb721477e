"""The guided particle filter against importance sampling and against brute force."""

from __future__ import annotations

import jax.numpy as jnp
import numpy as np
import pytest
from scipy.special import gammaln
from scipy.stats import norm

from portfire.dynamics import ModelFile, Setup, parameter_shapes
from portfire.inference import filter_particles, importance, lane_keys, laplace, refine, start_path
from portfire.inference._particles import _forward_conditionals

from ._cases import Case, check_sampled, make_chunk, rich_case, solve_dense


def run_laplace(case: Case):
    return laplace(case.params, case.setup, case.chunk, start_path(case.setup, case.chunk))


def pushed_case(n_lanes: int) -> Case:
    """One latent dimension with a run-up and a large sustained push of the trial's own."""
    rng = np.random.default_rng(6)
    n_before, n_after, n_units = 3, 6, 3
    model = ModelFile(name="pushed", n_bumps=0, initial_noise_s=0.02)
    setup = Setup(model, 1, n_units, 0.02, n_before, 6, (), ("trial",), 0)
    params = {name: np.zeros(shape) for name, shape in parameter_shapes(setup).items()}
    params.update(
        readout=np.array([[0.9], [-0.7], [0.5]]),
        log_rate=np.array([4.0, 3.5, 4.2]),
        transition=np.array([[0.95]]),
        offset=np.array([-0.05]),
        initial_factor=np.array([[0.4]]),
        sustained_factor=np.array([[3.0]]),
        noise=np.array(0.05),
        log_run_up_noise=np.log(0.1),
    )
    n_time = n_before + n_after
    push = 2.5 * np.maximum(np.arange(n_time) - n_before + 1, 0) / 6
    rate = 0.02 * np.exp(params["readout"] * push + params["log_rate"][:, None])
    counts = rng.poisson(rate).astype(float)
    mask = np.ones((n_time, n_lanes))
    mask[n_before + 3] = 0
    chunk = make_chunk(np.repeat(counts[:, :, None], n_lanes, axis=2), mask, bin_s=0.02)
    return Case({k: jnp.asarray(v, float) for k, v in params.items()}, setup, chunk)


def integrate(case: Case, n_grid: int = 401, n_nodes: int = 121) -> float:
    """Exact log-likelihood of one lane: a grid over the state and one over the push."""
    p = {k: np.asarray(v) for k, v in case.params.items()}
    setup, before = case.setup, case.setup.n_before
    counts, mask = np.asarray(case.chunk.counts)[:, :, 0], np.asarray(case.chunk.mask)[:, 0]
    x = np.linspace(-9, 9, n_grid)
    width = x[1] - x[0]
    eta = p["readout"] * x + p["log_rate"][:, None]
    given = [
        np.exp(mask[t] * np.sum(counts[:, [t]] * (eta + np.log(setup.bin_s)) - setup.bin_s * np.exp(eta)
               - gammaln(counts[:, [t]] + 1), axis=0))
        for t in range(len(mask))
    ]  # fmt: skip
    run_up = np.ones(n_grid)
    walk = norm.pdf(x[:, None] - x, scale=np.exp(0.5 * p["log_run_up_noise"])) * width
    for t in range(before):
        run_up = walk @ (given[t] * run_up)
    a, q, factor = float(p["transition"][0, 0]), float(p["noise"]), float(p["sustained_factor"][0, 0])
    initial_sd = np.sqrt(q + float(p["initial_factor"][0, 0]) ** 2)
    nodes = np.linspace(-6, 6, n_nodes)
    total = 0.0
    for e in nodes:
        push = factor * e / setup.n_reference
        law = norm.pdf(x, push, initial_sd) * run_up * given[before]
        step = norm.pdf(x[:, None], a * x + float(p["offset"][0]) + push, np.sqrt(q)) * width
        for t in range(before + 1, len(mask)):
            law = (step @ law) * given[t]
        total += norm.pdf(e) * (nodes[1] - nodes[0]) * law.sum() * width
    return float(np.log(total))


def test_draws_forwards_in_time_have_the_exact_joint_law() -> None:
    # Weights hardly notice a slightly wrong law of the draws, so the law itself is held against a dense one.
    case = rich_case("gaussian", 3)
    law = [np.asarray(part) for part in _forward_conditionals(run_laplace(case))]
    for lane in range(case.chunk.mask.shape[1]):
        onward, pushed, lower, gain = (part[..., lane] for part in law)
        n_time, d, _ = lower.shape
        # State and mean of e as linear maps of the innovations.
        x, e = np.zeros((d, n_time * d)), np.zeros((d, n_time * d))
        path = []
        for t in range(n_time):
            innovation = np.zeros((d, n_time * d))
            innovation[:, t * d : (t + 1) * d] = lower[t]
            x = onward[t] @ x + pushed[t] @ e + innovation
            e = e + gain[t] @ innovation
            path.append(x)
        flat = np.concatenate(path)
        dense = solve_dense(case, lane)
        np.testing.assert_allclose(flat @ flat.T, dense.covariance.reshape(len(flat), -1), atol=1e-10)
        np.testing.assert_allclose((flat @ e.T).reshape(n_time, d, d), dense.cross, atol=1e-10)


def test_a_large_sustained_push_with_run_up_agrees_with_quadrature() -> None:
    case = pushed_case(200)
    exact = integrate(case)
    assert integrate(case, 301, 81) == pytest.approx(exact, abs=1e-8)
    posterior = run_laplace(case)
    assert abs(float(posterior.mode.e[0, 0])) > 0.5
    keys = lane_keys(5, case.chunk)
    for sampled in (
        importance(case.params, case.setup, case.chunk, posterior, keys, 64),
        filter_particles(case.params, case.setup, case.chunk, posterior, keys, 64, 8),
    ):
        check_sampled(sampled, exact)


def crowd_case() -> Case:
    """Sixty units, two latent dimensions, trials drawn from the model itself."""
    rng = np.random.default_rng(7)
    d, n_units, n_time, n_lanes = 2, 60, 20, 4
    setup = Setup(ModelFile(name="crowd", n_bumps=0), d, n_units, 0.02, 0, n_time, (), ("trial",), 0)
    turn = np.array([[0.97, -0.1], [0.1, 0.97]])
    params = {name: np.zeros(shape) for name, shape in parameter_shapes(setup).items()}
    params.update(
        readout=0.4 * rng.normal(size=(n_units, d)),
        log_rate=np.log(12.0) + 0.5 * rng.normal(size=n_units),
        transition=turn,
        initial_factor=0.5 * np.eye(d),
        sustained_factor=np.eye(d),
        noise=np.array(0.02),
    )
    x = 0.6 * rng.normal(size=(d, n_lanes))
    push = rng.normal(size=(d, n_lanes)) / n_time
    counts = np.zeros((n_units, n_time, n_lanes))
    for t in range(n_time):
        if t:
            x = turn @ x + push + np.sqrt(0.02) * rng.normal(size=(d, n_lanes))
        counts[:, t] = rng.poisson(0.02 * np.exp(params["readout"] @ x + params["log_rate"][:, None]))
    return Case(
        {k: jnp.asarray(v, float) for k, v in params.items()}, setup, make_chunk(counts, bin_s=setup.bin_s)
    )


def test_both_samplers_agree_on_sixty_units_and_poor_lanes_are_replaced() -> None:
    case = crowd_case()
    posterior = run_laplace(case)
    keys = lane_keys(8, case.chunk)
    sampled = importance(case.params, case.setup, case.chunk, posterior, keys, 100)
    assert float(jnp.min(sampled.effective)) > 0.8
    found = filter_particles(case.params, case.setup, case.chunk, posterior, keys, 64, 8)
    difference = np.asarray(found.loglik - sampled.loglik)
    assert np.all(np.abs(difference) < 3 * np.hypot(found.se, sampled.se))
    assert float(jnp.max(found.se)) < 0.05
    kept, replaced = refine(case.params, case.setup, case.chunk, posterior, keys, sampled)
    assert not replaced.any()
    np.testing.assert_array_equal(kept.loglik, sampled.loglik)
    doubtful = sampled._replace(effective=jnp.array([0.9, 0.29, np.nan, 0.31]))
    mixed, replaced = refine(case.params, case.setup, case.chunk, posterior, keys, doubtful, 64, 8)
    np.testing.assert_array_equal(replaced, [False, True, True, False])
    np.testing.assert_array_equal(np.asarray(mixed.loglik)[[0, 3]], np.asarray(sampled.loglik)[[0, 3]])
    np.testing.assert_allclose(np.asarray(mixed.loglik)[[1, 2]], np.asarray(found.loglik)[[1, 2]], atol=1e-4)


def test_one_key_gives_one_result() -> None:
    case = crowd_case()
    posterior = run_laplace(case)
    runs = [
        filter_particles(case.params, case.setup, case.chunk, posterior, lane_keys(seed, case.chunk), 64, 8)
        for seed in (1, 1, 2)
    ]
    np.testing.assert_array_equal(runs[0].loglik, runs[1].loglik)
    assert np.all(np.asarray(runs[0].loglik) != np.asarray(runs[2].loglik))


def test_too_few_runs_for_a_standard_error_are_refused() -> None:
    case = pushed_case(200)
    posterior = run_laplace(case)
    with pytest.raises(ValueError, match="at least 4 runs, received n_runs=3"):
        filter_particles(case.params, case.setup, case.chunk, posterior, lane_keys(0, case.chunk), 8, 3)
