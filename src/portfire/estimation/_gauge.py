"""The canonical form of a latent space, which a fit knows only up to an invertible map."""

from __future__ import annotations

import numpy as np

from portfire.inference import Packed, Path


def canonical_map(readout: np.ndarray, paths: list[Path], packed: Packed) -> np.ndarray:
    """Map to the coordinates with orthonormal readout columns, ordered by explained log-rate variance.

    Parameters
    ----------
    readout : array, shape (unit, D)
    paths : list of Path
        Modes of every chunk; the variance is over their observed bins.
    packed : Packed

    Returns
    -------
    array, shape (D, D)
        G with x_canonical = G x and readout_canonical = readout G⁻¹; each readout column sums to
        zero or more.
    """
    points = []
    for chunk, path in zip(packed.chunks, paths, strict=True):
        points.append(np.moveaxis(np.asarray(path.x), -1, 1)[np.nonzero(np.asarray(chunk.mask))])
    x = np.concatenate(points)
    orthonormal, to_log_rate = np.linalg.qr(readout)
    moved = (x - x.mean(axis=0)) @ to_log_rate.T
    _, axes = np.linalg.eigh(moved.T @ moved)
    axes = axes[:, ::-1]
    signs = np.where((orthonormal @ axes).sum(axis=0) < 0, -1.0, 1.0)
    return (axes * signs).T @ to_log_rate
