"""What kinds with a Laplace posterior over the path have in common; ``laplace`` is the kind's own."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from typing import Protocol, TypeVar

import jax.numpy as jnp
import numpy as np

from portfire.dynamics import Params, Setup
from portfire.estimation._objective import Values, n_threads, to_device
from portfire.inference import (
    Chunk,
    Packed,
    Path,
    Posterior,
    draw_deviations,
    lane_keys,
    posterior_moments,
    start_path,
)

T = TypeVar("T")


class Laplace(Protocol):
    """Finds the Laplace posterior of every lane, as `inference.laplace` does for linear dynamics."""

    def __call__(self, params: Params, setup: Setup, chunk: Chunk, path: Path, /) -> Posterior: ...


def map_chunks(function: Callable[[Params, Chunk], T], params: Values, packed: Packed) -> list[T]:
    """Call a function with the parameters on every chunk, in threads."""
    device = to_device(params)
    with ThreadPoolExecutor(n_threads()) as pool:
        return list(pool.map(lambda chunk: function(device, chunk), packed.chunks))


def infer_by(
    laplace: Laplace, params: Values, setup: Setup, packed: Packed
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Posterior means and covariances of state (trial, time, …) and border (trial, …)."""
    device = to_device(params)
    state, state_cov, e, e_cov = [], [], [], []
    for chunk in packed.chunks:
        posterior = laplace(device, setup, chunk, start_path(setup, chunk))
        moments = posterior_moments(posterior)
        state.append(np.asarray(posterior.mode.x))
        state_cov.append(np.asarray(moments.covariance))
        e.append(np.asarray(posterior.mode.e))
        e_cov.append(np.asarray(moments.border))
    return packed.gather_time(state), packed.gather_time(state_cov), packed.gather(e), packed.gather(e_cov)


def push_of_rows(params: Values, setup: Setup, rows: np.ndarray, persistence_s: float) -> np.ndarray:
    """Push of design rows (trial, column), initial (0) or lasting (above 0), shape (trial, D)."""
    mine = [k for k, column in enumerate(setup.columns) if (column.persistence_s > 0) == (persistence_s > 0)]
    return rows[:, mine] @ params["push"][:, mine].T


def push_of_trials(params: Values, setup: Setup, packed: Packed, persistence_s: float) -> np.ndarray:
    """Push of every trial's condition, initial (0) or lasting (above 0), shape (trial, D)."""
    rows = packed.gather([np.asarray(chunk.rows) for chunk in packed.chunks])
    return push_of_rows(params, setup, rows, persistence_s)


def split_scatter(
    scatter: np.ndarray, own_cov: np.ndarray, noise_cov: np.ndarray, rng: np.random.Generator
) -> np.ndarray:
    """Draw the trial's own push, given its sum with the noise at the set cue (trial, D).

    By a generator of its own, so that what is drawn next does not hang on it.
    """
    rng = rng.spawn(1)[0]
    gain = np.linalg.solve(own_cov + noise_cov, own_cov).T
    left = own_cov - gain @ own_cov
    values, vectors = np.linalg.eigh(0.5 * (left + left.T))
    root = vectors * np.sqrt(np.maximum(values, 0.0))
    return scatter @ gain.T + rng.standard_normal(scatter.shape) @ root.T


def follow_causally(laplace: Laplace, params: Values, setup: Setup, packed: Packed) -> np.ndarray:
    """State at the end of every bin from the set cue on from the counts up to there, (trial, time, D).

    The same as a posterior at every bin, each search starting from the bin before.
    """
    device, before = to_device(params), setup.n_before
    states = []
    for chunk in packed.chunks:
        n_time = chunk.mask.shape[0]
        path = start_path(setup, chunk)
        state = np.full(path.x.shape, np.nan)
        for t in range(before, n_time):
            seen = chunk.mask * (jnp.arange(n_time)[:, None] <= t)
            path = laplace(device, setup, chunk._replace(mask=seen, counts=chunk.counts * seen), path).mode
            state[t] = np.asarray(path.x[t])
        states.append(state)
    return packed.gather_time(states)[:, before:]


def draw_paths_by(
    laplace: Laplace, params: Values, setup: Setup, packed: Packed, n_draws: int, seed: int
) -> list[np.ndarray]:
    """Paths drawn from the Laplace posterior, a chunk an entry, shape (time, D, draw, lane)."""
    device = to_device(params)
    out = []
    for chunk in packed.chunks:
        posterior = laplace(device, setup, chunk, start_path(setup, chunk))
        deviations, _ = draw_deviations(posterior, lane_keys(seed, chunk), n_draws)
        out.append(np.asarray(posterior.mode.x)[:, :, None] + np.asarray(deviations))
    return out
