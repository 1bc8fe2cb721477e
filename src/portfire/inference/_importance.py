"""Marginal likelihoods by importance sampling of whole paths from the Laplace posterior.

The prior is quadratic in the path, so a draw's log weight is what the readout's log-likelihood adds
beyond its second-order expansion at the mode, plus the slope that Newton left: small numbers, free
of cancellation, which single precision carries. Draws come in mirrored pairs.
"""

from __future__ import annotations

from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jax import lax

from portfire.dynamics import READOUTS, Params, Setup
from portfire.inference._chain import Factor, apply_over_time, solve_upper, substitute_backward
from portfire.inference._chunk import Chunk
from portfire.inference._smoother import Posterior, log_rates


class Sampled(NamedTuple):
    """Importance-sampled log marginal likelihood of every lane.

    Attributes
    ----------
    loglik : array, shape (lane,)
        In nats, with half the variance of the log of the mean added back.
    se : array, shape (lane,)
        Monte-Carlo standard error of ``loglik``.
    effective : array, shape (lane,)
        Effective sample size as a share of the draws.
    raw : array, shape (lane,)
        Log of the mean weight, without the correction: its exponential is unbiased.
    """

    loglik: jax.Array
    se: jax.Array
    effective: jax.Array
    raw: jax.Array


def lane_keys(seed: int, chunk: Chunk) -> jax.Array:
    """One random key a lane, hung on the trial's place in its session: the same for every account."""
    return jax.vmap(lambda place: jax.random.fold_in(jax.random.key(seed), place))(chunk.place)


@partial(jax.jit, static_argnames=("count",))
def draw_deviations(posterior: Posterior, keys: jax.Array, count: int) -> tuple[jax.Array, jax.Array]:
    """Deviations from the mode, x of shape (time, D, count, lane) and e of shape (D, count, lane)."""
    n_time, d, _ = posterior.mode.x.shape
    noise = jax.vmap(lambda key: jax.random.normal(key, (n_time + 1, d, count)), out_axes=-1)(keys)
    columns = [posterior.corner.lower[:, j] for j in range(d)]
    e = solve_upper(columns, list(posterior.corner.inverse_diagonal), noise[-1])
    x = substitute_backward(Factor(*posterior.factor), noise[:-1])
    # Given e, the chain's conditional mean moves by -V e.
    return x - apply_over_time(posterior.border_solution, e), e


@partial(jax.jit, static_argnames=("setup", "n_pairs"))
def importance(
    params: Params, setup: Setup, chunk: Chunk, posterior: Posterior, keys: jax.Array, n_pairs: int
) -> Sampled:
    """Sample the marginal likelihood of every lane.

    Parameters
    ----------
    posterior : Posterior
        From `laplace` with the same parameters.
    keys : array of keys, shape (lane,)
    n_pairs : int
        Mirrored pairs of draws.
    """
    readout = READOUTS[setup.model.readout]
    n_time, d, n_lanes = posterior.mode.x.shape
    offset = params["log_rate"][:, None] + params["drift"] @ chunk.drift
    eta = log_rates(params, offset, posterior.mode.x)
    single = jnp.float32
    eta_low, mask = eta.astype(single), chunk.mask.astype(single)
    counts_low = chunk.counts.astype(single)
    c = params["readout"].astype(single)
    low = {name: value.astype(single) for name, value in params.items()}

    def one_pair(carry: None, step: jax.Array) -> tuple[None, jax.Array]:
        inner = jax.vmap(lambda key: jax.random.fold_in(key, step))(keys)
        x, e = draw_deviations(posterior, inner, 1)
        tilt = jnp.sum(posterior.slack.x * x[:, :, 0], axis=(0, 1)) + jnp.sum(
            posterior.slack.e * e[:, 0], axis=0
        )
        flat = x[:, :, 0].transpose(1, 0, 2).reshape(d, -1).astype(single)
        change = (c @ flat).reshape(-1, n_time, n_lanes)
        logs = [
            jnp.sum(
                readout.remainder(low, counts_low, eta_low, sign * change, setup.bin_s) * mask, axis=(0, 1)
            ).astype(jnp.float64)
            + sign * tilt
            for sign in (1.0, -1.0)
        ]
        return None, jnp.stack(logs)

    logs = lax.scan(one_pair, None, jnp.arange(n_pairs))[1]
    top = jnp.max(logs, axis=(0, 1))
    weights = jnp.exp(logs - top)
    mean = jnp.mean(weights, axis=(0, 1))
    pairs = jnp.mean(weights, axis=1)
    n = pairs.shape[0]
    relative = jnp.sum((pairs / mean - 1) ** 2, axis=0) / (n * (n - 1))
    effective = jnp.sum(weights, axis=(0, 1)) ** 2 / (jnp.sum(weights**2, axis=(0, 1)) * 2 * n)
    # The weights already account for what Newton left between the last point and the mode.
    raw = posterior.value - posterior.left + top + jnp.log(mean)
    return Sampled(raw + 0.5 * relative, jnp.sqrt(relative), effective, raw)


def correction_size(sampled: Sampled) -> np.ndarray:
    """How much was added back to each log likelihood, in nats."""
    return np.asarray(sampled.loglik) - np.asarray(sampled.raw)
