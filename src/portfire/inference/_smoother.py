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
    apply_over_time,
    cholesky,
    factorise,
    invert_band,
    multiply,
    multiply_transposed,
    solve_lower,
    solve_upper,
    substitute_backward,
    substitute_forward,
)
from portfire.inference._chunk import Chunk

DECREMENT_TOLERANCE = 1e-6
MAX_SWEEPS = 60
# Added to the log rate where nothing was observed.
_NEVER = -1e3


class Path(NamedTuple):
    """Path and border of every lane: x of shape (time, D, lane), e of shape (D, lane)."""

    x: jax.Array
    e: jax.Array


class Corner(NamedTuple):
    """Cholesky factor of small matrices: L (D, D, lane) and one over its diagonal (D, lane)."""

    lower: jax.Array
    inverse_diagonal: jax.Array


class Posterior(NamedTuple):
    """Laplace posterior of every lane.

    Attributes
    ----------
    mode : Path
    value : array, shape (lane,)
        Laplace log marginal likelihood (nats).
    sweeps : array, shape ()
        Newton sweeps spent.
    converged : array of bool, shape (lane,)
        Whether they sufficed.
    slack : Path
        Gradient of the log posterior at ``mode`` (zero at the exact mode).
    left : array, shape (lane,)
        What ``value`` holds for the last, untaken step (nats).
    factor : Factor
        Cholesky factor of the chain's Hessian.
    border_solution : array, shape (time, D, D, lane)
        V = Hxx⁻¹ Hxe.
    corner : Corner
        Cholesky factor of the border's Schur complement.
    """

    mode: Path
    value: jax.Array
    sweeps: jax.Array
    converged: jax.Array
    slack: Path
    left: jax.Array
    factor: Factor
    border_solution: jax.Array
    corner: Corner


class Moments(NamedTuple):
    """Covariances of the Laplace posterior, border uncertainty included.

    Attributes
    ----------
    covariance, lag_one : arrays, shape (time, D, D, lane)
        Of x at t, and between t and t+1.
    cross : array, shape (time, D, D, lane)
        Covariance of x_t with e.
    border : array, shape (D, D, lane)
        Covariance of e.
    """

    covariance: jax.Array
    lag_one: jax.Array
    cross: jax.Array
    border: jax.Array


class _Data(NamedTuple):
    """What a chunk contributes whatever the path.

    ``pulled`` is CᵀY, ``linear_offset`` what the counts times the offsets add to each lane's
    log-likelihood. ``plane`` and ``rest`` make η one product: η = plane @ [x; rest], with a constant, the
    drift basis and, for counts, a row that sends rates to zero where nothing was observed.
    """

    pulled: jax.Array
    linear_offset: jax.Array
    offset: jax.Array
    plane: jax.Array
    rest: jax.Array
    stack: jax.Array
    pairs: np.ndarray

    def rows(self, x: jax.Array) -> jax.Array:
        """[x; rest], shape (D + …, time·lane), of a path (time, D, lane)."""
        return jnp.concatenate([x.transpose(1, 0, 2).reshape(x.shape[1], -1), self.rest])


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
    level, columns, rows = params["log_rate"], [params["drift"]], [_over_time(chunk.drift, n_time)]
    if setup.model.readout == "poisson":
        level = level + jnp.log(setup.bin_s)
        columns.append(jnp.ones((n, 1)))
        rows.append(jnp.where(chunk.mask > 0, 0.0, _NEVER)[None])
    plane = jnp.concatenate([c, level[:, None], *columns], axis=1)
    rest = jnp.concatenate([jnp.ones((1, n_time, n_lanes)), *rows]).reshape(-1, n_time * n_lanes)
    i, j, table = pair_index(setup.latent_dim)
    stack = jnp.concatenate([jnp.ones((1, n)), c.T, (c[:, i] * c[:, j]).T])
    totals = jnp.sum(chunk.counts.sum(axis=1) * offset, axis=0)
    return _Data(pulled, totals, offset, plane, rest, stack, table)


def _over_time(rows: jax.Array, n_time: int) -> jax.Array:
    return jnp.broadcast_to(rows[:, None], (rows.shape[0], n_time, rows.shape[1]))


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
    if setup.model.readout == "poisson":
        sums = (data.stack @ jnp.exp(data.plane @ data.rows(x))).reshape(-1, n_time, n_lanes)
        linear = jnp.sum(data.pulled * x, axis=(0, 1)) + data.linear_offset
        value = linear - jnp.sum(sums[0], axis=0)
        gradient = data.pulled - sums[1 : 1 + d].transpose(1, 0, 2)
        folded = sums[1 + d :]
    else:
        eta = log_rates(params, data.offset, x)
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


def _complement(blocks: _PriorBlocks, border: jax.Array, forward: jax.Array) -> tuple[Corner, jax.Array]:
    """The border's Schur complement, and BᵀF for B = L⁻¹Hxe and F the forward-solved gradient (D, lane)."""
    d = border.shape[1]
    joint = jnp.concatenate([border, forward[:, :, None]], axis=2)

    def add(total: jax.Array, now: jax.Array) -> tuple[jax.Array, None]:
        return total + multiply_transposed(now[:, :d], now), None

    total, _ = lax.scan(add, jnp.zeros((d, d + 1, border.shape[-1])), joint)
    columns, inverse = cholesky(blocks.corner[:, :, None] - total[:, :d])
    return Corner(jnp.stack(columns, axis=1), jnp.stack(inverse)), total[:, d]


def solve_corner(corner: Corner, right: jax.Array) -> jax.Array:
    """Solve with the border's Schur complement, right of shape (D, k, lane)."""
    columns = [corner.lower[:, j] for j in range(corner.lower.shape[0])]
    inverse = list(corner.inverse_diagonal)
    return solve_upper(columns, inverse, solve_lower(columns, inverse, right))


def _combine(
    blocks: _PriorBlocks,
    border_solution: jax.Array,
    corner: Corner,
    chain_solution: jax.Array,
    by_border: jax.Array,
) -> Path:
    """Solution of the bordered system from Hxx⁻¹ g and g_e."""
    pulled = by_border - jnp.einsum("tij,tib->jb", blocks.border, chain_solution)
    e = solve_corner(corner, pulled[:, None])[:, 0]
    return Path(chain_solution - apply_over_time(border_solution, e), e)


class _Step(NamedTuple):
    """A Newton step, and the factors it came from; ``border`` is L⁻¹ Hxe."""

    direction: Path
    factor: Factor
    border: jax.Array
    corner: Corner


def _newton_step(blocks: _PriorBlocks, hessian: jax.Array, slack: Path) -> _Step:
    border = jnp.broadcast_to(blocks.border[..., None], (*blocks.border.shape, slack.x.shape[-1]))
    right = jnp.concatenate([slack.x[:, :, None], border], axis=2)
    factor, solved = factorise(blocks.diagonal[..., None] + hessian, blocks.off[..., None], right)
    forward, border = solved[:, :, 0], solved[:, :, 1:]
    corner, pulled = _complement(blocks, border, forward)
    e = solve_corner(corner, (slack.e - pulled)[:, None])[:, 0]
    # Only the gradient is carried backwards: the border's share of it is taken off before.
    x = substitute_backward(factor, (forward - apply_over_time(border, e))[:, :, None])[:, :, 0]
    return _Step(Path(x, e), factor, border, corner)


@partial(jax.jit, static_argnames=("setup",))
def newton_sweep(params: Params, setup: Setup, chunk: Chunk, path: Path) -> Path:
    """One undamped Newton step on the path and border of every lane (for benchmarks and checks)."""
    data, prior, inputs, blocks = _begin(params, setup, chunk)
    _, gradient, hessian = _data_terms(params, setup, chunk, data, path.x)
    _, by_x, by_border = _prior_terms(prior, inputs, setup.n_before, path)
    step = _newton_step(blocks, hessian, Path(gradient + by_x, by_border)).direction
    return Path(path.x + step.x, path.e + step.e)


def _begin(
    params: Params, setup: Setup, chunk: Chunk, given: tuple[PathPrior, jax.Array] | None = None
) -> tuple[_Data, PathPrior, jax.Array, _PriorBlocks]:
    n_time = chunk.mask.shape[0]
    prior, inputs = given or (
        path_prior(params, setup, n_time),
        path_inputs(params, setup, n_time, chunk.rows),
    )
    return _prepare(params, setup, chunk), prior, inputs, _prior_blocks(prior, setup.n_before)


def start_path(setup: Setup, chunk: Chunk) -> Path:
    """A path at zero, from which Newton may start when nothing better is at hand."""
    n_time, n_lanes = chunk.mask.shape
    d = setup.latent_dim
    return Path(jnp.zeros((n_time, d, n_lanes)), jnp.zeros((d, n_lanes)))


@partial(jax.jit, static_argnames=("setup",))
def laplace(
    params: Params,
    setup: Setup,
    chunk: Chunk,
    path: Path,
    given: tuple[PathPrior, jax.Array] | None = None,
) -> Posterior:
    """Laplace posterior and log marginal likelihood of every lane.

    Damped Newton: a step that lowers a lane's log posterior is halved until it does not.

    Parameters
    ----------
    params : dict of arrays
    setup : Setup
    chunk : Chunk
    path : Path
        Where Newton starts.
    given : (PathPrior, array of shape (time, D, lane)), optional
        A path prior and known inputs to use in place of those that the parameters imply.
    """
    data, prior, inputs, blocks = _begin(params, setup, chunk, given)
    n_lanes, d = chunk.weight.shape[0], setup.latent_dim

    def evaluate(trial: Path) -> tuple[jax.Array, Path, jax.Array, _Step]:
        value, gradient, hessian = _data_terms(params, setup, chunk, data, trial.x)
        log_prior, by_x, by_border = _prior_terms(prior, inputs, setup.n_before, trial)
        slack = Path(gradient + by_x, by_border)
        step = _newton_step(blocks, hessian, slack)
        decrement = jnp.sum(slack.x * step.direction.x, axis=(0, 1)) + jnp.sum(
            slack.e * step.direction.e, axis=0
        )
        return value + log_prior, slack, 0.5 * decrement, step

    def body(state: _Search) -> _Search:
        trial = Path(
            state.held.x + state.length * state.direction.x, state.held.e + state.length * state.direction.e
        )
        total, slack, decrement, step = evaluate(trial)
        accept = (total >= state.best - 1e-9 * (1 + jnp.abs(state.best))) & jnp.isfinite(decrement)
        return _Search(
            state.n_sweeps + 1,
            Path(jnp.where(accept, trial.x, state.held.x), jnp.where(accept, trial.e, state.held.e)),
            jnp.where(accept, total, state.best),
            Path(
                jnp.where(accept, step.direction.x, state.direction.x),
                jnp.where(accept, step.direction.e, state.direction.e),
            ),
            jnp.where(accept, 1.0, 0.5 * state.length),
            jnp.where(accept, decrement, state.decrement),
            slack,
            step,
        )

    def unfinished(state: _Search) -> jax.Array:
        return (state.n_sweeps < MAX_SWEEPS) & jnp.any(
            (state.decrement > DECREMENT_TOLERANCE) & (chunk.weight > 0)
        )

    zero = Path(jnp.zeros_like(path.x), jnp.zeros_like(path.e))
    blank = jax.tree.map(lambda leaf: jnp.zeros(leaf.shape, leaf.dtype), jax.eval_shape(evaluate, path)[3])
    never = jnp.full(n_lanes, jnp.inf)
    start = _Search(jnp.zeros((), dtype=jnp.int32), path, -never, zero, jnp.ones(n_lanes), never, zero, blank)
    end = lax.while_loop(unfinished, body, start)
    step = end.step
    log_det = step.factor.log_determinant - 2 * jnp.sum(jnp.log(step.corner.inverse_diagonal), axis=0)
    size = 0.5 * d * (chunk.mask.shape[0] + 1) * jnp.log(2 * jnp.pi)
    converged = end.decrement <= DECREMENT_TOLERANCE
    left = jnp.where(converged, end.decrement, 0.0)
    value = end.best + left + size - 0.5 * log_det
    return Posterior(
        end.held,
        value,
        end.n_sweeps,
        converged,
        end.slack,
        left,
        step.factor,
        substitute_backward(step.factor, step.border),
        step.corner,
    )


class _Search(NamedTuple):
    """State of the search for the mode; ``slack`` and ``step`` belong to the last point tried."""

    n_sweeps: jax.Array
    held: Path
    best: jax.Array
    direction: Path
    length: jax.Array
    decrement: jax.Array
    slack: Path
    step: _Step


def _moments(factor: Factor, border_solution: jax.Array, corner: Corner) -> Moments:
    d, n_lanes = corner.inverse_diagonal.shape
    cov, lag = invert_band(factor)
    identity = jnp.broadcast_to(jnp.eye(d)[:, :, None], (d, d, n_lanes))
    border = solve_corner(corner, identity)

    def add(later: jax.Array, now: tuple[jax.Array, ...]) -> tuple[jax.Array, tuple[jax.Array, ...]]:
        v, own, next_ = now
        cross = lax.optimization_barrier(-multiply(v, border))
        turned = lax.optimization_barrier((v.transpose(1, 0, 2), later.transpose(1, 0, 2)))
        outer, ahead = multiply(cross, turned[0]), multiply(cross, turned[1])
        return v, (own - outer, next_ - ahead, cross)

    start = jnp.zeros((d, d, n_lanes))
    cov, lag, cross = lax.scan(add, start, (border_solution, cov, lag), reverse=True)[1]
    return Moments(cov, lag, cross, border)


@jax.jit
def posterior_moments(posterior: Posterior) -> Moments:
    """Covariances of a Laplace posterior."""
    return _moments(posterior.factor, posterior.border_solution, posterior.corner)


def _prior_surrogate(
    params: Params, setup: Setup, chunk: Chunk, mode: Path, moments: Moments, lean: Path | None = None
) -> jax.Array:
    """A function whose gradient by the parameters is the prior's part of the objective's gradient."""
    n_time, before = chunk.mask.shape[0], setup.n_before
    prior = path_prior(params, setup, n_time)
    inputs = path_inputs(params, setup, n_time, chunk.rows)
    step, anchor = _residuals(prior, inputs, before, mode)
    weight = chunk.weight
    held = prior.anchor_precision @ anchor
    leaning, leaning_anchor = 0.5 * step, 0.5 * anchor
    if lean is not None:
        turn, turn_anchor = _residuals(prior, jnp.zeros_like(inputs), before, lean)
        leaning, leaning_anchor = leaning + turn, leaning_anchor + turn_anchor
    total = -(jnp.sum(step * leaning, axis=1) @ weight) @ prior.precision
    total = total - jnp.sum(held * leaning_anchor, axis=0) @ weight
    total = total + jnp.sum(weight) * prior.log_normaliser
    now = moments.covariance @ weight
    lag = moments.lag_one[:-1] @ weight
    cross = moments.cross @ weight
    corner = moments.border @ weight
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
    params: Params, setup: Setup, chunk: Chunk, posterior: Posterior
) -> tuple[Params, Moments, jax.Array]:
    """Exact gradient of a chunk's summed Laplace log marginal likelihood, and the moments it needs.

    The third result (lane,) is what is to be added to each value, because the log determinant was
    taken at a point that Newton left a little short of the mode.

    With H the Hessian at the mode and Σ its inverse, the gradient is the partial derivative of
    log p(y, x) - ½ log|H| at the mode plus the mode's own movement, u·∂∇ₓlog p with
    u = Σ ∂(-½ log|H|)/∂x: no iteration is unrolled.

    Parameters
    ----------
    posterior : Posterior
        From `laplace` with the same parameters.
    """
    data, _, _, blocks = _begin(params, setup, chunk)
    moments = _moments(posterior.factor, posterior.border_solution, posterior.corner)
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
    pairs = moments.covariance[:, i, j].transpose(1, 0, 2).reshape(len(i), -1)
    spread = (data.stack[1 + d :].T * twice) @ pairs
    bent = -0.5 * slope * spread
    pull = (c.T @ bent).reshape(d, n_time, n_lanes).transpose(1, 0, 2)
    forward = substitute_forward(posterior.factor, pull[:, :, None])
    turn = substitute_backward(posterior.factor, forward)[:, :, 0]
    lean = _combine(blocks, posterior.border_solution, posterior.corner, turn, jnp.zeros((d, n_lanes)))
    flat_x = x.transpose(1, 0, 2).reshape(d, -1)
    flat_turn = lean.x.transpose(1, 0, 2).reshape(d, -1)
    by_eta = score + bent - weight * (c @ flat_turn)
    folded = (weight @ pairs.T)[:, table]
    gradient = jax.grad(_prior_surrogate)(params, setup, chunk, posterior.mode, moments, lean)
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
    short = jnp.sum(lean.x * posterior.slack.x, axis=(0, 1)) + jnp.sum(lean.e * posterior.slack.e, axis=0)
    return gradient, moments, short
