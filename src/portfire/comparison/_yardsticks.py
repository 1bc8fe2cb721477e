"""Yardsticks beside the marginal likelihood: the condition's mean rate, and units that were not seen."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter1d
from scipy.special import gammaln

from ..errors import PortfireError
from ..estimation import Fit, sample_loglik
from ..inference import pack
from ..session import Trials
from ._folds import fold_of, training_rows

Array = NDArray[np.float64]
_SMOOTHING_S = 0.05
# Seconds at a unit's mean rate that are added to each bin of a condition's mean.
_PRIOR_S = 0.1
_OF_UNITS = ("readout", "log_rate", "drift", "log_variance")


def _poisson(counts: Array, expected: Array) -> Array:
    return counts * np.log(expected) - expected - gammaln(counts + 1.0)


def null_by_unit(trials: Trials, n_folds: int) -> Array:
    """Held-out log-likelihood of a constant rate from the training trials, shape (trial, unit), nats."""
    before = trials.n_before
    counts, mask = trials.counts[:, before:].astype(float), trials.mask[:, before:]
    fold = fold_of(trials.index, trials.n_session, n_folds)
    out = np.empty((len(trials), counts.shape[2]))
    for j in range(n_folds):
        train = training_rows(trials.index, trials.n_session, n_folds, {j})
        test = fold == j
        expected = (counts[train].sum(axis=(0, 1)) + 0.5) / mask[train].sum()
        out[test] = (_poisson(counts[test], expected) * mask[test][:, :, None]).sum(axis=1)
    return out


def condition_rate_by_unit(trials: Trials, n_folds: int) -> Array:
    """Held-out log-likelihood of the trial-averaged rate of each trial's condition, shape (trial, unit).

    The average is over the training trials of the condition that still run, smoothed (Gaussian, SD 50 ms)
    and drawn towards the unit's mean where few do. It knows the condition and nothing of the trial.
    """
    before = trials.n_before
    counts, mask = trials.counts[:, before:].astype(float), trials.mask[:, before:].astype(float)
    width = _SMOOTHING_S / trials.bin_s
    fold = fold_of(trials.index, trials.n_session, n_folds)
    out = np.empty((len(trials), counts.shape[2]))
    for j in range(n_folds):
        train = training_rows(trials.index, trials.n_session, n_folds, {j})
        mean = (counts[train].sum(axis=(0, 1)) + 0.5) / mask[train].sum()
        for c in np.unique(trials.condition[fold == j]):
            test = np.flatnonzero((fold == j) & (trials.condition == c))
            mine = train[trials.condition[train] == c]
            spikes = gaussian_filter1d(counts[mine].sum(axis=0), width, axis=0, mode="constant")
            running = gaussian_filter1d(mask[mine].sum(axis=0), width, mode="constant")
            prior = _PRIOR_S / trials.bin_s
            expected = (spikes + prior * mean) / (running[:, None] + prior)
            out[test] = (_poisson(counts[test], expected) * mask[test][:, :, None]).sum(axis=1)
    return out


def deal_units(n_units: int, n_groups: int, seed: int) -> list[NDArray[np.int64]]:
    """Units dealt at random to groups that are each predicted from the others.

    Raises
    ------
    PortfireError
        If there are fewer than two units.
    """
    if n_units < 2:
        raise PortfireError(f"unseen units need two units or more; the session has {n_units}")
    order = np.random.default_rng([seed, 61]).permutation(n_units)
    return [np.sort(part) for part in np.array_split(order, min(n_groups, n_units))]


def keep_units(fitted: Fit, trials: Trials, units: NDArray[np.int64]) -> tuple[Fit, Trials]:
    """A fit and trials with some of their units only; their order is kept."""
    params = {
        name: value[units] if name in _OF_UNITS and np.ndim(value) else value
        for name, value in fitted.params.items()
    }
    labels = [fitted.session["units"][k] for k in units]
    part = replace(
        fitted,
        setup=replace(fitted.setup, n_units=len(units)),
        params=params,
        session={**fitted.session, "units": labels},
    )
    kept = replace(trials, counts=trials.counts[:, :, units], unit=tuple(trials.unit[k] for k in units))
    return part, kept


def unseen_units(fitted: Fit, trials: Trials, groups: list[NDArray[np.int64]]) -> Array:
    """log p(counts of a group | counts of the other groups) on each trial, shape (trial, group), nats.

    It is the difference of two marginal likelihoods, of all units and of all but the group.

    Parameters
    ----------
    fitted : Fit
        To other trials.
    trials : Trials
    groups : list of int arrays
        From `deal_units`.
    """
    every = np.arange(fitted.setup.n_units)
    whole, _ = sample_loglik(fitted, pack(trials, fitted.setup))
    out = np.empty((len(trials), len(groups)))
    for g, group in enumerate(groups):
        part, kept = keep_units(fitted, trials, np.setdiff1d(every, group))
        rest, _ = sample_loglik(part, pack(kept, part.setup))
        out[:, g] = whole - rest
    return out
