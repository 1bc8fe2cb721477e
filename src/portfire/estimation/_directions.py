"""Directions in which an account may be enlarged, as a flat vector that is zero at the account itself."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from portfire.accounts import Account
from portfire.dynamics import Setup
from portfire.estimation._objective import Values

Array = NDArray[np.float64]
_FACTORS = {"initial_factor": 0.0, "sustained_factor": float("inf")}


def symmetric_basis(d: int) -> Array:
    """Orthonormal basis of symmetric matrices, shape (D(D+1)/2, D, D); the diagonal ones come first."""
    basis = [np.diag(row) for row in np.eye(d)]
    for i in range(d):
        for j in range(i + 1, d):
            pair = np.zeros((d, d))
            pair[i, j] = pair[j, i] = np.sqrt(0.5)
            basis.append(pair)
    return np.array(basis)


@dataclass(frozen=True)
class Linear:
    """Directions along which parameters move in a straight line.

    Parameters
    ----------
    basis : dict of str to array, shape (direction, …)
        What a unit of each direction adds to a parameter.
    steps : array, shape (direction,)
        About a tenth of a standard error of each direction, for finite differences.
    """

    basis: Mapping[str, Array]
    steps: Array

    @property
    def size(self) -> int:
        """Number of directions."""
        return len(self.steps)

    @property
    def cones(self) -> tuple[int, ...]:
        """Sizes of the covariances among the directions: none."""
        return ()

    def apply(self, params: Values, amount: Array) -> Values:
        """Parameters moved by an amount of every direction."""
        return {
            **params,
            **{name: params[name] + np.tensordot(amount, block, 1) for name, block in self.basis.items()},
        }

    def pull(self, gradient: Mapping[str, Array], params: Values) -> Array:
        """Score of the directions from the gradient by the parameters; trailing axes are kept."""
        return np.asarray(
            sum(
                np.tensordot(block.reshape(self.size, -1), _flatten(gradient[name], block.ndim - 1), 1)
                for name, block in self.basis.items()
            )
        )


@dataclass(frozen=True)
class Covariances:
    """Covariances of the trial source, each held at zero by the account.

    The directions are the entries of each covariance S in the basis of `symmetric_basis`. The gradient
    by a factor vanishes at S = 0, so scores are taken at S = 2 ``step`` I, a fraction of a standard error.

    Parameters
    ----------
    names : tuple of str
        ``initial_factor`` and ``sustained_factor``, or one of them.
    step_sizes : tuple of float
        About a tenth of a standard error of an entry of each.
    dim : int
        Rows D.
    """

    names: tuple[str, ...]
    step_sizes: tuple[float, ...]
    dim: int

    @property
    def size(self) -> int:
        """Number of directions."""
        return len(self.names) * self.dim * (self.dim + 1) // 2

    @property
    def cones(self) -> tuple[int, ...]:
        """Sizes of the covariances, in order."""
        return (self.dim,) * len(self.names)

    @property
    def steps(self) -> Array:
        """Steps for finite differences, small enough to keep every covariance positive."""
        each = self.dim * (self.dim + 1) // 2
        return np.repeat(np.asarray(self.step_sizes), each)

    @property
    def offset(self) -> Array:
        """Where in these directions the scores are taken."""
        eye = np.concatenate([np.ones(self.dim), np.zeros(self.dim * (self.dim - 1) // 2)])
        return np.concatenate([2 * step * eye for step in self.step_sizes])

    def apply(self, params: Values, amount: Array) -> Values:
        """Parameters with each covariance at 2 ``step`` I plus the amount."""
        basis, out = symmetric_basis(self.dim), dict(params)
        for name, own in zip(self.names, (self.offset + amount).reshape(len(self.names), -1), strict=True):
            out[name] = np.linalg.cholesky(np.tensordot(own, basis, 1))
        return out

    def pull(self, gradient: Mapping[str, Array], params: Values) -> Array:
        """Score of the directions; ``params`` are those at which the gradient was taken."""
        basis, parts = symmetric_basis(self.dim), []
        for name in self.names:
            inverse = np.linalg.inv(params[name])
            flat = gradient[name].reshape(self.dim, self.dim, -1)
            by_cov = 0.5 * np.einsum("ijb,jk->ikb", flat, inverse)
            parts.append(np.einsum("pij,ijb->pb", basis, by_cov))
        return np.concatenate(parts).reshape(self.size, *gradient[self.names[0]].shape[2:])


Directions = Linear | Covariances


def _flatten(array: Array, n_axes: int) -> Array:
    return np.asarray(array).reshape(int(np.prod(np.shape(array)[:n_axes])), *np.shape(array)[n_axes:])


def push_directions(
    larger: Account, smaller: Account, params: Values, setup: Setup, rows: Array
) -> Directions:
    """What the larger of two nested accounts frees and the smaller does not.

    Parameters
    ----------
    larger, smaller : Account
        They differ in one source.
    params : dict of arrays
        Of the smaller account.
    rows : array, shape (trial, column)
        Design rows.
    """
    d, n = setup.latent_dim, len(rows)
    noise = float(params["noise"])
    sizes = {0.0: setup.initial_bins * noise, float("inf"): setup.n_reference * noise}
    freed = [
        name for name, h in _FACTORS.items() if larger.allows("trial", h) and not smaller.allows("trial", h)
    ]
    if freed:
        own = tuple(0.1 * sizes[_FACTORS[name]] * np.sqrt(2.0 / n) for name in freed)
        return Covariances(tuple(freed), own, d)
    columns = [
        k
        for k, c in enumerate(setup.columns)
        if larger.allows(c.source, c.persistence_s) and not smaller.allows(c.source, c.persistence_s)
    ]
    basis = np.zeros((len(columns) * d, d, len(setup.columns)))
    steps = np.zeros(len(columns) * d)
    for place, k in enumerate(columns):
        scale = sizes[0.0 if setup.columns[k].persistence_s == 0 else float("inf")]
        for i in range(d):
            basis[place * d + i, i, k] = 1.0
            steps[place * d + i] = 0.1 * np.sqrt(scale / max(float(rows[:, k] @ rows[:, k]), 1.0))
    return Linear({"push": basis}, steps)
