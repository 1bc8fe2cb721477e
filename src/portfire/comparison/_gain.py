"""Held-out differences between two accounts, with standard errors, and Holm's adjustment."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import stats

from ..errors import PortfireError


@dataclass(frozen=True)
class Gain:
    """What held-out trials gain from the parameters that one account has and another lacks.

    Attributes
    ----------
    nats_per_trial : float
        Mean held-out difference plus the cost of estimating the parameters, nats a trial.
    se : float
        Standard error, nats a trial.
    ci95 : (float, float)
        Two-sided 95 % interval, nats a trial.
    """

    nats_per_trial: float
    se: float
    ci95: tuple[float, float]


class ResampledT(NamedTuple):
    """Corrected resampled t statistic, its one-sided p and its degrees of freedom."""

    t: float
    p: float
    df: int


def paired_difference(
    larger: ArrayLike,
    smaller: ArrayLike,
    trial_larger: Sequence[str],
    trial_smaller: Sequence[str],
    n_spikes_larger: ArrayLike,
    n_spikes_smaller: ArrayLike,
) -> NDArray[np.float64]:
    """Per-trial difference of two held-out scores, refused unless both scored the same data.

    Parameters
    ----------
    larger, smaller : (trial,) float
        Log-likelihoods, nats.
    trial_larger, trial_smaller : sequence of str
        Labels of the trials, in the order of the scores.
    n_spikes_larger, n_spikes_smaller : (trial,) int
        Spikes that each score covers.

    Returns
    -------
    (trial,) float
        ``larger - smaller``, nats.

    Raises
    ------
    PortfireError
        If trials, spikes or lengths differ, or a score is not finite.
    """
    a, b = np.asarray(larger, dtype=float), np.asarray(smaller, dtype=float)
    spikes_a, spikes_b = np.asarray(n_spikes_larger), np.asarray(n_spikes_smaller)
    if not len(a) == len(b) == len(trial_larger) == len(trial_smaller) == len(spikes_a) == len(spikes_b):
        raise PortfireError(
            f"two accounts were scored on {len(a)} and {len(b)} trials; a comparison needs the same trials"
        )
    for i, (left, right) in enumerate(zip(trial_larger, trial_smaller, strict=True)):
        if left != right:
            raise PortfireError(
                f"row {i} of two scores is trial {left!r} in one and {right!r} in the other; "
                "a comparison needs the same trials in the same order"
            )
    unequal = np.flatnonzero(spikes_a != spikes_b)
    if unequal.size:
        i = int(unequal[0])
        raise PortfireError(
            f"trial {trial_larger[i]!r} was scored on {spikes_a[i]} spikes by one account and on "
            f"{spikes_b[i]} by the other; a comparison needs the same spikes"
        )
    difference = a - b
    _check_finite(difference, trial_larger)
    return difference


def _check_finite(values: NDArray[np.float64], labels: Sequence[str] | None = None) -> None:
    bad = np.flatnonzero(~np.isfinite(values))
    if bad.size:
        i = int(bad[0])
        name = f"trial {labels[i]!r}" if labels is not None else f"row {i}"
        raise PortfireError(f"the score difference of {name} is {values[i]}; it must be a finite number")


def gain(diff_per_trial: ArrayLike, n_params: float, n_train: float, n_folds: int) -> Gain:
    """Mean held-out gain of an account over one that it contains.

    A useless parameter costs about ``1 / (2 n_train)`` nats on each held-out trial, so the raw difference
    is centred below zero where the parameters do nothing; ``n_params / (2 n_train)`` is added back.

    The standard error is ``s sqrt((1 + J / (J - 1)) / n)`` with s the SD over trials. It is the variance
    ``s_f² (1 / J + n_test / n_train)`` of Nadeau & Bengio for J disjoint folds, where
    ``n_test / n_train = 1 / (J - 1)`` and the variance of a fold mean is ``s_f² = s² J / n``: the second
    term is for the training sets that the folds share. It is about ``sqrt(2)`` times the naive one.

    Parameters
    ----------
    diff_per_trial : (trial,) float
        Held-out score of the larger account minus the smaller, nats, of every scored trial once.
    n_params : float
        Free parameters k of the larger account that the smaller lacks; a covariance at its boundary counts
        for less than its entries (`expected_cost`).
    n_train : float
        Mean number of training trials of a fold.
    n_folds : int
        Folds J.

    Returns
    -------
    Gain
        With a 95 % interval from t quantiles on ``n - 1`` degrees of freedom.

    Raises
    ------
    PortfireError
        If there are fewer than two trials or folds, a difference is not finite, or a count is negative.

    References
    ----------
    Nadeau & Bengio (2003), Inference for the generalization error, Machine Learning 52:239-281.
    """
    diff = np.asarray(diff_per_trial, dtype=float)
    if diff.ndim != 1 or diff.size < 2:
        raise PortfireError(
            f"a gain needs one difference a trial, of two trials or more; got shape {diff.shape}"
        )
    if n_folds < 2 or n_train <= 0 or n_params < 0:
        raise PortfireError(
            f"a gain needs n_folds >= 2, n_train > 0 and n_params >= 0; got {n_folds}, {n_train}, {n_params}"
        )
    _check_finite(diff)
    n = diff.size
    mean = float(diff.mean()) + n_params / (2.0 * n_train)
    se = float(diff.std(ddof=1) * np.sqrt((1.0 + n_folds / (n_folds - 1.0)) / n))
    half = float(stats.t.ppf(0.975, n - 1)) * se
    return Gain(mean, se, (mean - half, mean + half))


def corrected_resampled_t(diff: ArrayLike, n_train: int, n_test: int) -> ResampledT:
    """Corrected resampled t test over the means of resampled splits, in its original form.

    Parameters
    ----------
    diff : (split,) float
        Score difference of each split.
    n_train, n_test : int
        Trials that train and that score a split.

    Returns
    -------
    ResampledT
        ``t = mean / sqrt(s² (1 / n_splits + n_test / n_train))``, the one-sided p of a t at least as large,
        and ``n_splits - 1`` degrees of freedom.

    Raises
    ------
    PortfireError
        If there are fewer than two splits, or the differences do not vary.

    References
    ----------
    Nadeau & Bengio (2003), Inference for the generalization error, Machine Learning 52:239-281.
    """
    d = np.asarray(diff, dtype=float)
    if d.size < 2:
        raise PortfireError(f"a resampled t test needs two or more splits; got {d.size}")
    if not np.ptp(d) > 0.0:
        raise PortfireError("a resampled t test needs differences that vary; all are equal or not finite")
    t = float(d.mean() / np.sqrt(d.var(ddof=1) * (1.0 / d.size + n_test / n_train)))
    return ResampledT(t, float(stats.t.sf(t, d.size - 1)), d.size - 1)


def holm(p: ArrayLike) -> NDArray[np.float64]:
    """Adjust p values for the number of tests, without assumptions on their dependence.

    Parameters
    ----------
    p : (test,) float
        Raw p values.

    Returns
    -------
    (test,) float
        Adjusted p values, in the order received, at most 1.

    Raises
    ------
    PortfireError
        If a p value is not in [0, 1].

    References
    ----------
    Holm (1979), A simple sequentially rejective multiple test procedure, Scand. J. Statist. 6:65-70.
    """
    raw = np.asarray(p, dtype=float)
    if not np.all((raw >= 0.0) & (raw <= 1.0)):
        raise PortfireError(f"p values must lie in [0, 1]; got {raw[~((raw >= 0.0) & (raw <= 1.0))][0]}")
    order = np.argsort(raw, kind="stable")
    adjusted = np.empty_like(raw)
    adjusted[order] = np.minimum(1.0, np.maximum.accumulate(raw[order] * np.arange(raw.size, 0, -1)))
    return adjusted
