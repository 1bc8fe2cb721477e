"""How far a smooth function of trial time explains a label or a number."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

_N_COLUMNS = 5


def build_smooth(time_s: np.ndarray, n_columns: int = _N_COLUMNS) -> np.ndarray:
    """Return an orthonormal basis of natural cubic splines of trial time.

    Parameters
    ----------
    time_s : ndarray (trial,)
        Trial times (s).
    n_columns : int, default 5
        Degrees of freedom without the constant; fewer where there are fewer than four trials a column.

    Returns
    -------
    ndarray (trial, column)
        Columns are centred and orthonormal.

    References
    ----------
    Hastie, Tibshirani and Friedman, The Elements of Statistical Learning, 2nd ed. 2009, §5.2.1.
    """
    n_columns = max(1, min(n_columns, len(time_s) // 4))
    span = np.ptp(time_s)
    scaled = (time_s - time_s.min()) / (span if span > 0 else 1.0)
    knots = np.quantile(scaled, np.linspace(0, 1, n_columns + 1))

    def bend(knot: float) -> np.ndarray:
        rise = np.maximum(scaled - knot, 0) ** 3 - np.maximum(scaled - knots[-1], 0) ** 3
        return rise / max(knots[-1] - knot, 1e-12)

    columns = [scaled, *(bend(knot) - bend(knots[-2]) for knot in knots[:-2])]
    design = np.stack(columns, axis=1)
    left, size, _ = np.linalg.svd(design - design.mean(axis=0), full_matrices=False)
    return left[:, size > 1e-10 * max(size[0], 1e-300)]


def explain_by_time(values: Sequence[str] | np.ndarray, time_s: np.ndarray) -> float | None:
    """Return the share of variance that a smooth of trial time explains.

    Parameters
    ----------
    values : sequence of str or ndarray of float (trial,)
        Labels, of which each level counts as an indicator, or numbers.
    time_s : ndarray (trial,)
        Trial times (s).

    Returns
    -------
    float or None
        R², adjusted for the degrees of freedom of the smooth and not below 0; None where `values` do not vary
        or fewer than eight trials are there.
    """
    cells = np.asarray(values)
    levels = np.unique(cells)
    if len(levels) < 2 or len(cells) < 8:
        return None
    numeric = cells.dtype.kind in "fiu"
    target = cells[:, None].astype(float) if numeric else (cells[:, None] == levels[None, :]).astype(float)
    target = target - target.mean(axis=0)
    basis = build_smooth(np.asarray(time_s, dtype=float))
    share = float(np.sum((basis.T @ target) ** 2) / np.sum(target**2))
    n, k = len(cells), basis.shape[1]
    return float(np.clip(1 - (1 - share) * (n - 1) / (n - 1 - k), 0, 1))
