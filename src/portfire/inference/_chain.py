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
    out = a[:, 0, None] * b[None, 0]
    for j in range(1, a.shape[1]):
        out = out + a[:, j, None] * b[None, j]
    return out


def multiply_transposed(a: jax.Array, b: jax.Array) -> jax.Array:
    """Aᵀ B for lanes of matrices, shapes (j, i, lane) and (j, k, lane)."""
    out = a[0, :, None] * b[0, None]
    for j in range(1, a.shape[0]):
        out = out + a[j, :, None] * b[j, None]
    return out


def apply_over_time(a: jax.Array, b: jax.Array) -> jax.Array:
    """A_t b for every bin, shapes (time, i, j, lane) and (j, …, lane)."""
    out = a[:, :, 0].reshape(*a.shape[:2], *(1,) * (b.ndim - 2), a.shape[-1]) * b[0]
    for j in range(1, a.shape[2]):
        out = out + a[:, :, j].reshape(*a.shape[:2], *(1,) * (b.ndim - 2), a.shape[-1]) * b[j]
    return out


def outer_over_time(a: jax.Array, b: jax.Array) -> jax.Array:
    """A_t B_tᵀ for every bin, shapes (time, i, k, lane) and (time, j, k, lane)."""
    out = a[:, :, None, 0] * b[:, None, :, 0]
    for k in range(1, a.shape[2]):
        out = out + a[:, :, None, k] * b[:, None, :, k]
    return out


def cholesky(matrix: jax.Array) -> tuple[list[jax.Array], list[jax.Array]]:
    """Right-looking Cholesky: columns of L (each (D, lane)) and one over its diagonal."""
    d = matrix.shape[0]
    columns, inverse = [], []
    for j in range(d):
        root = lax.rsqrt(matrix[j, j])
        column = jnp.where((jnp.arange(d) >= j)[:, None], matrix[:, j] * root, 0.0)
        columns.append(column)
        inverse.append(root)
        if j + 1 < d:
            matrix = matrix - column[:, None] * column[None, :]
    return columns, inverse


def solve_lower(columns: list[jax.Array], inverse: list[jax.Array], right: jax.Array) -> jax.Array:
    """L⁻¹ R, R of shape (D, k, lane)."""
    rows = []
    for j in range(len(columns)):
        row = right[j] * inverse[j]
        rows.append(row)
        if j + 1 < len(columns):
            right = right - columns[j][:, None] * row[None]
    return jnp.stack(rows)


def solve_upper(columns: list[jax.Array], inverse: list[jax.Array], right: jax.Array) -> jax.Array:
    """L⁻ᵀ R, R of shape (D, k, lane)."""
    d = len(columns)
    rows: list[jax.Array] = [right[0]] * d
    lower = jnp.stack(columns, axis=1)
    for j in reversed(range(d)):
        rows[j] = right[j] * inverse[j]
        if j:
            right = right - lower[j][:, None] * rows[j][None]
    return jnp.stack(rows)


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
        columns, inverse = cholesky(h - schur)
        solved = solve_lower(
            columns, inverse, jnp.concatenate([jnp.broadcast_to(o, (d, d, n_lanes)), r - done], axis=1)
        )
        coupling = solved[:, :d]
        carried = multiply_transposed(coupling, solved)
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
    identity = jnp.broadcast_to(jnp.eye(d)[:, :, None], (d, d, n_lanes))

    def step(later: jax.Array, block: tuple[jax.Array, ...]) -> tuple[jax.Array, tuple[jax.Array, jax.Array]]:
        lower, inverse, coupling = block
        columns, roots = _unstack(lower, inverse)
        # Barriers keep the compiler from computing a product's factors anew for each of its entries.
        half = lax.optimization_barrier(solve_lower(columns, roots, identity))
        gain = lax.optimization_barrier(multiply_transposed(half, coupling))
        lag = lax.optimization_barrier(-multiply(gain, later))
        cov = multiply_transposed(half, half) - multiply(lag, gain.transpose(1, 0, 2))
        cov = 0.5 * (cov + cov.transpose(1, 0, 2))
        return cov, (cov, lag)

    return lax.scan(step, jnp.zeros((d, d, n_lanes)), tuple(factor), reverse=True)[1]
