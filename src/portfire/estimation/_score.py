"""Held-out scores of a fit: log marginal likelihoods of single trials."""

from __future__ import annotations

import numpy as np
import pandas as pd

from portfire.estimation._fit import Fit
from portfire.estimation._kinds import kind_of
from portfire.inference import Packed, pack
from portfire.session import Trials


def sample_loglik(fitted: Fit, packed: Packed) -> tuple[np.ndarray, np.ndarray]:
    """Log marginal likelihood of every trial and its Monte-Carlo standard error, shape (trial,) each."""
    return kind_of(fitted.setup).loglik(fitted.params, fitted.setup, packed, fitted.seed)


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
