"""Scores of single trials: the gradient of every lane's own bound."""

from __future__ import annotations

from functools import partial

import jax
import jax.numpy as jnp

from portfire.dynamics import READOUTS, Params, Setup
from portfire.inference._chunk import Chunk
from portfire.inference._smoother import Moments, Path, _begin, _prior_surrogate
from portfire.inference._variational import Bound, _doubled, _pairs

# Their gradients are sums over bins that are written out; the prior holds none of them.
_OF_READOUT = ("readout", "log_rate", "drift")


@partial(jax.jit, static_argnames=("setup",))
def bound_scores(params: Params, setup: Setup, chunk: Chunk, bound: Bound) -> Params:
    """Gradient of each lane's bound by every parameter.

    Summed over lanes it is the gradient that `bound_gradient` gives.

    Parameters
    ----------
    bound : Bound
        From `fit_bound` with the same parameters.

    Returns
    -------
    dict of arrays
        Each of the parameter's shape with a last axis over lanes; zero in empty lanes.
    """
    data = _begin(params, setup, chunk)[0]
    n = setup.n_units
    x, moments = bound.mean.x, bound.moments
    n_time, _, n_lanes = x.shape
    pairs = _pairs(moments.covariance)
    square, doubled = _doubled(data, pairs)
    offset = params["log_rate"][:, None] + params["drift"] @ chunk.drift
    eta = jnp.einsum("ni,tib->ntb", params["readout"], x) + offset[:, None]
    spread = (square @ doubled).reshape(n, n_time, n_lanes)
    readout = READOUTS[setup.model.readout]
    expected = readout.expect(params, chunk.counts, eta, spread, setup.bin_s)
    used = chunk.mask * chunk.weight
    score, weight = expected.score * used, expected.weight * used
    own = readout.expected_gradient(params, chunk.counts, eta, spread, setup.bin_s)
    fixed = (*_OF_READOUT, *own)
    moving = {name: value for name, value in params.items() if name not in fixed}

    def one(rows: jax.Array, weight: jax.Array, parts: tuple[Path, Moments]) -> Params:
        lane = chunk._replace(rows=rows[:, None], weight=weight[None], mask=chunk.mask[:, :1])
        mean, spread_of_lane = jax.tree.map(lambda leaf: leaf[..., None], parts)

        def surrogate(free: Params) -> jax.Array:
            return _prior_surrogate({**params, **free}, setup, lane, mean, spread_of_lane)

        return jax.grad(surrogate)(moving)

    out = jax.vmap(one, in_axes=-1, out_axes=-1)(chunk.rows, chunk.weight, (bound.mean, moments))
    folded = jnp.einsum("ntb,ptb->npb", weight, pairs.reshape(-1, n_time, n_lanes))[:, data.pairs]
    by_state = jnp.einsum("ntb,tdb->ndb", score, x)
    out["readout"] = by_state - jnp.einsum("nijb,nj->nib", folded, params["readout"])
    out["log_rate"] = score.sum(axis=1)
    out["drift"] = out["log_rate"][:, None] * chunk.drift[None]
    return out | {name: jnp.sum(by * used, axis=1) for name, by in own.items()}
