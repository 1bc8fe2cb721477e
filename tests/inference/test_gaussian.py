"""With a Gaussian readout the engine is exact: against dense Gaussians, statsmodels and scikit-learn."""

from __future__ import annotations

import jax.numpy as jnp
import numpy as np
import pytest
from sklearn.decomposition import FactorAnalysis
from statsmodels.tsa.statespace.kalman_smoother import KalmanSmoother

from portfire.inference import (
    draw_deviations,
    filter_particles,
    lane_keys,
    laplace,
    posterior_moments,
    start_path,
)

from ._cases import Case, make_chunk, rich_case, simple_case, solve_dense
from ._data import ABILITY, ABILITY_N, NILE

pytestmark = pytest.mark.usefixtures("tight")


def run_laplace(case: Case):
    return laplace(case.params, case.setup, case.chunk, start_path(case.setup, case.chunk))


@pytest.mark.parametrize("n_before", [0, 3])
def test_path_push_and_likelihood_agree_with_one_dense_gaussian(n_before: int) -> None:
    case = rich_case("gaussian", n_before)
    posterior = run_laplace(case)
    moments = posterior_moments(posterior)
    assert bool(np.all(posterior.converged))
    for lane in range(case.chunk.mask.shape[1]):
        dense = solve_dense(case, lane)
        assert float(posterior.value[lane]) == pytest.approx(dense.loglik, abs=1e-9)
        np.testing.assert_allclose(posterior.mode.x[..., lane], dense.x, atol=1e-9)
        np.testing.assert_allclose(posterior.mode.e[..., lane], dense.e, atol=1e-9)
        now = np.einsum("titj->tij", dense.covariance)
        np.testing.assert_allclose(moments.covariance[..., lane], now, atol=1e-10)
        later = np.stack([dense.covariance[t, :, t + 1] for t in range(len(now) - 1)])
        np.testing.assert_allclose(moments.lag_one[:-1, ..., lane], later, atol=1e-10)
        np.testing.assert_allclose(moments.cross[..., lane], dense.cross, atol=1e-10)
        np.testing.assert_allclose(moments.border[..., lane], dense.border, atol=1e-10)


def test_drawn_paths_and_pushes_have_the_posterior_covariance() -> None:
    case = rich_case("gaussian", 3)
    count = 4096
    x, e = draw_deviations(run_laplace(case), lane_keys(0, case.chunk), count)
    for lane in range(case.chunk.mask.shape[1]):
        dense = solve_dense(case, lane)
        n = x.shape[0] * x.shape[1]
        cross = dense.cross.reshape(n, -1)
        joint = np.block([[dense.covariance.reshape(n, n), cross], [cross.T, dense.border]])
        draws = np.concatenate([np.asarray(x)[..., lane].reshape(n, count), np.asarray(e)[..., lane]])
        white = np.linalg.solve(np.linalg.cholesky(joint), draws)
        np.testing.assert_allclose(white @ white.T / count, np.eye(len(white)), atol=6 / np.sqrt(count))
        np.testing.assert_allclose(white.mean(axis=1), 0, atol=5 / np.sqrt(count))


def test_the_particle_filter_is_exact_where_its_guide_is() -> None:
    case = rich_case("gaussian", 3)
    found = filter_particles(
        case.params, case.setup, case.chunk, run_laplace(case), lane_keys(0, case.chunk), 8, 4
    )
    for lane in range(case.chunk.mask.shape[1]):
        assert float(found.loglik[lane]) == pytest.approx(solve_dense(case, lane).loglik, abs=1e-9)
    np.testing.assert_allclose(found.se, 0, atol=1e-9)
    np.testing.assert_allclose(found.effective, 1, atol=1e-9)


def test_smoothing_with_missing_bins_agrees_with_statsmodels() -> None:
    rng = np.random.default_rng(5)
    n_time, n_lanes = 20, 2
    transition = np.array([[0.9, 0.2], [-0.15, 0.8]])
    readout, level = rng.normal(size=(3, 2)), np.array([0.5, -1.0, 0.2])
    offset, variance = np.array([0.1, -0.3]), np.array([0.3, 0.5, 0.8])
    initial = np.array([[1.0, 0.3], [0.3, 0.6]])
    case = simple_case(
        np.zeros((n_time, 3)),
        readout,
        level,
        transition,
        0.2,
        initial,
        n_lanes,
        readout="gaussian",
        offset=offset,
        log_variance=np.log(variance),
    )
    counts = rng.normal(size=(3, n_time, n_lanes))
    mask = rng.random((n_time, n_lanes)) > 0.3
    assert 0 < mask.sum() < mask.size
    case = Case(case.params, case.setup, make_chunk(counts, mask, readout="gaussian"))
    posterior = run_laplace(case)
    moments = posterior_moments(posterior)
    for lane in range(n_lanes):
        filtered = KalmanSmoother(k_endog=3, k_states=2)
        seen = np.where(mask[:, lane, None], counts[:, :, lane].T, np.nan)
        filtered.bind(np.ascontiguousarray(seen))
        filtered["design"], filtered["obs_intercept"] = readout, level[:, None]
        filtered["obs_cov"], filtered["transition"] = np.diag(variance), transition
        filtered["state_intercept"], filtered["selection"] = offset[:, None], np.eye(2)
        filtered["state_cov"] = 0.2 * np.eye(2)
        filtered.initialize_known(np.zeros(2), initial)
        result = filtered.smooth()
        assert float(posterior.value[lane]) == pytest.approx(result.llf_obs.sum(), abs=1e-9)
        np.testing.assert_allclose(posterior.mode.x[..., lane], result.smoothed_state.T, atol=1e-9)
        np.testing.assert_allclose(
            moments.covariance[..., lane], result.smoothed_state_cov.transpose(2, 0, 1), atol=1e-10
        )
        # statsmodels gives the covariance of the next state with this one.
        later = result.smoothed_state_autocov.transpose(2, 1, 0)
        np.testing.assert_allclose(moments.lag_one[:-1, ..., lane], later[:-1], atol=1e-10)


def nile_case(initial_variance: float, masks: np.ndarray) -> Case:
    one = np.ones((1, 1))
    case = simple_case(
        NILE[:, None],
        one,
        np.array([1000.0]),
        one,
        1469.1,
        initial_variance * one,
        2,
        readout="gaussian",
        log_variance=np.log([15099.0]),
    )
    counts = np.repeat(NILE[None, :, None], 2, axis=2)
    return Case(case.params, case.setup, make_chunk(counts, masks, readout="gaussian"))


def test_nile_with_a_proper_prior() -> None:
    # Variances 15099 and 1469.1 [W: statsmodels test_mlemodel.py; Durbin & Koopman]; first level
    # N(1000, 1e5): log-likelihood [C: hand-written filter and statsmodels].
    assert float(run_laplace(nile_case(1e5, np.ones((100, 2)))).value[0]) == pytest.approx(
        -639.300724, abs=1e-6
    )


def test_nile_predicts_with_the_steady_variance() -> None:
    masks = np.ones((100, 2))
    masks[-1, 0] = 0
    posterior = run_laplace(nile_case(1e5, masks))
    variance = np.asarray(posterior_moments(posterior).covariance[:, 0, 0])
    # (q + sqrt(q^2 + 4 q r)) / 2 [C: closed form]; by the last year the filter has long been steady.
    steady = 5501.257942
    assert (1469.1 + np.sqrt(1469.1**2 + 4 * 1469.1 * 15099)) / 2 == pytest.approx(steady, abs=1e-6)
    assert variance[-1, 0] == pytest.approx(steady, abs=1e-6)
    # What the last year's flow leaves of it [C: exact diffuse filter].
    assert variance[-1, 1] == pytest.approx(4032.157942, abs=1e-6)


def test_nile_smoothed_levels_with_a_nearly_diffuse_prior() -> None:
    masks = np.ones((100, 2))
    masks[50:, 1] = 0
    posterior = run_laplace(nile_case(1e9, masks))
    level = 1000 + np.asarray(posterior.mode.x[:, 0])
    variance = np.asarray(posterior_moments(posterior).covariance[:, 0, 0])
    # Exact diffuse smoother [C: statsmodels]; a prior variance of 1e9 in its place changes the first
    # level by about 3e-3 and is forgotten by the fiftieth.
    assert level[49, 0] == pytest.approx(834.763259, abs=1e-5)
    assert variance[49, 0] == pytest.approx(2326.756870, abs=1e-5)
    assert level[98, 0] == pytest.approx(804.049596, abs=1e-5)
    assert variance[98, 0] == pytest.approx(3242.930073, abs=1e-5)
    assert level[49, 1] == pytest.approx(849.070566, abs=1e-5)
    assert level[99, 0] == pytest.approx(798.370293, abs=1e-5)


@pytest.mark.parametrize(("n_factors", "chi_square"), [(1, 75.179591), (2, 6.106617)])
def test_factor_analysis_is_the_limit_without_dynamics(n_factors: int, chi_square: float) -> None:
    # Likelihood-ratio chi-square with Bartlett's correction [C: scikit-learn on data with exactly this
    # correlation matrix, and R factanal: 75.179591 on 9 and 6.106617 on 4 degrees of freedom].
    scale = np.sqrt(np.diag(ABILITY))
    correlation = ABILITY / np.outer(scale, scale)
    raw = np.random.default_rng(0).standard_normal((ABILITY_N, 6))
    left, _, right = np.linalg.svd(raw - raw.mean(axis=0), full_matrices=False)
    scores = np.sqrt(ABILITY_N) * left @ right @ np.linalg.cholesky(correlation).T
    fitted = FactorAnalysis(n_factors, tol=1e-13, max_iter=20000, svd_method="lapack").fit(scores)
    # Without dynamics every bin draws its factors afresh: 16 lanes of 7 people.
    case = simple_case(
        np.zeros((7, 6)),
        fitted.components_.T,
        fitted.mean_,
        np.zeros((n_factors, n_factors)),
        1.0,
        np.eye(n_factors),
        16,
        readout="gaussian",
        log_variance=np.log(fitted.noise_variance_),
    )
    chunk = make_chunk(scores.T.reshape(6, 7, 16), readout="gaussian")
    loglik = float(jnp.sum(run_laplace(Case(case.params, case.setup, chunk)).value))
    assert loglik == pytest.approx(ABILITY_N * fitted.score(scores), abs=1e-8)
    saturated = -0.5 * ABILITY_N * (np.linalg.slogdet(correlation)[1] + 6 * (1 + np.log(2 * np.pi)))
    factor = ABILITY_N - 1 - (2 * 6 + 5) / 6 - 2 * n_factors / 3
    assert factor * 2 * (saturated - loglik) / ABILITY_N == pytest.approx(chi_square, abs=2e-4)
