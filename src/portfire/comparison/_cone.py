"""Score statistics, one-sided where a direction is a covariance that cannot be negative."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from ..estimation import symmetric_basis

Array = NDArray[np.float64]
_MAX_STEPS = 2000


def score_statistic(score: Array, information: Array, cones: Sequence[int] = ()) -> float:
    """Twice the gain that a quadratic log-likelihood has at its maximum.

    That is max over s of 2 U·s − sᵀ V s, over all s where there are no cones (the score statistic of Rao),
    and over positive semidefinite covariances where there are: the squared length of a projection on the
    cone (Silvapulle and Silvapulle 1995, J. Am. Stat. Assoc. 90:342, from memory).

    Parameters
    ----------
    score : array, shape (direction,)
        U, in the basis of `symmetric_basis` for each covariance.
    information : array, shape (direction, direction)
        V, positive definite.
    cones : sequence of int, default ()
        Rows of each covariance, in order; empty where the directions are free in sign.

    Returns
    -------
    float
        Zero or more.
    """
    if not cones:
        return float(score @ np.linalg.solve(information, score))
    # In coordinates of unit information of each entry the search is well conditioned.
    size = float(np.linalg.eigvalsh(information)[-1])
    at = ahead = np.zeros(len(score))
    moment, best = 1.0, 0.0
    for _ in range(_MAX_STEPS):
        moved = _project(ahead + (score - information @ ahead) / size, cones)
        after = 0.5 * (1 + np.sqrt(1 + 4 * moment**2))
        momentum = (moment - 1) / after
        if (moved - at) @ (ahead - moved) > 0:
            momentum, after = 0.0, 1.0
        gained = float(2 * score @ moved - moved @ information @ moved)
        still = np.linalg.norm(moved - at) <= 1e-9 * (np.linalg.norm(moved) + 1e-300)
        at, ahead, moment, best = moved, moved + momentum * (moved - at), after, max(best, gained)
        if still:
            break
    return best


def _project(entries: Array, cones: Sequence[int]) -> Array:
    out, start = np.empty_like(entries), 0
    for dim in cones:
        stop = start + dim * (dim + 1) // 2
        basis = symmetric_basis(dim)
        values, vectors = np.linalg.eigh(np.tensordot(entries[start:stop], basis, 1))
        positive = (vectors * np.maximum(values, 0.0)) @ vectors.T
        out[start:stop] = np.einsum("pij,ij->p", basis, positive)
        start = stop
    return out
