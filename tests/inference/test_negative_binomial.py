"""The negative binomial readout in the engine: exact likelihoods, a regression, a session's dispersion."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm
from scipy.stats import nbinom, norm

from portfire.dynamics import ModelFile, Setup, parameter_shapes
from portfire.estimation import fit
from portfire.estimation._freedom import Freedom
from portfire.estimation._objective import Objective
from portfire.estimation._optimise import ascend
from portfire.estimation._scaling import make_scaling
from portfire.inference import Packed, filter_particles, importance, lane_keys, laplace, start_path

from ..estimation._world import ALL_BOTH, LATENT_DIM, blank_trials, draw_counts, make_truth
from ._cases import check_sampled, make_chunk, simple_case
from ._data import CASE_A, SPRAYS

N_SEEDS = 100
LEVEL, LOADING, SIZE = np.array([0.5, 1.0, -0.3]), np.array([0.8, -0.5, 1.2]), np.array([1.5, 4.0, 0.8])


def exact_loglik(keep: float = 0.9, variance: float = 0.16) -> float:
    """One latent dimension by the trapezoid rule, bin after bin."""
    sd = np.sqrt(variance / (1 - keep**2))
    x = np.linspace(-8 * sd, 8 * sd, 601)
    step = x[1] - x[0]
    move = norm.pdf(x[:, None], keep * x[None], np.sqrt(variance)) * step
    law, total = norm.pdf(x, 0.0, sd), 0.0
    mean = np.exp(np.outer(x, LOADING) + LEVEL)
    for t, counts in enumerate(CASE_A):
        law = (move @ law if t else law) * nbinom.pmf(counts, SIZE, SIZE / (SIZE + mean)).prod(axis=1)
        share = law.sum() * step
        total, law = total + np.log(share), law / share
    return float(total)


def test_sampled_likelihoods_agree_with_quadrature() -> None:
    case = simple_case(
        CASE_A,
        LOADING[:, None],
        LEVEL,
        0.9 * np.ones((1, 1)),
        0.16,
        0.16 / 0.19 * np.ones((1, 1)),
        N_SEEDS,
        readout="negative_binomial",
        log_dispersion=np.log(SIZE),
    )
    exact = exact_loglik()
    posterior = laplace(case.params, case.setup, case.chunk, start_path(case.setup, case.chunk))
    assert bool(np.all(posterior.converged))
    assert abs(float(posterior.value[0]) - exact) < 0.1
    keys = lane_keys(0, case.chunk)
    check_sampled(importance(case.params, case.setup, case.chunk, posterior, keys, 64), exact)
    check_sampled(filter_particles(case.params, case.setup, case.chunk, posterior, keys, 128, 8), exact)


def test_a_negative_binomial_regression_is_the_limit_without_a_latent_state() -> None:
    spray = np.repeat(np.arange(6), 12)
    regressors = np.array([spray == k for k in range(1, 6)], dtype=float)
    design = sm.add_constant(regressors.T)
    # The table is the one that the published Poisson deviance belongs to [C: statsmodels and R glm].
    assert sm.Poisson(SPRAYS.ravel(), design).fit(disp=0).llf == pytest.approx(-182.294604, abs=1e-6)
    expected = sm.NegativeBinomial(SPRAYS.ravel(), design, loglike_method="nb2").fit(
        disp=0, maxiter=500, method="bfgs", gtol=1e-9
    )
    # Drift coefficients carry a standard normal prior: in units of 1e5 it is too wide to matter.
    scale = 1e5
    counts = np.stack([SPRAYS.ravel(), np.zeros(72)])[None]
    chunk = make_chunk(counts, np.array([[1.0], [0.0]]) * np.ones((2, 72)), drift=scale * regressors)
    model = ModelFile(name="regression", readout="negative_binomial", n_bumps=0, initial_noise_s=1.0)
    setup = Setup(model, 1, 1, 1.0, 0, 2, (), ("trial",), 5)
    start = {name: np.zeros(shape) for name, shape in parameter_shapes(setup).items()}
    start.update(
        noise=np.array(1.0), transition=np.array([[0.5]]), log_rate=np.log([SPRAYS.mean()]),
        log_dispersion=np.log([3.0]),
    )  # fmt: skip
    objective = Objective(Packed((chunk,), (np.arange(72),), 72, 2), setup)
    none = np.array([], dtype=int)
    objective(start)
    freedom = Freedom(none, none, False, False, True)
    scaling = make_scaling(start, setup, freedom, objective.packed, objective.last)
    found = ascend(objective, scaling, 1e-12, 300)
    objective.close()
    assert not np.any(found.params["readout"])
    assert found.value == pytest.approx(expected.llf, abs=1e-5)
    assert np.exp(-found.params["log_dispersion"][0]) == pytest.approx(expected.params[-1], abs=1e-4)
    assert found.params["log_rate"][0] == pytest.approx(expected.params[0], abs=1e-4)
    np.testing.assert_allclose(scale * found.params["drift"][0], expected.params[1:-1], atol=2e-4)


def test_dispersion_of_a_session_is_recovered_and_poisson_counts_have_none() -> None:
    model = ModelFile(name="spread", readout="negative_binomial", drift="off", n_bumps=2, cue_duration_s=0.15)
    plain = replace(model, readout="poisson")
    blank = blank_trials(96, seed=0)
    truth = make_truth(blank, "interval=sustained,context=initial,trial=initial", 0, plain)
    truth = replace(truth, params={**truth.params, "readout": 0.5 * truth.params["readout"]})
    smooth, _ = draw_counts(truth, blank, 0)
    size = np.where(np.arange(len(blank.unit)) % 2 == 0, 1.0, 4.0)
    setup = replace(truth.setup, model=model)
    overdispersed = replace(truth, setup=setup, params={**truth.params, "log_dispersion": np.log(size)})
    trials, _ = draw_counts(overdispersed, blank, 0)
    found = {}
    for name, counts in (("spread", trials), ("smooth", smooth)):
        found[name] = fit(counts, model, ALL_BOTH, LATENT_DIM, seed=0)
        assert found[name].status == "converged"
    ratio = found["spread"].params["log_dispersion"] - np.log(size)
    # Standard errors: the information on log φ is about half the sum of (μ/(φ + μ))² over all entries.
    mean = trials.counts[trials.mask].mean(axis=0)
    se = 1 / np.sqrt(0.5 * trials.mask.sum() * (mean / (size + mean)) ** 2)
    assert np.abs(ratio / se).max() < 4.5
    sure = se < 0.3
    assert sure.sum() >= 10
    assert np.abs(ratio[sure]).max() < 0.5
    # What exceeds Poisson, as a share of the mean, has about this standard error in counts without any.
    excess = smooth.counts[smooth.mask].mean(axis=0) / np.exp(found["smooth"].params["log_dispersion"])
    assert excess.max() < 4.5 * np.sqrt(2 / smooth.mask.sum())
    wrong = fit(trials, plain, ALL_BOTH, LATENT_DIM, seed=0)
    gain = found["spread"].score(trials)["loglik"] - wrong.score(trials)["loglik"]
    assert gain.mean() > 3 * gain.std() / np.sqrt(len(gain))
