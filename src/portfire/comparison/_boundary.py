"""p value of a likelihood ratio whose extra parameters include covariances at their boundary, zero."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache
from math import comb, gamma

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from ..errors import PortfireError

MAX_COV_DIM = 8


def _signed_moment(i: int, j: int) -> float:
    """∬ over x, y > 0 of sgn(y − x) xⁱ yʲ exp(−(x² + y²) / 2), in polar coordinates."""
    n_nodes = 24
    node, weight = np.polynomial.legendre.leggauss(n_nodes)
    low = (node + 1.0) * np.pi / 8.0
    high = low + np.pi / 4.0
    integrand = np.sin(high) ** j * np.cos(high) ** i - np.sin(low) ** j * np.cos(low) ** i
    angle = float(weight @ integrand) * np.pi / 8.0
    return 2.0 ** ((i + j) / 2.0) * gamma((i + j) / 2.0 + 1.0) * angle


def _half_moment(i: int) -> float:
    """∫ over x > 0 of xⁱ exp(−x² / 2)."""
    return 2.0 ** ((i - 1) / 2.0) * gamma((i + 1) / 2.0)


def _skew_entry(i: int, j: int) -> NDArray[np.float64]:
    """Coefficients in s of ∬ sgn(y − x) xⁱ yʲ w(x) w(y), where w has scale 1 below zero and s above."""
    entry = np.zeros(i + j + 3)
    entry[i + j + 2] += _signed_moment(i, j)
    entry[0] -= (-1.0) ** (i + j) * _signed_moment(i, j)
    crossed = _half_moment(i) * _half_moment(j)
    entry[j + 1] += (-1.0) ** i * crossed
    entry[i + 1] -= (-1.0) ** j * crossed
    return entry


def _border_entry(i: int) -> NDArray[np.float64]:
    """Coefficients in s of ∫ xⁱ w(x)."""
    entry = np.zeros(i + 2)
    entry[0] = (-1.0) ** i * _half_moment(i)
    entry[i + 1] += _half_moment(i)
    return entry


@cache
def _weights_of_cone(dim: int) -> tuple[float, ...]:
    n_free = dim * (dim + 1) // 2
    order = dim + dim % 2

    def entry(i: int, j: int) -> NDArray[np.float64]:
        return _border_entry(i) if j == dim else _skew_entry(i, j)

    @cache
    def pfaffian(rows: tuple[int, ...]) -> tuple[float, ...]:
        if not rows:
            return (1.0,)
        total = np.zeros(n_free + 1)
        for k in range(1, len(rows)):
            rest = np.asarray(pfaffian(rows[1:k] + rows[k + 1 :]))
            term = np.convolve(entry(rows[0], rows[k]), rest)[: n_free + 1]
            total[: len(term)] += (-1.0) ** (k + 1) * term
        return tuple(total)

    weights = np.asarray(pfaffian(tuple(range(order))))
    weights = weights / weights.sum()
    return tuple((weights + weights[::-1]) / 2.0)


def cone_weights(dim: int) -> NDArray[np.float64]:
    """Weights of the chi-bar-square distribution of a covariance tested against zero.

    Near zero the log-likelihood is quadratic in the covariance S, and the statistic is the squared length
    of the projection of a symmetric Gaussian matrix (unit variance on the diagonal, half beside it, so
    that the metric is Frobenius) on the cone of positive semidefinite matrices. Its law is a mixture of
    χ²_j with the intrinsic volumes of that cone as weights. They follow, without simulation, from the
    joint density of the eigenvalues: scaling the positive ones by s turns the normalising integral into
    the generating polynomial ``sum_j v_j s**j``, which is a Pfaffian (de Bruijn).

    The metric is exactly Frobenius (up to a linear map of S that keeps the cone) where all trials carry
    the same information on the push and no other estimated parameter is correlated with S; otherwise the
    law is an approximation, for which the bootstrap is the remedy.

    Parameters
    ----------
    dim : int
        Rows D of the covariance, 1 to 8.

    Returns
    -------
    (degrees,) float
        Weight of χ²_j, j = 0 … D(D + 1)/2; they sum to 1. D = 1: (½, ½).

    Raises
    ------
    PortfireError
        If `dim` is out of range.

    References
    ----------
    Self & Liang (1987), J. Am. Stat. Assoc. 82:605-610; Shapiro (1988), Int. Stat. Rev. 56:49-62 (chi-bar-
    square laws); de Bruijn (1955), J. Indian Math. Soc. 19:133-151 (the integral). From memory.
    """
    if not 1 <= dim <= MAX_COV_DIM:
        raise PortfireError(f"a covariance at its boundary has 1 to {MAX_COV_DIM} dimensions; got {dim}")
    return np.asarray(_weights_of_cone(dim))


def mixture_weights(n_fixed: int, cov_dims: Sequence[int] = ()) -> NDArray[np.float64]:
    """Weights of χ²_j for a contrast of fixed effects and covariances that do not inform each other.

    Parameters
    ----------
    n_fixed : int
        Fixed effects k, each free in sign.
    cov_dims : sequence of int, default ()
        Rows of each covariance that is zero in the smaller account.

    Returns
    -------
    (degrees,) float
        Weight of χ²_j, j = 0 … k + Σ D(D + 1)/2.

    Raises
    ------
    PortfireError
        If there is nothing to test.
    """
    if n_fixed < 0 or (n_fixed == 0 and not cov_dims):
        raise PortfireError(f"a likelihood ratio needs parameters to test; got {n_fixed} and no covariance")
    weights = np.ones(1)
    for dim in cov_dims:
        weights = np.convolve(weights, cone_weights(dim))
    return np.concatenate([np.zeros(n_fixed), weights])


def likelihood_ratio_p(stat: float, n_fixed: int, cov_dims: Sequence[int] = ()) -> float:
    """Probability under the smaller account of a likelihood ratio at least as large.

    Parameters
    ----------
    stat : float
        ``2 (ℓ_larger − ℓ_smaller)`` on the same trials; zero or below gives 1.
    n_fixed : int
        Fixed effects that the smaller account lacks.
    cov_dims : sequence of int, default ()
        Rows of each covariance that is zero in the smaller account.

    Returns
    -------
    float
        ``sum_j v_j P(χ²_j >= stat)``, where χ²_0 is a point at zero.

    Raises
    ------
    PortfireError
        If there is nothing to test, or the statistic is not finite.
    """
    weights = mixture_weights(n_fixed, cov_dims)
    if not np.isfinite(stat):
        raise PortfireError(f"a likelihood ratio must be a finite number; got {stat}")
    if stat <= 0.0:
        return 1.0
    degrees = np.arange(1, weights.size)
    return min(1.0, float(weights[1:] @ stats.chi2.sf(stat, degrees)))


def expected_cost(n_fixed: int, cov_dims: Sequence[int] = ()) -> float:
    """Parameters that a contrast costs on new trials where it has nothing to find: the mean of the mixture.

    A covariance at its boundary is estimated as zero in about half of its directions, and costs nothing
    there: D(D + 1)/4 instead of D(D + 1)/2.

    Parameters
    ----------
    n_fixed : int
        Fixed effects that the smaller account lacks.
    cov_dims : sequence of int, default ()
        Rows of each covariance that is zero in the smaller account.

    Returns
    -------
    float
        ``sum_j j v_j``.
    """
    weights = mixture_weights(n_fixed, cov_dims)
    return float(weights @ np.arange(weights.size))


def count_parameters(n_fixed: int, cov_dims: Sequence[int] = ()) -> int:
    """Free parameters of a contrast: fixed effects and the distinct entries of each covariance."""
    return n_fixed + sum(comb(dim + 1, 2) for dim in cov_dims)
