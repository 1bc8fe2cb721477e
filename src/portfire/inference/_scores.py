"""Scores of single trials: the gradient of every lane's own Laplace log marginal likelihood."""

from __future__ import annotations

from functools import partial

import jax
import jax.numpy as jnp
import numpy as np

from portfire.dynamics import READOUTS, Params, Setup
from portfire.inference._chain import substitute_backward, substitute_forward
from portfire.inference._chunk import Chunk
from portfire.inference._smoother import (
    Moments,
    Path,
    Posterior,
    _begin,
    _combine,
    _moments,
    _prior_surrogate,
    log_rates,
    pair_index,
)

# Their gradients are sums over bins that are written out; the prior holds none of them.
_OF_READOUT = ("readout", "log_rate", "drift", "log_variance")


@partial(jax.jit, static_argnames=("setup",))
def laplace_scores(params: Params, setup: Setup, chunk: Chunk, posterior: Posterior) -> Params:
    """Gradient of each lane's log marginal likelihood by every parameter.

    Summed over lanes it is the gradient that `laplace_gradient` gives.

    Parameters
    ----------
    posterior : Posterior
        From `laplace` with the same parameters.

    Returns
    -------
    dict of arrays
        Each of the parameter's shape with a last axis over lanes; zero in empty lanes.
    """
    data, _, _, blocks = _begin(params, setup, chunk)
    moments = _moments(posterior)
    d = setup.latent_dim
    x = posterior.mode.x
    n_time, _, n_lanes = x.shape
    n, c = setup.n_units, params["readout"]
    used = chunk.mask * chunk.weight
    eta = log_rates(params, data.offset, x)
    curvature = READOUTS[setup.model.readout].evaluate(params, chunk.counts, eta, setup.bin_s)
    score, weight, slope = (part * used for part in (curvature.score, curvature.weight, curvature.slope))
    i, j, table = pair_index(d)
    twice = np.where(i == j, 1.0, 2.0)
    pairs = moments.covariance[:, i, j].transpose(1, 0, 2)
    spread = ((data.stack[1 + d :].T * twice) @ pairs.reshape(len(i), -1)).reshape(eta.shape)
    bent = -0.5 * slope * spread
    pull = (c.T @ bent.reshape(n, -1)).reshape(d, n_time, n_lanes).transpose(1, 0, 2)
    turn = substitute_backward(posterior.factor, substitute_forward(posterior.factor, pull[:, :, None]))
    lean = _combine(
        blocks, posterior.border_solution, posterior.corner, turn[:, :, 0], jnp.zeros((d, n_lanes))
    )
    flat_turn = lean.x.transpose(1, 0, 2).reshape(d, -1)
    by_eta = score + bent - weight * (c @ flat_turn).reshape(eta.shape)
    moving = {name: value for name, value in params.items() if name not in _OF_READOUT}

    def one(rows: jax.Array, weight: jax.Array, parts: tuple[Path, Moments, Path]) -> Params:
        lane = chunk._replace(rows=rows[:, None], weight=weight[None], mask=chunk.mask[:, :1])
        mode, spread_of_lane, leaning = jax.tree.map(lambda leaf: leaf[..., None], parts)

        def surrogate(free: Params) -> jax.Array:
            return _prior_surrogate({**params, **free}, setup, lane, mode, spread_of_lane, leaning)

        return jax.grad(surrogate)(moving)

    out = jax.vmap(one, in_axes=-1, out_axes=-1)(chunk.rows, chunk.weight, (posterior.mode, moments, lean))
    folded = jnp.einsum("ntb,ptb->npb", weight, pairs)[:, table]
    out["readout"] = (
        jnp.einsum("ntb,tdb->ndb", by_eta, x)
        + jnp.einsum("ntb,tdb->ndb", score, lean.x)
        - jnp.einsum("nijb,nj->nib", folded, c)
    )
    out["log_rate"] = by_eta.sum(axis=1)
    out["drift"] = out["log_rate"][:, None] * chunk.drift[None]
    if setup.model.readout == "gaussian":
        precision = jnp.exp(-params["log_variance"])[:, None]
        error = jnp.sum((chunk.counts - eta) ** 2 * used, axis=1)
        bend = jnp.sum(spread * used, axis=1)
        out["log_variance"] = 0.5 * (precision * (error + bend) - jnp.sum(used, axis=0))
    return out
