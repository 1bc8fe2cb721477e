"""What is maximised: the Laplace log marginal likelihood of all counts, less the drift's prior."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor

import jax
import jax.numpy as jnp
import numpy as np

from portfire.dynamics import Setup
from portfire.inference import Chunk, Moments, Packed, Path, Posterior, laplace, laplace_gradient, start_path

Values = dict[str, np.ndarray]


def n_threads() -> int:
    """Threads for chunks: as many as XLA's own pool is told to have (NPROC), else one a core."""
    return int(os.environ.get("NPROC") or os.cpu_count() or 1)


def to_device(params: Values) -> dict[str, jax.Array]:
    """The same parameters as JAX arrays."""
    return {name: jnp.asarray(value) for name, value in params.items()}


def drift_penalty(params: Values) -> float:
    """Minus the log prior of the drift coefficients (unit variance), up to a constant, in nats."""
    return 0.5 * float(np.sum(params["drift"] ** 2))


class Objective:
    """The objective on packed trials; it keeps each chunk's last mode as the next start.

    Parameters
    ----------
    packed : Packed
    setup : Setup
    """

    def __init__(self, packed: Packed, setup: Setup) -> None:
        self.packed, self.setup = packed, setup
        self.paths = [start_path(setup, chunk) for chunk in packed.chunks]
        self.frame = np.eye(setup.latent_dim)
        self.last: list[tuple[Path, Moments]] = []
        self.n_calls = 0
        self.n_sweeps = 0
        self.n_unconverged = 0
        self._pool = ThreadPoolExecutor(n_threads())

    def __call__(self, params: Values, frame: np.ndarray | None = None) -> tuple[float, Values]:
        """Penalised log marginal likelihood (nats) and its gradient by every parameter.

        Parameters
        ----------
        params : dict of arrays
        frame : array, shape (D, D), optional
            Map by which the latent space was stretched; kept modes are carried from the last one's.
        """
        device = to_device(params)
        frame = np.eye(self.setup.latent_dim) if frame is None else frame
        if np.any(frame != self.frame):
            move = frame @ np.linalg.inv(self.frame)
            self.paths = [Path(jnp.einsum("ij,tjb->tib", move, p.x), p.e) for p in self.paths]
            self.frame = frame

        def one(task: tuple[Chunk, Path]) -> tuple[Posterior, tuple[dict, Moments, jax.Array]]:
            posterior = laplace(device, self.setup, *task)
            return posterior, jax.block_until_ready(laplace_gradient(device, self.setup, task[0], posterior))

        results = list(self._pool.map(one, zip(self.packed.chunks, self.paths, strict=True)))
        posteriors = [posterior for posterior, _ in results]
        weights = [chunk.weight for chunk in self.packed.chunks]
        value = sum(
            float((p.value + short) @ w) for (p, (_, _, short)), w in zip(results, weights, strict=True)
        )
        gradient = {
            name: sum((np.asarray(by[name]) for _, (by, _, _) in results), np.zeros(np.shape(params[name])))
            for name in params
        }
        self.last = [(p.mode, moments) for p, (_, moments, _) in results]
        if np.isfinite(value):
            self.paths = [posterior.mode for posterior in posteriors]
        self.n_calls += 1
        self.n_sweeps += sum(int(posterior.sweeps) for posterior in posteriors)
        self.n_unconverged = sum(
            int(np.sum(~np.asarray(p.converged) & (np.asarray(w) > 0)))
            for p, w in zip(posteriors, weights, strict=True)
        )
        gradient["drift"] = gradient["drift"] - params["drift"]
        return value - drift_penalty(params), gradient

    def close(self) -> None:
        """Let the threads go."""
        self._pool.shutdown()
