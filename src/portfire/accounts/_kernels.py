"""How a push is spread over the time after the set cue."""

from __future__ import annotations

import numpy as np


def push_kernel(persistence_s: float, bin_s: float, n_reference: int, n_time: int) -> np.ndarray:
    """Weights κ_t with which a push enters the state at bin t.

    κ_t ∝ exp(-t·bin/h), with Σκ = 1 over the reference number of bins, the same for all trials: a sum
    over each trial's own length would leak the response time. h = 0 is the initial push, an infinite
    h the sustained one.

    Parameters
    ----------
    persistence_s : float
        h ≥ 0, in seconds.
    bin_s : float
        Bin width, in seconds.
    n_reference : int
        Bins over which the weights sum to one (the session's median trial).
    n_time : int
        Length of the kernel.

    Returns
    -------
    array, shape (n_time,)
    """
    if not persistence_s >= 0:
        raise ValueError(f"persistence must be zero or more seconds, received {persistence_s}.")
    steps = np.arange(max(n_time, n_reference))
    if persistence_s == 0:
        weights = (steps == 0).astype(float)
    elif np.isinf(persistence_s):
        weights = np.ones(len(steps))
    else:
        weights = np.exp(-steps * bin_s / persistence_s)
    return weights[:n_time] / weights[:n_reference].sum()
