"""Limits in which the model becomes a simpler one, and bins that must not matter."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from portfire.dynamics import ModelFile, Setup, make_setup, parameter_shapes
from portfire.estimation._freedom import Freedom
from portfire.estimation._objective import Objective
from portfire.estimation._optimise import ascend
from portfire.estimation._scaling import make_scaling
from portfire.inference import Packed, laplace, laplace_gradient, pack, posterior_moments, start_path
from portfire.session import Session, Trials

from ._cases import Case, log_factorials, make_chunk, rich_case
from ._data import DOBSON

pytestmark = pytest.mark.usefixtures("tight")


def run_laplace(case: Case):
    return laplace(case.params, case.setup, case.chunk, start_path(case.setup, case.chunk))


def test_a_poisson_regression_is_the_limit_without_a_latent_state() -> None:
    # Counts by outcome and treatment. Log-likelihood and coefficients [C: statsmodels and R glm; the
    # deviance 5.1291 is printed in R's documentation of glm].
    outcome, treatment = np.tile([0, 1, 2], 3), np.repeat([0, 1, 2], 3)
    regressors = np.array([outcome == 1, outcome == 2, treatment == 1, treatment == 2], dtype=float)
    # Drift coefficients carry a standard normal prior: in units of 1e5 it is too wide to matter.
    scale = 1e5
    counts = np.stack([DOBSON, np.zeros(9)])[None]
    chunk = make_chunk(counts, np.array([[1.0], [0.0]]) * np.ones((2, 9)), drift=scale * regressors)
    model = ModelFile(name="regression", n_bumps=0, initial_noise_s=1.0)
    setup = Setup(model, 1, 1, 1.0, 0, 2, (), ("trial",), 4)
    start = {name: np.zeros(shape) for name, shape in parameter_shapes(setup).items()}
    start.update(noise=np.array(1.0), transition=np.array([[0.5]]), log_rate=np.log([DOBSON.mean()]))
    packed = Packed((chunk,), (np.arange(9),), 9, 2)
    objective = Objective(packed, setup)
    none = np.array([], dtype=int)
    objective(start)
    scaling = make_scaling(start, setup, Freedom(none, none, False, False, True), packed, objective.last)
    found = ascend(objective, scaling, 1e-12, 200)
    objective.close()
    assert not np.any(found.params["readout"])
    saturated = float(np.sum(DOBSON * np.log(DOBSON) - DOBSON)) - log_factorials(DOBSON)
    assert found.value == pytest.approx(-23.380659, abs=1e-6)
    assert 2 * (saturated - found.value) == pytest.approx(5.129141, abs=2e-6)
    assert found.params["log_rate"][0] == pytest.approx(3.044522, abs=1e-5)
    coefficients = scale * found.params["drift"][0]
    np.testing.assert_allclose(coefficients, [-0.454255, -0.292987, 0, 0], atol=1e-5)


def test_masked_bins_at_the_end_change_nothing() -> None:
    case = rich_case("poisson", 3, seed=1)
    longer = {
        "counts": np.pad(np.asarray(case.chunk.counts), ((0, 0), (0, 5), (0, 0))),
        "mask": np.pad(np.asarray(case.chunk.mask), ((0, 5), (0, 0))),
    }
    short, long = run_laplace(case), run_laplace(case.with_chunk(**longer))
    np.testing.assert_allclose(short.value, long.value, atol=1e-9, rtol=0)
    np.testing.assert_allclose(short.mode.x, long.mode.x[:-5], atol=1e-8)
    np.testing.assert_allclose(short.mode.e, long.mode.e, atol=1e-8)


def test_a_vanishing_sustained_push_leaves_a_chain_without_border() -> None:
    case = rich_case("poisson", 0, seed=2)
    d = case.setup.latent_dim
    none = case.with_params(sustained_factor=np.zeros((d, d)))
    posterior = run_laplace(none)
    np.testing.assert_array_equal(posterior.mode.e, 0)
    moments = posterior_moments(posterior)
    np.testing.assert_allclose(moments.border, np.eye(d)[:, :, None] * np.ones(3), atol=1e-12)
    np.testing.assert_allclose(moments.cross, 0, atol=1e-12)
    gradient = laplace_gradient(none.params, none.setup, none.chunk, posterior)[0]
    assert all(np.all(np.isfinite(value)) for value in gradient.values())
    np.testing.assert_allclose(gradient["sustained_factor"], 0, atol=1e-12)
    # The value changes with the push's covariance, the square of its factor: smoothly, through zero.
    small = run_laplace(case.with_params(sustained_factor=1e-6 * np.eye(d)))
    np.testing.assert_allclose(small.value, posterior.value, atol=1e-9, rtol=0)
    large = run_laplace(case.with_params(sustained_factor=np.eye(d)))
    assert np.abs(np.asarray(large.value - posterior.value)).max() > 1e-3
    # Against Newton on the dense Hessian of the path alone, which knows no border.
    value = solve_without_border(none, lane=0)
    assert float(posterior.value[0]) == pytest.approx(value, abs=1e-8)


def solve_without_border(case: Case, lane: int) -> float:
    """Laplace value of one lane without a run-up, from dense matrices over the path."""
    p = {k: np.asarray(v) for k, v in case.params.items()}
    setup, d = case.setup, case.setup.latent_dim
    mask, counts = np.asarray(case.chunk.mask)[:, lane], np.asarray(case.chunk.counts)[:, :, lane].T
    n_time, rows = len(mask), np.asarray(case.chunk.rows)[:, lane]
    a, q = p["transition"], float(p["noise"])
    steps = [np.linalg.matrix_power(a, k) for k in range(setup.initial_bins)]
    initial = sum(q * s @ s.T for s in steps) + p["initial_factor"] @ p["initial_factor"].T
    push = np.einsum("dc,ct,c->td", p["push"], setup.kernels(n_time), rows)
    known = push + (p["cue"] @ setup.cue_basis(n_time)).T + p["offset"]
    known[0] = push[0]
    # The path is Λ⁻¹ (inputs + noise), with Λ one minus the shift by A.
    shift = np.eye(n_time * d) - np.kron(np.eye(n_time, k=-1), a)
    noise = np.kron(np.eye(n_time), q * np.eye(d))
    noise[:d, :d] = initial
    mean = np.linalg.solve(shift, known.ravel())
    precision = shift.T @ np.linalg.solve(noise, shift)
    offset = p["log_rate"] + p["drift"] @ np.asarray(case.chunk.drift)[:, lane]
    x = mean.copy()
    for _ in range(50):
        rate = setup.bin_s * np.exp(x.reshape(n_time, d) @ p["readout"].T + offset) * mask[:, None]
        slope = ((counts * mask[:, None] - rate) @ p["readout"]).ravel() - precision @ (x - mean)
        curvature = precision.copy()
        for t in range(n_time):
            here = slice(t * d, (t + 1) * d)
            curvature[here, here] += (p["readout"].T * rate[t]) @ p["readout"]
        x = x + np.linalg.solve(curvature, slope)
    eta = x.reshape(n_time, d) @ p["readout"].T + offset
    seen = mask > 0
    data = float(np.sum(counts[seen] * (eta[seen] + np.log(setup.bin_s)) - rate[seen]))
    data -= log_factorials(counts[seen])
    prior = -0.5 * (x - mean) @ precision @ (x - mean) - 0.5 * np.linalg.slogdet(noise)[1]
    return data + prior - 0.5 * float(np.linalg.slogdet(curvature)[1])


def make_session(late_seed: int, cutoff_s: float) -> Trials:
    """Twelve trials of three units; spikes later than the cutoff after the set cue hang on the seed."""
    rng = np.random.default_rng(0)
    set_s = 2.0 * np.arange(12) + 1
    table = pd.DataFrame({"set_s": set_s, "response_s": set_s + rng.uniform(0.4, 0.6, 12)})
    late = np.random.default_rng(late_seed)
    spikes = {}
    for unit in ("a", "b", "c"):
        before = [rng.uniform(s - 0.2, s + cutoff_s, 8) for s in set_s]
        after = [late.uniform(s + cutoff_s + 1e-6, s + 0.7, 8) for s in set_s]
        spikes[unit] = np.sort(np.concatenate(before + after))
    return Session.from_arrays(spikes, table).bin(bin_s=0.05, before_set_s=0.1)


def test_a_causal_posterior_uses_no_later_spike() -> None:
    cutoff_s = 0.2
    results = []
    for seed in (1, 2):
        trials = make_session(seed, cutoff_s)
        setup = make_setup(trials, ModelFile(name="causal", n_bumps=1, drift="off"), 1, False, n_reference=9)
        rng = np.random.default_rng(4)
        params = {name: 0.3 * rng.normal(size=shape) for name, shape in parameter_shapes(setup).items()}
        params.update(noise=np.array(0.05), log_rate=np.full(3, 3.0), readout=np.ones((3, 1)))
        until = np.zeros_like(trials.mask)
        until[:, : trials.n_before + round(cutoff_s / trials.bin_s)] = True
        both = []
        for mask in (until, None):
            (chunk,) = pack(trials, setup, mask).chunks
            both.append(laplace(params, setup, chunk, start_path(setup, chunk)))
        results.append(both)
    (early, whole), (early_again, whole_again) = results
    np.testing.assert_array_equal(early.value, early_again.value)
    np.testing.assert_array_equal(early.mode.x, early_again.mode.x)
    np.testing.assert_array_equal(early.mode.e, early_again.mode.e)
    assert np.abs(np.asarray(whole.mode.x - whole_again.mode.x)).max() > 1e-3
