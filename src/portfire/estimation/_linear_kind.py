"""Linear dynamics: the path given its inputs is Gaussian, so one engine does all."""

from __future__ import annotations

import numpy as np

from portfire.accounts import Account
from portfire.dynamics import Setup, spread_kernels
from portfire.estimation._ascent import find_maximum
from portfire.estimation._freedom import count_additive_route, free_parameters, project
from portfire.estimation._gauge import canonical_map
from portfire.estimation._kind import Forward, Found, Inferred
from portfire.estimation._laplace_kind import (
    draw_paths_by,
    follow_causally,
    infer_by,
    map_chunks,
    push_of_rows,
    push_of_trials,
    split_scatter,
)
from portfire.estimation._objective import Objective, Values
from portfire.estimation._start import start_values
from portfire.inference import Chunk, Packed, importance, lane_keys, laplace, refine, start_path
from portfire.session import Trials

N_PAIRS, MORE_PAIRS = 16, 128
LARGEST_SE = 0.05


class Linear:
    """x' = A x + b + pushes + cue response + noise."""

    equations = (
        "x_0 = sum_k kernel_k[0] push_k z_k + N(0, P0); "
        "x_t = A x_{t-1} + b + cue bumps_t + sum_k kernel_k[t] push_k z_k "
        "+ kernel_sustained[t] LS e + N(0, q I); P0 = noise of initial_bins bins + L0 L0'; "
        "log rate (spikes/s) = C x_t + d + drift basis"
    )

    def start_values(self, trials: Trials, setup: Setup, seed: int) -> Values:
        return start_values(trials, setup)

    def project(self, params: Values, setup: Setup, account: Account, drift: bool = True) -> Values:
        return project(params, free_parameters(account, setup, drift))

    def evaluate(self, params: Values, setup: Setup, packed: Packed) -> tuple[float, Values]:
        objective = Objective(packed, setup)
        try:
            return objective(params)
        finally:
            objective.close()

    def search(
        self,
        trials: Trials,
        setup: Setup,
        account: Account,
        drift: bool,
        start: Values | None,
        tolerance: float,
        max_iterations: int,
        seed: int,
    ) -> Found:
        found = find_maximum(trials, setup, account, drift, start, tolerance, max_iterations)
        canonical = canonical_map(found.params["readout"], found.paths, found.packed)
        return Found(found.params, canonical, found.value, found.trace, found.status)

    def loglik(
        self, params: Values, setup: Setup, packed: Packed, seed: int, n_pairs: int = N_PAIRS
    ) -> tuple[np.ndarray, np.ndarray]:
        """By importance sampling of whole paths.

        Trials whose standard error is above 0.05 nats get eight times the draws; those whose effective
        sample size then falls below 30 % are scored by the guided particle filter instead.
        """

        def one(device: dict, chunk: Chunk) -> tuple[np.ndarray, np.ndarray]:
            keys = lane_keys(seed, chunk)
            posterior = laplace(device, setup, chunk, start_path(setup, chunk))
            sampled = importance(device, setup, chunk, posterior, keys, n_pairs)
            real = np.asarray(chunk.weight) > 0
            if np.any((np.asarray(sampled.se) > LARGEST_SE) & real):
                sampled = importance(device, setup, chunk, posterior, keys, MORE_PAIRS)
            sampled, _ = refine(device, setup, chunk, posterior, keys, sampled)
            return np.asarray(sampled.loglik), np.asarray(sampled.se)

        results = map_chunks(one, params, packed)
        return packed.gather([r[0] for r in results]), packed.gather([r[1] for r in results])

    def posterior(self, params: Values, setup: Setup, packed: Packed) -> Inferred:
        state, state_cov, e, e_cov = infer_by(laplace, params, setup, packed)
        lift = params["sustained_factor"]
        sustained = push_of_trials(params, setup, packed, np.inf) + e @ lift.T
        return Inferred(state, state_cov, sustained, lift @ e_cov @ lift.T)

    def causal_states(self, params: Values, setup: Setup, packed: Packed) -> np.ndarray:
        return follow_causally(laplace, params, setup, packed)

    def draw_posterior(
        self, params: Values, setup: Setup, packed: Packed, n_draws: int, seed: int
    ) -> list[np.ndarray]:
        return draw_paths_by(laplace, params, setup, packed, n_draws, seed)

    def draw_forward(
        self, params: Values, setup: Setup, rows: np.ndarray, n_time: int, rng: np.random.Generator
    ) -> Forward:
        d, noise = setup.latent_dim, float(params["noise"])
        spread = spread_kernels(params, setup, n_time)
        kernels, border = spread[:-1], spread[-1]
        at_cue = np.zeros((d, d))
        for _ in range(setup.initial_bins):
            at_cue = params["transition"] @ at_cue @ params["transition"].T + noise * np.eye(d)
        own_cov = params["initial_factor"] @ params["initial_factor"].T
        root = np.linalg.cholesky(at_cue + own_cov)
        own = rng.standard_normal((len(rows), d)) @ params["sustained_factor"].T
        steady = params["offset"][:, None] + params["cue"] @ setup.cue_basis(n_time)
        scatter = rng.standard_normal((len(rows), d)) @ root.T
        x = (rows * kernels[:, 0]) @ params["push"].T + border[0] * own + scatter
        path = np.empty((len(rows), n_time, d))
        path[:, 0] = x
        for t in range(1, n_time):
            known = steady[:, t] + (rows * kernels[:, t]) @ params["push"].T + border[t] * own
            x = x @ params["transition"].T + known + np.sqrt(noise) * rng.standard_normal((len(rows), d))
            path[:, t] = x
        initial = push_of_rows(params, setup, rows, 0.0) + split_scatter(scatter, own_cov, at_cue, rng)
        return Forward(path, initial, push_of_rows(params, setup, rows, np.inf) + own)

    def local_transition(self, params: Values, setup: Setup) -> np.ndarray:
        return params["transition"]

    def count_route(self, account: Account, source: str, persistence_s: float, setup: Setup) -> int:
        return count_additive_route(account, source, persistence_s, setup)
