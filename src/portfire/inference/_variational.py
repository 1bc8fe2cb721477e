"""Gaussian variational posteriors of paths, the lower bound they give, and its gradient.

The posterior of a trial's path and border is approximated by the Gaussian that maximises the bound

    E_q log p(y | x) + E_q log p(x, e) + entropy of q

(Opper and Archambeau 2009, Neural Comput. 21:786, from memory). Its precision is the prior's plus
Cᵀ W C with W the expected curvature of the readout, so the kernels of the smoother serve unchanged. At
the maximum the bound's gradient by the parameters is its partial derivative with q held.
"""

from __future__ import annotations

from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp
from jax import lax

from portfire.dynamics import READOUTS, Params, Setup
from portfire.inference._chain import substitute_backward
from portfire.inference._chunk import Chunk
from portfire.inference._smoother import (
    Moments,
    Path,
    Posterior,
    _begin,
    _Data,
    _moments,
    _newton_step,
    _prior_surrogate,
    _prior_terms,
    pair_index,
    posterior_moments,
    start_path,
)

DECREMENT_TOLERANCE = 1e-4
MAX_SWEEPS = 60
# Half the squared length, in posterior SDs, of a step that counts as near the mode.
_NEAR = 1.0
# Nats that a first step may lose through covariances that changed.
_ALLOWANCE = 10.0


class Guess(NamedTuple):
    """Where a search starts: a path, and covariances of x as pairs i ≤ j, shape (D(D+1)/2, time·lane)."""

    path: Path
    pairs: jax.Array


class Bound(NamedTuple):
    """Variational posterior of every lane.

    Attributes
    ----------
    mean : Path
    moments : Moments
    value : array, shape (lane,)
        Lower bound on the log marginal likelihood (nats).
    sweeps : array, shape ()
    converged : array of bool, shape (lane,)
    """

    mean: Path
    moments: Moments
    value: jax.Array
    sweeps: jax.Array
    converged: jax.Array

    @property
    def guess(self) -> Guess:
        """Where the next search may start."""
        return Guess(self.mean, _pairs(self.moments.covariance))


def start_guess(setup: Setup, chunk: Chunk) -> Guess:
    """A path at zero, known exactly."""
    n_pairs = setup.latent_dim * (setup.latent_dim + 1) // 2
    return Guess(start_path(setup, chunk), jnp.zeros((n_pairs, chunk.mask.size)))


def guess_of_posterior(posterior: Posterior) -> Guess:
    """The Laplace posterior as a start: slower to come by, and near enough whatever the counts are."""
    return Guess(posterior.mode, _pairs(posterior_moments(posterior).covariance))


def turn_guess(guess: Guess, move: jax.Array) -> Guess:
    """The guess after x → move x."""
    d = move.shape[0]
    i, j, table = pair_index(d)
    spread = jnp.einsum("ia,jb,abn->ijn", move, move, guess.pairs[table])
    return Guess(Path(jnp.einsum("ij,tjb->tib", move, guess.path.x), guess.path.e), spread[i, j])


def _pairs(covariance: jax.Array) -> jax.Array:
    i, j, _ = pair_index(covariance.shape[1])
    return covariance[:, i, j].transpose(1, 0, 2).reshape(len(i), -1)


def _doubled(data: _Data, pairs: jax.Array) -> tuple[jax.Array, jax.Array]:
    """Factors whose product is the variance of η: products of loadings, and pairs, the mixed ones twice."""
    d = data.pulled.shape[1]
    i, j, _ = pair_index(d)
    return data.stack[1 + d :].T, jnp.where(i == j, 1.0, 2.0)[:, None] * pairs * data.mask


class _Expected(NamedTuple):
    """Expected log-likelihood (lane,), gradient (time, D, lane) and minus Hessian (time, D, D, lane)."""

    value: jax.Array
    gradient: jax.Array
    hessian: jax.Array


def _expect(
    params: Params, setup: Setup, chunk: Chunk, data: _Data, x: jax.Array, pairs: jax.Array
) -> _Expected:
    n_time, d, n_lanes = x.shape
    square, doubled = _doubled(data, pairs)
    if setup.model.readout == "poisson":
        mean = jnp.exp(
            jnp.concatenate([data.plane, 0.5 * square], axis=1) @ jnp.concatenate([data.rows(x), doubled])
        )
        sums = (data.stack @ mean).reshape(-1, n_time, n_lanes)
        value = jnp.sum(data.pulled * x, axis=(0, 1)) + data.linear_offset - jnp.sum(sums[0], axis=0)
        gradient = data.pulled - sums[1 : 1 + d].transpose(1, 0, 2)
        folded = sums[1 + d :]
    else:
        eta = (data.plane @ data.rows(x)).reshape(-1, n_time, n_lanes)
        spread = (square @ doubled).reshape(eta.shape)
        expected = READOUTS[setup.model.readout].expect(params, chunk.counts, eta, spread, setup.bin_s)
        value = jnp.sum(expected.value * chunk.mask, axis=(0, 1))
        score = (expected.score * chunk.mask).reshape(eta.shape[0], -1)
        weight = (expected.weight * chunk.mask).reshape(eta.shape[0], -1)
        gradient = (data.stack[1 : 1 + d] @ score).reshape(d, n_time, n_lanes).transpose(1, 0, 2)
        folded = (data.stack[1 + d :] @ weight).reshape(-1, n_time, n_lanes)
    return _Expected(value + chunk.constant, gradient, folded.transpose(1, 0, 2)[:, data.pairs])


class _Search(NamedTuple):
    """State of the search. What is held was accepted; ``slack`` and ``fresh`` belong to it.

    A lane that is not ``settled`` climbs its log posterior alone, as if its path were known exactly.
    """

    n_sweeps: jax.Array
    mean: Path
    moments: Moments
    value: jax.Array
    slack: Path
    used: jax.Array
    fresh: jax.Array
    length: jax.Array
    gain: jax.Array
    settled: jax.Array


@partial(jax.jit, static_argnames=("setup",))
def fit_bound(params: Params, setup: Setup, chunk: Chunk, guess: Guess) -> Bound:
    """Variational posterior and lower bound of every lane.

    Natural-gradient steps of full length in the mean and the readout's share of the precision; one that
    lowers a lane's bound is halved until it does not. At least one step is made. From a guess without
    covariances the mode is approached first: far from it the covariances would be far too wide.

    Parameters
    ----------
    params : dict of arrays
    setup : Setup
    chunk : Chunk
    guess : Guess
        Where the search starts.
    """
    data, prior, inputs, blocks = _begin(params, setup, chunk)
    n_time, d, n_lanes = guess.path.x.shape
    size = 0.5 * d * (n_time + 1) * jnp.log(2 * jnp.pi)

    def look(path: Path, pairs: jax.Array) -> tuple[jax.Array, Path, jax.Array]:
        expected = _expect(params, setup, chunk, data, path.x, pairs)
        log_prior, by_x, by_border = _prior_terms(prior, inputs, setup.n_before, path)
        return expected.value + log_prior, Path(expected.gradient + by_x, by_border), expected.hessian

    def body(state: _Search) -> _Search:
        curvature = state.used + state.length * (state.fresh - state.used)
        step = _newton_step(blocks, curvature, state.slack)
        border = substitute_backward(step.factor, step.border)
        moments = _moments(step.factor, border, step.corner)
        mean = Path(
            state.mean.x + state.length * step.direction.x, state.mean.e + state.length * step.direction.e
        )
        pairs = _pairs(moments.covariance).reshape(-1, n_time, n_lanes) * state.settled
        level, slack, fresh = look(mean, pairs.reshape(len(pairs), -1))
        log_det = step.factor.log_determinant - 2 * jnp.sum(jnp.log(step.corner.inverse_diagonal), axis=0)
        # Half of the prior's precision times the covariance, and the entropy, in one.
        spent = 0.5 * jnp.sum(curvature * moments.covariance, axis=(0, 1, 2))
        value = level + jnp.where(state.settled, spent + size - 0.5 * log_det, 0.0)
        accept = (value >= state.value - 1e-7 * (1 + jnp.abs(state.value))) & jnp.isfinite(value)
        # A first bound has nothing to be held against but what the guess explained.
        accept = accept & (level >= level_of_guess - _ALLOWANCE)
        taken = jnp.sum(state.slack.x * step.direction.x, axis=(0, 1))
        taken = 0.5 * (taken + jnp.sum(state.slack.e * step.direction.e, axis=0))
        near = state.settled | (taken < _NEAR)
        # Guessed covariances are good for a first step, those at the mode are not.
        done = state.settled & (guessed | jnp.isfinite(state.value))
        new = _Search(
            state.n_sweeps + 1,
            mean,
            moments,
            jnp.where(near == state.settled, value, -jnp.inf),
            slack,
            jnp.where(near == state.settled, curvature, fresh + narrow),
            fresh,
            # A lane that has just come near its mode first stays there, with covariances that are too small.
            jnp.where(
                near == state.settled,
                jnp.where(state.length > 0, jnp.minimum(1.0, 2.0 * state.length), 1.0),
                0.0,
            ),
            jnp.where(done & (state.length == 1), taken, jnp.inf),
            near,
        )
        # A lane that is turned back is not at its end, or so near it that the moments are the same.
        old = state._replace(n_sweeps=new.n_sweeps, moments=moments, length=0.5 * state.length)
        return jax.tree.map(lambda a, b: a if a is b else jnp.where(accept, a, b), new, old)

    def unfinished(state: _Search) -> jax.Array:
        open_ = jnp.any((state.gain > DECREMENT_TOLERANCE) & (chunk.weight > 0))
        return (state.n_sweeps < MAX_SWEEPS) & open_

    narrow = (params["readout"].T @ params["readout"])[:, :, None]
    guessed = jnp.any(guess.pairs.reshape(-1, n_time, n_lanes) != 0, axis=(0, 1))
    level_of_guess, slack, fresh = look(guess.path, guess.pairs)
    never = jnp.full(n_lanes, jnp.inf)
    square, band = jnp.zeros((d, d, n_lanes)), jnp.zeros((n_time, d, d, n_lanes))
    start = _Search(
        jnp.zeros((), dtype=jnp.int32),
        guess.path,
        Moments(band, band, band, square),
        jnp.where(guessed, -jnp.inf, level_of_guess),
        slack,
        fresh,
        fresh,
        jnp.ones(n_lanes),
        never,
        guessed,
    )
    end = lax.while_loop(unfinished, body, start)
    return Bound(end.mean, end.moments, end.value, end.n_sweeps, end.gain <= DECREMENT_TOLERANCE)


@partial(jax.jit, static_argnames=("setup",))
def bound_gradient(params: Params, setup: Setup, chunk: Chunk, bound: Bound) -> Params:
    """Gradient of a chunk's summed bound by every parameter.

    Parameters
    ----------
    bound : Bound
        From `fit_bound` with the same parameters.
    """
    data = _begin(params, setup, chunk)[0]
    d, n, k = setup.latent_dim, setup.n_units, setup.n_drift
    x, weight = bound.mean.x, chunk.weight
    n_time = x.shape[0]
    pairs = _pairs(bound.moments.covariance)
    square, doubled = _doubled(data, pairs)
    gradient = jax.grad(_prior_surrogate)(params, setup, chunk, bound.mean, bound.moments)
    counted = jnp.tile(weight, n_time)
    if setup.model.readout == "poisson":
        mean = jnp.exp(
            jnp.concatenate([data.plane, 0.5 * square], axis=1) @ jnp.concatenate([data.rows(x), doubled])
        )
        score, curvature = chunk.counts.reshape(n, -1) - mean, mean
    else:
        eta = (data.plane @ data.rows(x)).reshape(n, n_time, -1)
        spread = (square @ doubled).reshape(eta.shape)
        readout = READOUTS[setup.model.readout]
        expected = readout.expect(params, chunk.counts, eta, spread, setup.bin_s)
        score = (expected.score * chunk.mask).reshape(n, -1)
        curvature = (expected.weight * chunk.mask).reshape(n, -1)
        own = readout.expected_gradient(params, chunk.counts, eta, spread, setup.bin_s)
        gradient |= {name: jnp.sum(by * chunk.mask * weight, axis=(1, 2)) for name, by in own.items()}
    rows = data.rows(x)[: d + 1 + k] * counted
    by_row = score @ rows.T
    folded = (curvature @ (pairs * counted).T)[:, data.pairs]
    gradient["readout"] = by_row[:, :d] - jnp.einsum("nij,nj->ni", folded, params["readout"])
    gradient["log_rate"] = by_row[:, d]
    gradient["drift"] = by_row[:, d + 1 :]
    return gradient
