"""One Gaussian smoothing pass, against statsmodels on the same numbers."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace

import jax
import jax.numpy as jnp
import numpy as np
from _clock import Rounds, interleave, with_one_blas_thread
from _problem import Problem, without_own_push
from statsmodels.tsa.statespace.kalman_smoother import SMOOTHER_STATE, SMOOTHER_STATE_COV, KalmanSmoother

from portfire.accounts import make_design
from portfire.dynamics import initial_covariance, path_inputs
from portfire.estimation._objective import n_threads
from portfire.inference import Moments, Posterior, laplace, pack, posterior_moments, start_path

_TOLERANCE = 1e-8


def gaussian_problem(problem: Problem) -> Problem:
    """The same counts as square roots with Gaussian noise, the border idle."""
    setup = replace(problem.setup, model=replace(problem.setup.model, readout="gaussian"))
    roots = np.sqrt(problem.trials.counts.astype(float))
    params = {
        **without_own_push(problem),
        "readout": 0.3 * problem.params["readout"],
        "drift": 0.3 * problem.params["drift"],
        "log_rate": jnp.asarray(roots.mean(axis=(0, 1))),
        "log_variance": jnp.asarray(np.log(roots.var(axis=(0, 1)) + 1e-3)),
    }
    return replace(problem, setup=setup, params=params, packed=pack(problem.trials, setup))


class OurPass:
    """`laplace` and `posterior_moments` over all chunks, from as many threads as there are cores."""

    def __init__(self, problem: Problem, pool: ThreadPoolExecutor) -> None:
        self.problem, self.pool = problem, pool
        self.paths = [start_path(problem.setup, chunk) for chunk in problem.packed.chunks]

    def __call__(self) -> list[tuple[Posterior, Moments]]:
        """Posterior and moments of every chunk."""

        def one(task: tuple) -> tuple[Posterior, Moments]:
            posterior = laplace(self.problem.params, self.problem.setup, *task)
            return posterior, jax.block_until_ready(posterior_moments(posterior))

        return list(self.pool.map(one, zip(self.problem.packed.chunks, self.paths, strict=True)))


class TheirPass:
    """statsmodels' smoother on some of the trials: collapsed, means and covariances only.

    Its objects are made once and not timed, nor is the copying of data into them.

    Parameters
    ----------
    problem : Problem
        With a Gaussian readout.
    rows : array of int, shape (trial,)
        The trials to smooth.
    """

    def __init__(self, problem: Problem, rows: np.ndarray) -> None:
        setup, params, trials = problem.setup, problem.params, problem.trials[rows]
        d, n = setup.latent_dim, setup.n_units
        spread = np.asarray(initial_covariance(params, setup))
        inputs = path_inputs(params, setup, trials.counts.shape[1], make_design(trials).rows.T)
        offset = setup.drift_basis(trials) @ np.asarray(params["drift"]).T + np.asarray(params["log_rate"])
        # Collapsing takes no intercept in the observations: they come without it.
        centred = np.sqrt(trials.counts.astype(float)) - offset[:, None]
        self.smoothers = []
        for row, known in enumerate(np.asarray(inputs).transpose(2, 1, 0)):
            smoother = KalmanSmoother(k_endog=n, k_states=d)
            smoother.bind(np.ascontiguousarray(centred[row]))
            smoother.filter_collapsed = True
            smoother.smoother_output = SMOOTHER_STATE | SMOOTHER_STATE_COV
            smoother["design"] = np.asarray(params["readout"])
            smoother["obs_cov"] = np.diag(np.exp(np.asarray(params["log_variance"])))
            smoother["transition"] = np.asarray(params["transition"])
            smoother["selection"] = np.eye(d)
            smoother["state_cov"] = float(params["noise"]) * np.eye(d)
            # The intercept of a step stands with the bin that it leaves.
            smoother["state_intercept"] = np.concatenate([known[:, 1:], known[:, :1]], axis=1)
            smoother.initialize_known(known[:, 0], spread)
            self.smoothers.append(smoother)

    def __call__(self) -> list[tuple[np.ndarray, np.ndarray]]:
        """Smoothed means (D, time) and covariances (D, D, time) of every chosen trial."""
        found = [smoother.smooth() for smoother in self.smoothers]
        return [(trial.smoothed_state, trial.smoothed_state_cov) for trial in found]


def _check(problem: Problem, ours: OurPass, theirs: TheirPass, rows: np.ndarray) -> dict[str, float]:
    found = ours()
    mean = problem.packed.gather_time([np.asarray(posterior.mode.x) for posterior, _ in found])
    cov = problem.packed.gather_time([np.asarray(moments.covariance) for _, moments in found])
    other = theirs()
    apart = {
        "statsmodels_mean": max(
            float(np.abs(mean[r] - m.T).max()) for r, (m, _) in zip(rows, other, strict=True)
        ),
        "statsmodels_covariance": max(
            float(np.abs(cov[r] - c.transpose(2, 0, 1)).max()) for r, (_, c) in zip(rows, other, strict=True)
        ),
    }
    for name, difference in apart.items():
        if not difference < _TOLERANCE:
            raise SystemExit(f"bench: {name} differs by {difference:.3g}; it should agree to {_TOLERANCE:g}.")
    return apart


def measure_gaussian(problem: Problem, n_timed: int, n_rounds: int) -> tuple[Rounds, dict[str, float]]:
    """Time both passes in turn; statsmodels on ``n_timed`` trials, scaled up to all of them."""
    problem = gaussian_problem(problem)
    n_trials = problem.sizes.n_trials
    rows = np.linspace(0, n_trials - 1, n_timed).astype(int)
    with ThreadPoolExecutor(n_threads()) as pool:
        ours, theirs = OurPass(problem, pool), TheirPass(problem, rows)
        agreement = _check(problem, ours, theirs, rows)
        rounds = interleave(
            {"gaussian_pass": ours, "statsmodels": with_one_blas_thread(theirs)}, n_rounds, n_best=2
        )
    seconds = {**rounds.seconds, "statsmodels": rounds.seconds["statsmodels"] * n_trials / n_timed}
    return Rounds(seconds), agreement
