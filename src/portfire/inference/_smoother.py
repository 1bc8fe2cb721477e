"""Path posteriors: damped Newton to the mode, Laplace marginal likelihood and its exact gradient.

The unknowns of a trial are its path x (time, D) and the border variable e (D), the trial's own
sustained push in units of its prior: v = L e. The Hessian is block tridiagonal in x with a border
for e; e is eliminated last (Schur complement), so a vanishing push is never singular.
"""

from __future__ import annotations

from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jax import lax

from portfire.dynamics import READOUTS, Params, PathPrior, Setup, path_inputs, path_prior
from portfire.inference._chain import (
    Factor,
    cholesky,
    factorise,
    invert_band,
    solve_lower,
    solve_upper,
    substitute_backward,
    substitute_forward,
)
from portfire.inference._chunk import Chunk

DECREMENT_TOLERANCE = 1e-3
MAX_SWEEPS = 60


class Path(NamedTuple):
    """Path and border of every lane: x of shape (time, D, lane), e of shape (D, lane)."""

    x: jax.Array
    e: jax.Array


class Posterior(NamedTuple):
    """Laplace posterior of every lane.

    Attributes
    ----------
    mode : Path
    value : array, shape (lane,)
        Laplace log marginal likelihood (nats).
    sweeps : array, shape ()
        Newton sweeps spent; `converged` (lane,) tells whether they sufficed.
    covariance, lag_one : arrays, shape (time, D, D, lane)
        Of x at t, and between t and t+1; border uncertainty included.
    cross : array, shape (time, D, D, lane)
        Covariance of x_t with e.
    border_covariance : array, shape (D, D, lane)
    """

    mode: Path
    value: jax.Array
    sweeps: jax.Array
    converged: jax.Array
    covariance: jax.Array
    lag_one: jax.Array
    cross: jax.Array
    border_covariance: jax.Array


class _Data(NamedTuple):
    """What a chunk's counts contribute whatever the path: CᵀY, unit totals, unit offsets, GEMM stack."""

    pulled: jax.Array
    totals: jax.Array
    offset: jax.Array
    stack: jax.Array
    pairs: np.ndarray


def pair_index(d: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Rows and columns of the upper triangle, and the (D, D) table that unfolds it."""
    i, j = np.triu_indices(d)
    table = np.zeros((d, d), dtype=int)
    table[i, j] = table[j, i] = np.arange(len(i))
    return i, j, table


def _prepare(params: Params, setup: Setup, chunk: Chunk) -> _Data:
    c = params["readout"]
    n, n_time, n_lanes = chunk.counts.shape
    pulled = (c.T @ chunk.counts.reshape(n, -1)).reshape(-1, n_time, n_lanes).transpose(1, 0, 2)
    offset = params["log_rate"][:, None] + params["drift"] @ chunk.drift
    i, j, table = pair_index(setup.latent_dim)
    stack = jnp.concatenate([jnp.ones((1, n)), c.T, (c[:, i] * c[:, j]).T])
    return _Data(pulled, chunk.counts.sum(axis=1), offset, stack, table)


def log_rates(params: Params, offset: jax.Array, x: jax.Array) -> jax.Array:
    """η of every unit, bin and lane, shape (unit, time, lane)."""
    n_time, d, n_lanes = x.shape
    flat = params["readout"] @ x.transpose(1, 0, 2).reshape(d, -1)
    return flat.reshape(-1, n_time, n_lanes) + offset[:, None, :]


def _data_terms(
    params: Params, setup: Setup, chunk: Chunk, data: _Data, x: jax.Array
) -> tuple[jax.Array, jax.Array, jax.Array]:
    """Log-likelihood (lane,), its gradient (time, D, lane) and minus its Hessian (time, D, D, lane)."""
    d = setup.latent_dim
    n_time, _, n_lanes = x.shape
    eta = log_rates(params, data.offset, x)
    if setup.model.readout == "poisson":
        mean = setup.bin_s * jnp.exp(eta) * chunk.mask
        sums = (data.stack @ mean.reshape(mean.shape[0], -1)).reshape(-1, n_time, n_lanes)
        linear = jnp.sum(data.pulled * x, axis=(0, 1)) + jnp.sum(data.totals * data.offset, axis=0)
        value = linear - jnp.sum(sums[0], axis=0)
        gradient = data.pulled - sums[1 : 1 + d].transpose(1, 0, 2)
        folded = sums[1 + d :]
    else:
        curvature = READOUTS[setup.model.readout].evaluate(params, chunk.counts, eta, setup.bin_s)
        value = jnp.sum(curvature.value * chunk.mask, axis=(0, 1))
        score = (curvature.score * chunk.mask).reshape(eta.shape[0], -1)
        weight = (curvature.weight * chunk.mask).reshape(eta.shape[0], -1)
        gradient = (data.stack[1 : 1 + d] @ score).reshape(d, n_time, n_lanes).transpose(1, 0, 2)
        folded = (data.stack[1 + d :] @ weight).reshape(-1, n_time, n_lanes)
    return value + chunk.constant, gradient, folded.transpose(1, 0, 2)[:, data.pairs]


class _PriorBlocks(NamedTuple):
    """Hessian blocks of the prior, shared by all lanes."""

    diagonal: jax.Array
    off: jax.Array
    border: jax.Array
    corner: jax.Array


def _prior_blocks(prior: PathPrior, before: int) -> _PriorBlocks:
    d = prior.anchor_precision.shape[0]
    pulled = prior.precision[:, None, None] * prior.transition
    identity = jnp.eye(d)
    zero = jnp.zeros((1, d, d))
    into = jnp.concatenate([zero, prior.precision[:, None, None] * identity])
    out = jnp.concatenate([jnp.einsum("tji,tjk->tik", prior.transition, pulled), zero])
    diagonal = (into + out).at[before].add(prior.anchor_precision)
    weighted = prior.precision[:, None, None] * prior.border
    border = -jnp.concatenate([zero, weighted])
    border = border + jnp.concatenate([jnp.einsum("tji,tjk->tik", prior.transition, weighted), zero])
    anchored = prior.anchor_precision @ prior.border_anchor
    border = border.at[before].add(-anchored)
    corner = identity + jnp.einsum("tji,tjk->ik", prior.border, weighted) + prior.border_anchor.T @ anchored
    return _PriorBlocks(diagonal, -pulled.transpose(0, 2, 1), border, corner)


def _residuals(prior: PathPrior, inputs: jax.Array, before: int, path: Path) -> tuple[jax.Array, jax.Array]:
    """What the prior does not expect: of every step (time-1, D, lane) and of the initial state."""
    moved = jnp.einsum("tij,tjb->tib", prior.transition, path.x[:-1])
    pushed = jnp.einsum("tij,jb->tib", prior.border, path.e)
    # In the run-up the state at the set cue is known by its prior, not by an input into its step.
    steps = jnp.arange(path.x.shape[0] - 1)[:, None, None] >= before
    step = path.x[1:] - moved - jnp.where(steps, inputs[1:], 0.0) - pushed
    return step, path.x[before] - inputs[before] - prior.border_anchor @ path.e


def _prior_terms(
    prior: PathPrior, inputs: jax.Array, before: int, path: Path
) -> tuple[jax.Array, jax.Array, jax.Array]:
    """Log prior (lane,) and its gradients by x and e."""
    step, anchor = _residuals(prior, inputs, before, path)
    weighted = prior.precision[:, None, None] * step
    held = prior.anchor_precision @ anchor
    value = -0.5 * (jnp.sum(step * weighted, axis=(0, 1)) + jnp.sum(anchor * held, axis=0))
    value = value - 0.5 * jnp.sum(path.e**2, axis=0) + prior.log_normaliser
    zero = jnp.zeros_like(path.x[:1])
    gradient = -jnp.concatenate([zero, weighted])
    gradient = gradient + jnp.concatenate([jnp.einsum("tji,tjb->tib", prior.transition, weighted), zero])
    gradient = gradient.at[before].add(-held)
    by_border = -path.e + jnp.einsum("tji,tjb->ib", prior.border, weighted) + prior.border_anchor.T @ held
    return value, gradient, by_border


class _Solved(NamedTuple):
    """Factor of the whole Hessian: chain, border solution V = Hxx⁻¹ Hxe, Cholesky of the corner's complement."""

    factor: Factor
    border_solution: jax.Array
    corner: tuple[list[jax.Array], list[jax.Array]]


def _complement(
    blocks: _PriorBlocks, border_solution: jax.Array
) -> tuple[list[jax.Array], list[jax.Array]]:
    schur = blocks.corner[:, :, None] - jnp.einsum("tij,tikb->jkb", blocks.border, border_solution)
    return cholesky(0.5 * (schur + schur.transpose(1, 0, 2)))


def _solve_corner(corner: tuple[list[jax.Array], list[jax.Array]], right: jax.Array) -> jax.Array:
    return solve_upper(*corner, solve_lower(*corner, right))


def _right_hand(blocks: _PriorBlocks, gradient: jax.Array) -> jax.Array:
    n_lanes = gradient.shape[-1]
    border = jnp.broadcast_to(blocks.border[..., None], (*blocks.border.shape, n_lanes))
    return jnp.concatenate([gradient[:, :, None], border], axis=2)


def _combine(
    blocks: _PriorBlocks, solved: _Solved, chain_solution: jax.Array, by_border: jax.Array
) -> tuple[jax.Array, jax.Array]:
    """Solution of the bordered system from Hxx⁻¹ g and g_e."""
    pulled = by_border - jnp.einsum("tij,tib->jb", blocks.border, chain_solution)
    e = _solve_corner(solved.corner, pulled[:, None])[:, 0]
    return chain_solution - jnp.einsum("tijb,jb->tib", solved.border_solution, e), e


def _direction(
    blocks: _PriorBlocks, hessian: jax.Array, gradient: jax.Array, by_border: jax.Array
) -> tuple[jax.Array, jax.Array]:
    factor, forward = factorise(
        blocks.diagonal[..., None] + hessian, blocks.off[..., None], _right_hand(blocks, gradient)
    )
    solution = substitute_backward(factor, forward)
    border_solution = solution[:, :, 1:]
    solved = _Solved(factor, border_solution, _complement(blocks, border_solution))
    return _combine(blocks, solved, solution[:, :, 0], by_border)


@partial(jax.jit, static_argnames=("setup",))
def newton_sweep(params: Params, setup: Setup, chunk: Chunk, path: Path) -> Path:
    """One undamped Newton step on the path and border of every lane (for benchmarks and checks)."""
    data, prior, inputs, blocks = _begin(params, setup, chunk)
    _, gradient, hessian = _data_terms(params, setup, chunk, data, path.x)
    _, by_x, by_border = _prior_terms(prior, inputs, setup.n_before, path)
    dx, de = _direction(blocks, hessian, gradient + by_x, by_border)
    return Path(path.x + dx, path.e + de)


def _begin(
    params: Params, setup: Setup, chunk: Chunk
) -> tuple[_Data, PathPrior, jax.Array, _PriorBlocks]:
    n_time = chunk.mask.shape[0]
    prior = path_prior(params, setup, n_time)
    inputs = path_inputs(params, setup, n_time, chunk.rows)
    return _prepare(params, setup, chunk), prior, inputs, _prior_blocks(prior, setup.n_before)


def start_path(setup: Setup, chunk: Chunk) -> Path:
    """A path at zero, from which Newton may start when nothing better is at hand."""
    n_time, n_lanes = chunk.mask.shape
    d = setup.latent_dim
    return Path(jnp.zeros((n_time, d, n_lanes)), jnp.zeros((d, n_lanes)))


def _find_mode(
    params: Params,
    setup: Setup,
    chunk: Chunk,
    begun: tuple[_Data, PathPrior, jax.Array, _PriorBlocks],
    path: Path,
) -> tuple[Path, jax.Array, jax.Array]:
    """Damped Newton per lane: a step that lowers the log posterior is halved until it does not."""
    data, prior, inputs, blocks = begun
    n_lanes = chunk.weight.shape[0]

    def body(state: tuple) -> tuple:
        count, held, best, dx, de, length, decrement = state
        trial = Path(held.x + length * dx, held.e + length * de)
        value, gradient, hessian = _data_terms(params, setup, chunk, data, trial.x)
        log_prior, by_x, by_border = _prior_terms(prior, inputs, setup.n_before, trial)
        total = value + log_prior
        new_dx, new_de = _direction(blocks, hessian, gradient + by_x, by_border)
        new_decrement = 0.5 * (
            jnp.sum((gradient + by_x) * new_dx, axis=(0, 1)) + jnp.sum(by_border * new_de, axis=0)
        )
        accept = (total >= best - 1e-9 * (1 + jnp.abs(best))) & jnp.isfinite(new_decrement)
        held = Path(jnp.where(accept, trial.x, held.x), jnp.where(accept, trial.e, held.e))
        return (
            count + 1,
            held,
            jnp.where(accept, total, best),
            jnp.where(accept, new_dx, dx),
            jnp.where(accept, new_de, de),
            jnp.where(accept, 1.0, 0.5 * length),
            jnp.where(accept, new_decrement, decrement),
        )

    def unfinished(state: tuple) -> jax.Array:
        count, decrement = state[0], state[-1]
        return (count < MAX_SWEEPS) & jnp.any((decrement > DECREMENT_TOLERANCE) & (chunk.weight > 0))

    zeros = Path(jnp.zeros_like(path.x), jnp.zeros_like(path.e))
    start = (
        jnp.zeros((), dtype=jnp.int32),
        path,
        jnp.full(n_lanes, -jnp.inf),
        zeros.x,
        zeros.e,
        jnp.ones(n_lanes),
        jnp.full(n_lanes, jnp.inf),
    )
    count, held, _, dx, de, length, decrement = lax.while_loop(unfinished, body, start)
    converged = decrement <= DECREMENT_TOLERANCE
    last = jnp.where(converged, length, 0.0)
    return Path(held.x + last * dx, held.e + last * de), count, converged


@partial(jax.jit, static_argnames=("setup",))
def find_mode(params: Params, setup: Setup, chunk: Chunk, path: Path) -> tuple[Path, jax.Array, jax.Array]:
    """Mode of every lane's path and border, the sweeps spent, and whether each lane converged."""
    return _find_mode(params, setup, chunk, _begin(params, setup, chunk), path)


def _laplace(
    params: Params, setup: Setup, chunk: Chunk, path: Path
) -> tuple[Posterior, tuple, _Solved]:
    begun = _begin(params, setup, chunk)
    data, prior, inputs, blocks = begun
    mode, count, converged = _find_mode(params, setup, chunk, begun, path)
    value, _, hessian = _data_terms(params, setup, chunk, data, mode.x)
    log_prior, _, _ = _prior_terms(prior, inputs, setup.n_before, mode)
    n_lanes, d = chunk.weight.shape[0], setup.latent_dim
    border = jnp.broadcast_to(blocks.border[..., None], (*blocks.border.shape, n_lanes))
    factor, forward = factorise(blocks.diagonal[..., None] + hessian, blocks.off[..., None], border)
    border_solution, cov, lag = invert_band(factor, forward)
    solved = _Solved(factor, border_solution, _complement(blocks, border_solution))
    log_det = factor.log_determinant - 2 * sum(jnp.log(r) for r in solved.corner[1])
    size = 0.5 * d * (chunk.mask.shape[0] + 1) * jnp.log(2 * jnp.pi)
    total = value + log_prior + size - 0.5 * log_det
    identity = jnp.broadcast_to(jnp.eye(d)[:, :, None], (d, d, n_lanes))
    corner_cov = _solve_corner(solved.corner, identity)
    cross = -jnp.einsum("tijb,jkb->tikb", border_solution, corner_cov)
    cov = cov - jnp.einsum("tikb,tjkb->tijb", cross, border_solution)
    lag = lag.at[:-1].add(-jnp.einsum("tikb,tjkb->tijb", cross[:-1], border_solution[1:]))
    posterior = Posterior(mode, total, count, converged, cov, lag, cross, corner_cov)
    return posterior, begun, solved


@partial(jax.jit, static_argnames=("setup",))
def laplace(params: Params, setup: Setup, chunk: Chunk, path: Path) -> Posterior:
    """Laplace posterior and log marginal likelihood of every lane.

    Parameters
    ----------
    params : dict of arrays
    setup : Setup
    chunk : Chunk
    path : Path
        Where Newton starts.
    """
    return _laplace(params, setup, chunk, path)[0]


def _prior_surrogate(
    params: Params, setup: Setup, chunk: Chunk, posterior: Posterior, lean: Path
) -> jax.Array:
    """A function whose gradient by the parameters is the prior's part of the objective's gradient."""
    n_time, before = chunk.mask.shape[0], setup.n_before
    prior = path_prior(params, setup, n_time)
    inputs = path_inputs(params, setup, n_time, chunk.rows)
    step, anchor = _residuals(prior, inputs, before, posterior.mode)
    turn, turn_anchor = _residuals(prior, jnp.zeros_like(inputs), before, lean)
    weight = chunk.weight
    energy = jnp.sum(step * (0.5 * step + turn), axis=1) @ weight
    held = prior.anchor_precision @ anchor
    total = -energy @ prior.precision - jnp.sum(held * (0.5 * anchor + turn_anchor), axis=0) @ weight
    total = total + jnp.sum(weight) * prior.log_normaliser
    now = posterior.covariance @ weight
    lag = posterior.lag_one[:-1] @ weight
    cross = posterior.cross @ weight
    corner = posterior.border_covariance @ weight
    f, g = prior.transition, prior.border
    spread = jnp.einsum("tii->t", now[1:]) + jnp.einsum("tij,tjk,tik->t", f, now[:-1], f)
    spread = spread + jnp.einsum("tij,jk,tik->t", g, corner, g)
    spread = spread - 2 * jnp.einsum("tij,tji->t", f, lag)
    spread = spread - 2 * jnp.einsum("tij,tij->t", g, cross[1:])
    spread = spread + 2 * jnp.einsum("tij,tjk,tik->t", f, cross[:-1], g)
    k, at = prior.border_anchor, cross[before]
    anchor_spread = now[before] - at @ k.T - k @ at.T + k @ corner @ k.T
    return total - 0.5 * spread @ prior.precision - 0.5 * jnp.sum(prior.anchor_precision * anchor_spread)


@partial(jax.jit, static_argnames=("setup",))
def laplace_gradient(
    params: Params, setup: Setup, chunk: Chunk, path: Path
) -> tuple[jax.Array, Params, Path, tuple[jax.Array, jax.Array]]:
    """Summed Laplace log marginal likelihood of a chunk and its exact gradient.

    With H the Hessian at the mode and Σ its inverse, the gradient is the partial derivative of
    log p(y, x) - ½ log|H| at the mode plus the mode's own movement, u·∂∇ₓlog p with
    u = Σ ∂(-½ log|H|)/∂x: no iteration is unrolled.

    Returns
    -------
    value : array, shape ()
    gradient : dict of arrays
    mode : Path
    (sweeps, n_unconverged)
    """
    posterior, begun, solved = _laplace(params, setup, chunk, path)
    data, _, _, blocks = begun
    d = setup.latent_dim
    x = posterior.mode.x
    n_time, _, n_lanes = x.shape
    n = setup.n_units
    c = params["readout"]
    used = chunk.mask * chunk.weight
    eta = log_rates(params, data.offset, x)
    curvature = READOUTS[setup.model.readout].evaluate(params, chunk.counts, eta, setup.bin_s)
    score = (curvature.score * used).reshape(n, -1)
    weight = (curvature.weight * used).reshape(n, -1)
    slope = (curvature.slope * used).reshape(n, -1)
    i, j, table = pair_index(d)
    twice = np.where(i == j, 1.0, 2.0)
    pairs = posterior.covariance[:, i, j].transpose(1, 0, 2).reshape(len(i), -1)
    spread = (data.stack[1 + d :].T * twice) @ pairs
    bent = -0.5 * slope * spread
    pull = (c.T @ bent).reshape(d, n_time, n_lanes).transpose(1, 0, 2)
    forward = substitute_forward(solved.factor, pull[:, :, None])
    turn = substitute_backward(solved.factor, forward)[:, :, 0]
    turn_x, turn_e = _combine(blocks, solved, turn, jnp.zeros((d, n_lanes)))
    lean = Path(turn_x, turn_e)
    flat_x = x.transpose(1, 0, 2).reshape(d, -1)
    flat_turn = turn_x.transpose(1, 0, 2).reshape(d, -1)
    by_eta = score + bent - weight * (c @ flat_turn)
    folded = (weight @ pairs.T)[:, table]
    gradient = jax.grad(_prior_surrogate)(params, setup, chunk, posterior, lean)
    gradient["readout"] = by_eta @ flat_x.T + score @ flat_turn.T - jnp.einsum("nij,nj->ni", folded, c)
    by_trial = by_eta.reshape(n, n_time, n_lanes).sum(axis=1)
    gradient["log_rate"] = by_trial.sum(axis=1)
    gradient["drift"] = by_trial @ chunk.drift.T
    if setup.model.readout == "gaussian":
        precision = jnp.exp(-params["log_variance"])
        error = ((chunk.counts - eta) ** 2).reshape(n, -1) * used.reshape(-1)
        seen = jnp.sum(used)
        bend = jnp.sum(spread * used.reshape(-1), axis=1)
        gradient["log_variance"] = 0.5 * (precision * (jnp.sum(error, axis=1) + bend) - seen)
    failed = jnp.sum(~posterior.converged * chunk.weight)
    return posterior.value @ chunk.weight, gradient, posterior.mode, (posterior.sweeps, failed)
