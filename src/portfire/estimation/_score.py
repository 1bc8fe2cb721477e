"""Held-out scores of a fit: log marginal likelihoods of single trials."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pandas as pd

from portfire.estimation._fit import Fit
from portfire.estimation._objective import n_threads, to_device
from portfire.inference import (
    Chunk,
    Packed,
    importance,
    lane_keys,
    laplace,
    pack,
    refine,
    start_path,
)
from portfire.session import Trials

N_PAIRS, MORE_PAIRS = 16, 128
LARGEST_SE = 0.05


def sample_loglik(fitted: Fit, packed: Packed, n_pairs: int = N_PAIRS) -> tuple[np.ndarray, np.ndarray]:
    """Importance-sampled log marginal likelihood and its standard error, shape (trial,) each.

    Trials whose standard error is above 0.05 nats get eight times the draws; those whose effective
    sample size then falls below 30 % are scored by the guided particle filter instead.
    """
    device, setup = to_device(fitted.params), fitted.setup

    def one(chunk: Chunk) -> tuple[np.ndarray, np.ndarray]:
        keys = lane_keys(fitted.seed, chunk)
        posterior = laplace(device, setup, chunk, start_path(setup, chunk))
        sampled = importance(device, setup, chunk, posterior, keys, n_pairs)
        real = np.asarray(chunk.weight) > 0
        if np.any((np.asarray(sampled.se) > LARGEST_SE) & real):
            sampled = importance(device, setup, chunk, posterior, keys, MORE_PAIRS)
        sampled, _ = refine(device, setup, chunk, posterior, keys, sampled)
        return np.asarray(sampled.loglik), np.asarray(sampled.se)

    with ThreadPoolExecutor(n_threads()) as pool:
        results = list(pool.map(one, packed.chunks))
    return packed.gather([r[0] for r in results]), packed.gather([r[1] for r in results])


def score_trials(fitted: Fit, trials: Trials) -> pd.DataFrame:
    """A row a trial: trial, loglik, loglik_se (nats), n_spikes, n_bins (after the set cue)."""
    before = trials.n_before
    loglik, se = sample_loglik(fitted, pack(trials, fitted.setup))
    if before:
        run_up = np.zeros_like(trials.mask)
        run_up[:, :before] = True
        known, known_se = sample_loglik(fitted, pack(trials, fitted.setup, run_up))
        loglik, se = loglik - known, np.hypot(se, known_se)
    return pd.DataFrame(
        {
            "trial": list(trials.trial),
            "loglik": loglik,
            "loglik_se": se,
            "n_spikes": trials.counts[:, before:].sum(axis=(1, 2)).astype(int),
            "n_bins": np.asarray(trials.n_bins).astype(int),
        }
    )
