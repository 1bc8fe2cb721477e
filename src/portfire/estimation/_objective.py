"""What is maximised: the variational lower bound on the log marginal likelihood, less the drift's prior."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor

import jax
import jax.numpy as jnp
import numpy as np

from portfire.dynamics import Setup
from portfire.inference import (
    Bound,
    Chunk,
    Guess,
    Moments,
    Packed,
    Path,
    bound_gradient,
    fit_bound,
    guess_of_posterior,
    laplace,
    start_guess,
    start_path,
    turn_guess,
)

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


def settle(device: dict, setup: Setup, chunk: Chunk, guess: Guess) -> Bound:
    """The bound of a chunk; a search that fails from its guess starts anew from the Laplace posterior."""
    bound = fit_bound(device, setup, chunk, guess)
    if np.all(np.asarray(bound.converged) | (np.asarray(chunk.weight) == 0)):
        return bound
    return fit_bound(
        device,
        setup,
        chunk,
        guess_of_posterior(laplace(device, setup, chunk, start_path(setup, chunk))),
    )


class Objective:
    """The objective on packed trials; it keeps each chunk's last posterior as the next start.

    Parameters
    ----------
    packed : Packed
    setup : Setup
    """

    def __init__(self, packed: Packed, setup: Setup) -> None:
        self.packed, self.setup = packed, setup
        self.guesses = [start_guess(setup, chunk) for chunk in packed.chunks]
        self.frame = np.eye(setup.latent_dim)
        self.last: list[tuple[Path, Moments]] = []
        self.n_calls = 0
        self.n_sweeps = 0
        self.n_unconverged = 0
        self._pool = ThreadPoolExecutor(n_threads())

    @property
    def paths(self) -> list[Path]:
        """Posterior means of the last call, chunk by chunk."""
        return [guess.path for guess in self.guesses]

    def __call__(self, params: Values, frame: np.ndarray | None = None) -> tuple[float, Values]:
        """Penalised bound (nats) and its gradient by every parameter.

        Parameters
        ----------
        params : dict of arrays
        frame : array, shape (D, D), optional
            Map by which the latent space was stretched; kept posteriors are carried from the last one's.
        """
        device = to_device(params)
        frame = np.eye(self.setup.latent_dim) if frame is None else frame
        if np.any(frame != self.frame):
            move = jnp.asarray(frame @ np.linalg.inv(self.frame))
            self.guesses = [turn_guess(guess, move) for guess in self.guesses]
            self.frame = frame

        def one(task: tuple[Chunk, Guess]) -> tuple[Bound, dict]:
            bound = settle(device, self.setup, *task)
            return bound, jax.block_until_ready(bound_gradient(device, self.setup, task[0], bound))

        results = list(self._pool.map(one, zip(self.packed.chunks, self.guesses, strict=True)))
        bounds = [bound for bound, _ in results]
        weights = [chunk.weight for chunk in self.packed.chunks]
        value = sum(float(bound.value @ weight) for bound, weight in zip(bounds, weights, strict=True))
        gradient = {
            name: sum((np.asarray(by[name]) for _, by in results), np.zeros(np.shape(params[name])))
            for name in params
        }
        self.last = [(bound.mean, bound.moments) for bound in bounds]
        self.n_calls += 1
        self.n_sweeps += sum(int(bound.sweeps) for bound in bounds)
        self.n_unconverged = sum(
            int(np.sum(~np.asarray(bound.converged) & (np.asarray(weight) > 0)))
            for bound, weight in zip(bounds, weights, strict=True)
        )
        # From parameters far off a search may end nowhere: what it has is no start for another.
        if np.isfinite(value) and not self.n_unconverged:
            self.guesses = [bound.guess for bound in bounds]
        gradient["drift"] = gradient["drift"] - params["drift"]
        return value - drift_penalty(params), gradient

    def close(self) -> None:
        """Let the threads go."""
        self._pool.shutdown()
