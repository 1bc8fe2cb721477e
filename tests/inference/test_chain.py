"""The block-tridiagonal kernel against dense linear algebra."""

from __future__ import annotations

import jax.numpy as jnp
import numpy as np
import pytest

from portfire.inference import factorise, invert_band, substitute_backward, substitute_forward

N_TIME, N_LANES, N_RIGHT = 7, 3, 2


def make_system(d: int, seed: int) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Blocks of a positive definite matrix, right-hand sides, and the dense matrices (lane, …)."""
    rng = np.random.default_rng(seed)
    lower = np.zeros((N_LANES, N_TIME * d, N_TIME * d))
    for t in range(N_TIME):
        here = slice(t * d, (t + 1) * d)
        lower[:, here, here] = np.tril(rng.normal(size=(N_LANES, d, d)), -1) + (1 + rng.random()) * np.eye(d)
        if t:
            lower[:, here, slice((t - 1) * d, t * d)] = rng.normal(size=(N_LANES, d, d))
    dense = lower @ lower.transpose(0, 2, 1)
    blocks = dense.reshape(N_LANES, N_TIME, d, N_TIME, d)
    index = np.arange(N_TIME)
    diagonal = np.moveaxis(blocks[:, index, :, index], 1, -1)
    off = np.moveaxis(blocks[:, index[:-1], :, index[1:]], 1, -1)
    right = rng.normal(size=(N_TIME, d, N_RIGHT, N_LANES))
    return diagonal, off, right, dense


@pytest.mark.parametrize("d", [1, 3])
def test_the_kernel_agrees_with_dense_algebra(d: int) -> None:
    diagonal, off, right, dense = make_system(d, seed=d)
    factor, forward = factorise(jnp.asarray(diagonal), jnp.asarray(off), jnp.asarray(right))
    solution = np.asarray(substitute_backward(factor, forward))
    again = np.asarray(substitute_forward(factor, jnp.asarray(right)))
    np.testing.assert_allclose(again, forward, rtol=1e-12)
    covariance, lag = (np.asarray(block) for block in invert_band(factor))
    for lane in range(N_LANES):
        matrix = dense[lane]
        flat = right[..., lane].reshape(N_TIME * d, N_RIGHT)
        np.testing.assert_allclose(
            solution[..., lane].reshape(N_TIME * d, N_RIGHT),
            np.linalg.solve(matrix, flat),
            rtol=1e-8,
            atol=1e-9,
        )
        lower = np.linalg.cholesky(matrix)
        np.testing.assert_allclose(
            np.asarray(forward)[..., lane].reshape(N_TIME * d, N_RIGHT),
            np.linalg.solve(lower, flat),
            rtol=1e-8,
            atol=1e-9,
        )
        assert float(factor.log_determinant[lane]) == pytest.approx(np.linalg.slogdet(matrix)[1], abs=1e-9)
        inverse = np.linalg.inv(matrix).reshape(N_TIME, d, N_TIME, d)
        for t in range(N_TIME):
            np.testing.assert_allclose(covariance[t, ..., lane], inverse[t, :, t], rtol=1e-7, atol=1e-9)
            expected = inverse[t, :, t + 1] if t + 1 < N_TIME else np.zeros((d, d))
            np.testing.assert_allclose(lag[t, ..., lane], expected, rtol=1e-7, atol=1e-9)


def test_one_block_needs_no_neighbour() -> None:
    matrix = np.array([[2.0, 0.3], [0.3, 1.0]])
    right = np.array([[1.0], [2.0]])
    factor, forward = factorise(
        jnp.asarray(matrix)[None, :, :, None], jnp.zeros((0, 2, 2, 1)), jnp.asarray(right)[None, :, :, None]
    )
    solved = np.asarray(substitute_backward(factor, forward))[0, :, :, 0]
    np.testing.assert_allclose(solved, np.linalg.solve(matrix, right), rtol=1e-13)
