"""How pushes are spread over time, where parameters may override the kernels of the setup."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from portfire.dynamics._setup import Setup


def spread_kernels(params: Mapping[str, Any], setup: Setup, n_time: int, xp: Any = np) -> Any:
    """Kernels of every push column and, in the last row, of the trial source's sustained push.

    Without the optional parameter ``decay`` they are the setup's own. With it, row c has the weights
    κ_t ∝ decay_c^t, Σκ = 1 over the reference number of bins: decay = exp(-Δ/h) is 0 for an initial
    and 1 for a sustained push, and a change of it needs no new compiled code.

    Parameters
    ----------
    params : mapping of arrays
        May hold ``decay``, shape (column + 1,).
    xp : module, default numpy
        numpy, or jax.numpy for traced parameters.

    Returns
    -------
    array, shape (column + 1, time)
    """
    if "decay" not in params:
        return np.concatenate([setup.kernels(n_time), setup.border_kernel(n_time)[None]])
    steps = np.arange(max(n_time, setup.n_reference), dtype=float)
    weights = xp.power(xp.asarray(params["decay"])[:, None], steps)
    return weights[:, :n_time] / weights[:, : setup.n_reference].sum(axis=1, keepdims=True)


def decay_of(persistence_s: float, bin_s: float) -> float:
    """Share of a push that is left one bin later, exp(-Δ/h)."""
    return 0.0 if persistence_s == 0 else float(np.exp(-bin_s / persistence_s))
