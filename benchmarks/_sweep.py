"""One Newton sweep over all trials, against the bare readout pass and against scipy trial by trial."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from functools import partial
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from _clock import Rounds, interleave, with_one_blas_thread
from _problem import Problem, without_own_push
from scipy.linalg import solveh_banded

from portfire.accounts import make_design
from portfire.dynamics import Params, path_inputs, path_prior
from portfire.estimation._objective import n_threads
from portfire.inference import Path, newton_sweep, start_path

_TOLERANCE = 1e-8


@jax.jit
def _bare_pass(stack: jax.Array, readout: jax.Array, level: jax.Array, x: jax.Array) -> jax.Array:
    return stack @ jnp.exp(readout @ x + level[:, None])


def floor_tasks(problem: Problem, pool: ThreadPoolExecutor) -> dict[str, Callable[[], Any]]:
    """The bare readout pass F exp(C X + d) in two forms.

    ``floor_whole`` is one compiled call, ``floor_in_chunks`` the same in the chunks and from the
    threads that the sweep uses, which keeps the rates in the cache.
    """
    rng = np.random.default_rng(1)
    d = problem.sizes.latent_dim
    n_columns = problem.sizes.n_trials * problem.sizes.n_bins
    readout, level = problem.params["readout"], problem.params["log_rate"]
    i, j = np.triu_indices(d)
    stack = jnp.concatenate([readout.T, (readout[:, i] * readout[:, j]).T])
    x = jnp.asarray(rng.standard_normal((d, n_columns)))
    width = problem.packed.chunks[0].mask.size
    parts = [jnp.copy(x[:, start : start + width]) for start in range(0, n_columns, width)]

    def one(part: jax.Array) -> jax.Array:
        return jax.block_until_ready(_bare_pass(stack, readout, level, part))

    return {"floor_whole": partial(one, x), "floor_in_chunks": lambda: list(pool.map(one, parts))}


class ChunkedSweep:
    """`newton_sweep` over all chunks, from as many threads as there are cores; the border is in it.

    Parameters
    ----------
    problem : Problem
    params : dict of arrays
    pool : ThreadPoolExecutor
    """

    def __init__(self, problem: Problem, params: Params, pool: ThreadPoolExecutor) -> None:
        self.problem, self.params, self.pool = problem, params, pool
        self.paths = [start_path(problem.setup, chunk) for chunk in problem.packed.chunks]

    def __call__(self) -> list[Path]:
        """The paths after one sweep; those to start from stay as they are."""

        def one(task: tuple) -> Path:
            return jax.block_until_ready(newton_sweep(self.params, self.problem.setup, *task))

        return list(self.pool.map(one, zip(self.problem.packed.chunks, self.paths, strict=True)))

    def advance(self, n_sweeps: int) -> None:
        """Sweep, and start from there."""
        for _ in range(n_sweeps):
            self.paths = self()


class BandedSweep:
    """The same sweep trial by trial in numpy, its banded system solved by `scipy.linalg.solveh_banded`.

    There is no border. What does not change between sweeps is made once and not timed: the band of the
    prior's Hessian, the prior mean path, the readout's share of the gradient from the counts alone.

    Parameters
    ----------
    problem : Problem
    params : dict of arrays
        With the sustained push of single trials at zero, or the step is another one.
    """

    def __init__(self, problem: Problem, params: Params) -> None:
        setup, trials = problem.setup, problem.trials
        d, n_time = setup.latent_dim, problem.sizes.n_bins
        prior = jax.tree.map(np.asarray, path_prior(params, setup, n_time))
        inputs = np.asarray(path_inputs(params, setup, n_time, make_design(trials).rows.T))
        self.transition, self.precision = prior.transition[0], float(prior.precision[0])
        self.anchor = prior.anchor_precision
        self.readout = np.asarray(params["readout"])
        i, j = np.triu_indices(d)
        self.stack = np.concatenate([self.readout, self.readout[:, i] * self.readout[:, j]], axis=1)
        offset = setup.drift_basis(trials) @ np.asarray(params["drift"]).T + np.asarray(params["log_rate"])
        self.offset = offset + np.log(setup.bin_s)
        self.pulled = trials.counts.astype(float) @ self.readout
        mean = [inputs[0]]
        for t in range(1, n_time):
            mean.append(self.transition @ mean[-1] + inputs[t])
        self.mean = np.ascontiguousarray(np.array(mean).transpose(2, 0, 1))
        self.band = self._prior_band(n_time)
        # Entry (j, i) of block t stands in column t d + i, at j - i below the diagonal.
        column = np.arange(n_time)[:, None] * d + i
        self.places = (column * 2 * d + (j - i)).ravel()
        self.x = np.zeros((len(trials), n_time, d))

    def _prior_band(self, n_time: int) -> np.ndarray:
        """Lower band of the prior's Hessian, shape (time·D, 2 D), a row for a column of the matrix."""
        d = len(self.anchor)
        band = np.zeros((n_time, d, 2 * d))
        a, p = self.transition, self.precision
        for t in range(n_time):
            block = p * np.eye(d) if t else self.anchor.copy()
            if t + 1 < n_time:
                block = block + p * a.T @ a
                for i in range(d):
                    band[t, i, d - i : 2 * d - i] = -p * a[:, i]
            for i in range(d):
                band[t, i, : d - i] = block[i:, i]
        return band.reshape(n_time * d, 2 * d)

    def sweep_trial(self, row: int) -> np.ndarray:
        """The path of one trial after one Newton step, shape (time, D)."""
        x = self.x[row]
        n_time, d = x.shape
        rate = x @ self.readout.T
        rate += self.offset[row]
        np.exp(rate, out=rate)
        sums = rate @ self.stack
        away = x - self.mean[row]
        gradient = self.pulled[row] - sums[:, :d]
        gradient[0] -= self.anchor @ away[0]
        pull = self.precision * (away[1:] - away[:-1] @ self.transition.T)
        gradient[1:] -= pull
        gradient[:-1] += pull @ self.transition
        band = self.band.copy()
        band.ravel()[self.places] += sums[:, d:].ravel()
        step = solveh_banded(
            band.T, gradient.ravel(), overwrite_ab=True, overwrite_b=True, lower=True, check_finite=False
        )
        return x + step.reshape(n_time, d)

    def one_thread(self) -> np.ndarray:
        """The paths after one sweep, shape (trial, time, D)."""
        return np.stack([self.sweep_trial(row) for row in range(len(self.x))])

    def threads(self, pool: ThreadPoolExecutor) -> np.ndarray:
        """The same from several threads, each with its share of the trials."""
        shares = np.array_split(np.arange(len(self.x)), n_threads())
        parts = pool.map(lambda rows: [self.sweep_trial(row) for row in rows], shares)
        return np.stack([path for part in parts for path in part])


def check_step(problem: Problem, pool: ThreadPoolExecutor) -> float:
    """Greatest difference between both sweeps' paths (log-rate units of the state), after two sweeps."""
    params = without_own_push(problem)
    ours, theirs = ChunkedSweep(problem, params, pool), BandedSweep(problem, params)
    ours.advance(2)
    theirs.x = theirs.one_thread()
    theirs.x = theirs.one_thread()
    mine = problem.packed.gather_time([np.asarray(path.x) for path in ours.paths])
    apart = float(np.max(np.abs(mine - theirs.x)))
    if not apart < _TOLERANCE:
        raise SystemExit(
            f"bench: the two Newton sweeps differ by {apart:.3g}; they should agree to {_TOLERANCE:g}."
        )
    return apart


def measure_sweep(problem: Problem, n_rounds: int) -> tuple[Rounds, dict[str, float]]:
    """Time the floor, the sweep and scipy's sweep in turn; and how far their steps are apart."""
    with ThreadPoolExecutor(n_threads()) as pool:
        agreement = {"scipy_step": check_step(problem, pool)}
        sweep = ChunkedSweep(problem, problem.params, pool)
        sweep.advance(2)
        banded = BandedSweep(problem, without_own_push(problem))
        banded.x = problem.packed.gather_time([np.asarray(path.x) for path in sweep.paths])
        tasks = {
            **floor_tasks(problem, pool),
            "newton_sweep": sweep,
            "scipy_one_thread": with_one_blas_thread(banded.one_thread),
            "scipy_threads": with_one_blas_thread(partial(banded.threads, pool)),
        }
        rounds = interleave(tasks, n_rounds, n_best=2)
    return rounds.fastest(
        "scipy", "scipy_one_thread", "scipy_threads"
    ), agreement
