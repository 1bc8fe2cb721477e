"""Stretches of the latent space, as directions in which an ascent may move.

Were the noise covariance free, every invertible map of the latent space would leave the likelihood
alone. It is held at q·I, so a symmetric map changes the likelihood a little, and only through the noise:
a long curved valley in readout, transition and pushes together. Moving along it by one coordinate is the
remedy of parameter-expanded EM (Liu, Rubin and Wu 1998, Biometrika 85:755, from memory).
"""

from __future__ import annotations

import numpy as np

Values = dict[str, np.ndarray]
_STATES = ("offset", "cue", "push", "initial_factor", "sustained_factor")


def n_stretches(latent_dim: int) -> int:
    """Coordinates of a symmetric matrix."""
    return latent_dim * (latent_dim + 1) // 2


def _symmetric(flat: np.ndarray, latent_dim: int) -> np.ndarray:
    """Symmetric matrix whose Frobenius norm is the norm of ``flat``."""
    i, j = np.triu_indices(latent_dim)
    out = np.zeros((latent_dim, latent_dim))
    out[i, j] = np.where(i == j, flat, flat / np.sqrt(2.0))
    return out + np.triu(out, 1).T


def _coordinates(matrix: np.ndarray) -> np.ndarray:
    """Derivative by the coordinates of `_symmetric` from that by the matrix."""
    i, j = np.triu_indices(len(matrix))
    both = matrix + matrix.T
    return np.where(i == j, 0.5 * both[i, j], both[i, j] / np.sqrt(2.0))


def stretch_map(flat: np.ndarray, latent_dim: int) -> np.ndarray:
    """G = exp(Γ) of the symmetric Γ with these coordinates, shape (D, D)."""
    values, vectors = np.linalg.eigh(_symmetric(flat, latent_dim))
    return (vectors * np.exp(values)) @ vectors.T


def stretch(params: Values, flat: np.ndarray) -> Values:
    """The parameters after x → G x, but for the noise, which stays as it is."""
    d = params["readout"].shape[1]
    forward, back = stretch_map(flat, d), stretch_map(-flat, d)
    return {
        **params,
        **{name: forward @ params[name] for name in _STATES},
        "readout": params["readout"] @ back,
        "transition": forward @ params["transition"] @ back,
    }


def pull_through(stretched: Values, flat: np.ndarray, gradient: Values) -> tuple[Values, np.ndarray]:
    """Gradient by the parameters before `stretch`, and by its coordinates.

    Parameters
    ----------
    stretched : dict of arrays
        What `stretch` returned.
    flat : array, shape (D(D+1)/2,)
    gradient : dict of arrays
        By the stretched parameters.
    """
    d = stretched["readout"].shape[1]
    forward, back = stretch_map(flat, d), stretch_map(-flat, d)
    before = {
        **gradient,
        **{name: forward @ gradient[name] for name in _STATES},
        "readout": gradient["readout"] @ back,
        "transition": forward @ gradient["transition"] @ back,
    }
    by_map = -stretched["readout"].T @ gradient["readout"]
    by_map = by_map + gradient["transition"] @ stretched["transition"].T
    by_map = by_map - stretched["transition"].T @ gradient["transition"]
    for name in _STATES:
        by_map = by_map + gradient[name].reshape(d, -1) @ stretched[name].reshape(d, -1).T
    by_map = by_map @ back
    # Derivative of the exponential of a symmetric matrix, by divided differences (Daleckii and Krein).
    values, vectors = np.linalg.eigh(_symmetric(flat, d))
    gap = 0.5 * (values[:, None] - values[None])
    ratio = np.where(np.abs(gap) < 1e-6, 1.0, np.sinh(gap) / np.where(np.abs(gap) < 1e-6, 1.0, gap))
    divided = np.exp(0.5 * (values[:, None] + values[None])) * ratio
    by_symmetric = vectors @ (divided * (vectors.T @ by_map @ vectors)) @ vectors.T
    return before, _coordinates(by_symmetric)
