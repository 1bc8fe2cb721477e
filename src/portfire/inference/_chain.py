"""Block-tridiagonal kernel over time, with trials in the last axis ("lanes").

Every function works on small matrices of shape (D, D, lane); products are unrolled over the small
axes, so that the compiled loops run along the lanes.
"""

from __future__ import annotations

from typing import NamedTuple

import jax
import jax.numpy as jnp
from jax import lax


class Factor(NamedTuple):
    """Cholesky factor of a block-tridiagonal matrix, shapes (time, D, D, lane) and (time, D, lane).

    ``lower`` holds the diagonal blocks L_t, ``inverse_diagonal`` one over their diagonals, and
    ``coupling`` the blocks W_t = L_t⁻¹ H_{t,t+1}.
    """

    lower: jax.Array
    inverse_diagonal: jax.Array
    coupling: jax.Array

    @property
    def log_determinant(self) -> jax.Array:
        """Log determinant of the matrix, shape (lane,)."""
        return -2 * jnp.sum(jnp.log(self.inverse_diagonal), axis=(0, 1))


def multiply(a: jax.Array, b: jax.Array) -> jax.Array:
    """A B for lanes of matrices, shapes (i, j, lane) and (j, k, lane)."""
    # Row by row: the compiler then keeps the factors instead of computing them anew for every entry.
    return jnp.stack([_combine_rows(a[i], b) for i in range(a.shape[0])])


def multiply_transposed(a: jax.Array, b: jax.Array) -> jax.Array:
    """Aᵀ B for lanes of matrices, shapes (j, i, lane) and (j, k, lane)."""
    return jnp.stack([_combine_rows(a[:, i], b) for i in range(a.shape[1])])


def _combine_rows(weights: jax.Array, rows: jax.Array) -> jax.Array:
    out = weights[0] * rows[0]
    for j in range(1, len(rows)):
        out = out + weights[j] * rows[j]
    return out


def apply_over_time(a: jax.Array, b: jax.Array) -> jax.Array:
    """A_t b for every bin, shapes (time, i, j, lane) and (j, …, lane)."""
    out = a[:, :, 0].reshape(*a.shape[:2], *(1,) * (b.ndim - 2), a.shape[-1]) * b[0]
    for j in range(1, a.shape[2]):
        out = out + a[:, :, j].reshape(*a.shape[:2], *(1,) * (b.ndim - 2), a.shape[-1]) * b[j]
    return out


def cholesky(matrix: jax.Array) -> tuple[list[jax.Array], list[jax.Array]]:
    """Cholesky factor entry by entry: columns of L (each (D, lane)) and one over its diagonal."""
    d = matrix.shape[0]
    entries: list[list[jax.Array]] = [[] for _ in range(d)]
    inverse: list[jax.Array] = []
    for j in range(d):
        for i in range(j, d):
            left = matrix[i, j]
            for k in range(j):
                left = left - entries[i][k] * entries[j][k]
            if i == j:
                inverse.append(lax.rsqrt(left))
            entries[i].append(left * inverse[j])
    zero = jnp.zeros_like(inverse[0])
    columns = [jnp.stack([zero] * j + [entries[i][j] for i in range(j, d)]) for j in range(d)]
    return columns, inverse


def solve_lower(columns: list[jax.Array], inverse: list[jax.Array], right: jax.Array) -> jax.Array:
    """L⁻¹ R, R of shape (D, k, lane)."""
    rows: list[jax.Array] = []
    for i in range(len(columns)):
        left = right[i]
        for k in range(i):
            left = left - columns[k][i] * rows[k]
        rows.append(left * inverse[i])
    return jnp.stack(rows)


def solve_upper(columns: list[jax.Array], inverse: list[jax.Array], right: jax.Array) -> jax.Array:
    """L⁻ᵀ R, R of shape (D, k, lane)."""
    d = len(columns)
    rows: list[jax.Array] = []
    for i in reversed(range(d)):
        left = right[i]
        for k in range(i + 1, d):
            left = left - columns[i][k] * rows[d - 1 - k]
        rows.append(left * inverse[i])
    return jnp.stack(rows[::-1])


def _invert_lower(columns: list[jax.Array], inverse: list[jax.Array]) -> jax.Array:
    """L⁻¹, shape (D, D, lane)."""
    d = len(columns)
    rows = [[jnp.zeros_like(inverse[0])] * d for _ in range(d)]
    for j in range(d):
        rows[j][j] = inverse[j]
        for i in range(j + 1, d):
            left = columns[j][i] * rows[j][j]
            for k in range(j + 1, i):
                left = left + columns[k][i] * rows[k][j]
            rows[i][j] = -left * inverse[i]
    return jnp.stack([jnp.stack(row) for row in rows])


def _unstack(lower: jax.Array, inverse: jax.Array) -> tuple[list[jax.Array], list[jax.Array]]:
    d = lower.shape[0]
    return [lower[:, j] for j in range(d)], [inverse[j] for j in range(d)]


def factorise(diagonal: jax.Array, off: jax.Array, right: jax.Array) -> tuple[Factor, jax.Array]:
    """Cholesky over time with the forward substitution of right-hand sides.

    Parameters
    ----------
    diagonal : array, shape (time, D, D, lane)
        Diagonal blocks H_tt.
    off : array, shape (time-1, D, D, lane or 1)
        Blocks H_{t,t+1}.
    right : array, shape (time, D, k, lane)

    Returns
    -------
    Factor, and L⁻¹ right of the shape of ``right``.
    """
    _, d, _, n_lanes = diagonal.shape
    off = jnp.concatenate([off, jnp.zeros_like(off[:1])]) if off.shape[0] else jnp.zeros((1, d, d, 1))

    def step(
        carry: tuple[jax.Array, jax.Array], block: tuple[jax.Array, ...]
    ) -> tuple[tuple[jax.Array, jax.Array], tuple[jax.Array, ...]]:
        schur, done = carry
        h, o, r = block
        # Barriers keep the compiler from computing each factor anew for every entry that needs it.
        columns, inverse = lax.optimization_barrier(cholesky(h - schur))
        known = jnp.concatenate([jnp.broadcast_to(o, (d, d, n_lanes)), r - done], axis=1)
        solved = lax.optimization_barrier(solve_lower(columns, inverse, known))
        coupling = solved[:, :d]
        carried = lax.optimization_barrier(multiply_transposed(coupling, solved))
        out = (jnp.stack(columns, axis=1), jnp.stack(inverse), coupling, solved[:, d:])
        return (carried[:, :d], carried[:, d:]), out

    start = (jnp.zeros((d, d, n_lanes)), jnp.zeros((d, right.shape[2], n_lanes)))
    _, (lower, inverse, coupling, forward) = lax.scan(step, start, (diagonal, off, right))
    return Factor(lower, inverse, coupling), forward


def substitute_forward(factor: Factor, right: jax.Array) -> jax.Array:
    """L⁻¹ right with a factor at hand, right of shape (time, D, k, lane)."""

    def step(done: jax.Array, block: tuple[jax.Array, ...]) -> tuple[jax.Array, jax.Array]:
        lower, inverse, coupling, r = block
        solved = solve_lower(*_unstack(lower, inverse), r - done)
        return multiply_transposed(coupling, solved), solved

    return lax.scan(step, jnp.zeros_like(right[0]), (*factor, right))[1]


def substitute_backward(factor: Factor, forward: jax.Array) -> jax.Array:
    """L⁻ᵀ forward, forward of shape (time, D, k, lane)."""

    def step(later: jax.Array, block: tuple[jax.Array, ...]) -> tuple[jax.Array, jax.Array]:
        lower, inverse, coupling, r = block
        solved = solve_upper(*_unstack(lower, inverse), r - multiply(coupling, later))
        return solved, solved

    return lax.scan(step, jnp.zeros_like(forward[0]), (*factor, forward), reverse=True)[1]


def invert_band(factor: Factor) -> tuple[jax.Array, jax.Array]:
    """The band of the inverse, by recursion backwards in time (Rauch, Tung and Striebel 1965).

    Returns
    -------
    covariance : array, shape (time, D, D, lane)
        Diagonal blocks of the inverse.
    lag_one : array, shape (time, D, D, lane)
        Block (t, t+1) of the inverse; the last is zero.
    """
    _, d, _, n_lanes = factor.lower.shape

    def step(later: jax.Array, block: tuple[jax.Array, ...]) -> tuple[jax.Array, tuple[jax.Array, jax.Array]]:
        lower, inverse, coupling = block
        half = lax.optimization_barrier(_invert_lower(*_unstack(lower, inverse)))
        gain = lax.optimization_barrier(multiply_transposed(half, coupling))
        lag = lax.optimization_barrier(-multiply(gain, later))
        entries = [[_entry(half, lag, gain, i, j) for j in range(i + 1)] for i in range(d)]
        cov = jnp.stack([jnp.stack([entries[max(i, j)][min(i, j)] for j in range(d)]) for i in range(d)])
        cov = lax.optimization_barrier(cov)
        return cov, (cov, lag)

    return lax.scan(step, jnp.zeros((d, d, n_lanes)), tuple(factor), reverse=True)[1]


def _entry(half: jax.Array, lag: jax.Array, gain: jax.Array, i: int, j: int) -> jax.Array:
    """Entry (i, j), i ≥ j, of HᵀH - lag gainᵀ with H lower triangular."""
    out = half[i, i] * half[i, j]
    for k in range(i + 1, len(half)):
        out = out + half[k, i] * half[k, j]
    for k in range(len(half)):
        out = out - lag[i, k] * gain[j, k]
    return out
