"""Held-out ridge predictions of many targets from the same features, baselines within conditions."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

MIN_PER_CONDITION = 3
# Relative to the number of training trials, features having unit variance.
PENALTIES = np.logspace(-3.0, 3.0, 13)


@dataclass(frozen=True)
class HeldOut:
    """Held-out predictions of standardised log intervals; columns are targets.

    Attributes
    ----------
    z : (trial, target) float
        ``(log interval - center) / scale``; zero where not scored.
    predicted : (trial, target) float
        Prediction of z.
    center, scale : (trial, target) float
        Mean and SD over the training trials of the condition, log seconds; NaN where not scored.
    scored : (trial, target) bool
        Whether the condition had enough training trials.
    """

    z: Floats
    predicted: Floats
    center: Floats
    scale: Floats
    scored: Bools

    def r2(self) -> Floats:
        """One minus the residual over the total sum of squares of each target; NaN where nothing varies."""
        residual = ((self.z - self.predicted) ** 2 * self.scored).sum(0)
        total = (self.z**2 * self.scored).sum(0)
        return np.where(total > 0.0, 1.0 - residual / np.where(total > 0.0, total, 1.0), np.nan)


def _sum_by_condition(values: Floats, condition: Ints, n_conditions: int) -> Floats:
    member = (condition == np.arange(n_conditions)[:, None]).astype(float)
    return member @ values


def standardise(
    log_s: Floats, condition: Ints, train: NDArray[np.intp], n_conditions: int
) -> tuple[Floats, Floats, Floats, Bools]:
    """Centre and scale targets by the training trials of each condition.

    Parameters
    ----------
    log_s : (trial, target) float
        Log intervals.
    condition : (trial,) int
        Condition of each trial, below `n_conditions`.
    train : (row,) int
        Training trials.
    n_conditions : int
        Conditions.

    Returns
    -------
    z, center, scale : (trial, target) float
        Standardised targets (zero where not scored), means and SDs (divisor: the count).
    scored : (trial, target) bool
        Whether the condition has three training trials that vary.
    """
    count = np.bincount(condition[train], minlength=n_conditions)[:, None]
    safe = np.maximum(count, 1)
    mean = _sum_by_condition(log_s[train], condition[train], n_conditions) / safe
    deviation = log_s - mean[condition]
    variance = _sum_by_condition(deviation[train] ** 2, condition[train], n_conditions) / safe
    enough = (count >= MIN_PER_CONDITION) & (variance > 1e-16)
    spread = np.sqrt(np.where(enough, variance, 1.0))
    scored = enough[condition]
    return np.where(scored, deviation / spread[condition], 0.0), mean[condition], spread[condition], scored


def _center_features(
    x: Floats, condition: Ints, train: NDArray[np.intp], n_conditions: int
) -> tuple[Floats, Bools, Floats]:
    """Centre features by the training trials of the condition; scale by their pooled SD within conditions.

    A scale for each condition would let a unit with one spike in its training trials weigh a single
    held-out count by tens of SDs.
    """
    count = np.bincount(condition[train], minlength=n_conditions)
    enough = (count >= MIN_PER_CONDITION)[condition]
    mean = _sum_by_condition(x[train], condition[train], n_conditions) / np.maximum(count, 1)[:, None]
    centred = x - mean[condition]
    kept = train[enough[train]]
    spread = np.sqrt((centred[kept] ** 2).mean(0)) if kept.size else np.zeros(x.shape[1])
    varies = spread > 1e-12 * np.maximum(1.0, np.abs(x[train]).max(0, initial=0.0))
    scaled = np.where(varies, centred / np.where(varies, spread, 1.0), 0.0)
    return scaled, enough, 1.0 / np.maximum(count, 1)[condition]


def _fit_ridge(x: Floats, z: Floats, leverage: Floats) -> Floats:
    """Ridge weights (feature, target), each target's penalty chosen by leave-one-out in closed form.

    `leverage` is what the condition means take from each training trial: the residual of a trial left out
    is its residual over one minus its whole leverage. "No weights at all" is one of the choices.
    """
    left, singular, right = np.linalg.svd(x, full_matrices=False)
    projected = left.T @ z
    left_squared = left**2
    best = ((z / (1.0 - leverage[:, None])) ** 2).sum(0)
    weights = np.zeros_like(projected)
    for penalty in PENALTIES * len(x):
        shrink = singular**2 / (singular**2 + penalty)
        room = 1.0 - leverage - left_squared @ shrink
        loss = (((z - left @ (shrink[:, None] * projected)) / room[:, None]) ** 2).sum(0)
        better = loss < best
        best = np.where(better, loss, best)
        ratio = singular / (singular**2 + penalty)
        weights = np.where(better, ratio[:, None] * projected, weights)
    return right.T @ weights


def predict_held_out(
    features_of: Callable[[int], Floats],
    log_s: Floats,
    condition: Ints,
    fold: Ints,
    training: Callable[[int], NDArray[np.intp]],
    n_conditions: int,
) -> HeldOut:
    """Predict every trial from the folds that did not hold it out, for all targets at once.

    Parameters
    ----------
    features_of : callable
        Features (trial, feature) as seen by the fit that did not train on a fold.
    log_s : (trial, target) float
        Log produced intervals paired with the trials' features.
    condition : (trial,) int
        Condition of the trial that the features come from; targets and features are centred by it.
    fold : (trial,) int
        Fold that holds each trial out.
    training : callable
        Rows that train when a fold is held out.
    n_conditions : int
        Conditions of the session.

    Returns
    -------
    HeldOut
        Trials of conditions with fewer than three training trials are not scored and train nothing.
    """
    z_all, predicted = np.zeros_like(log_s), np.zeros_like(log_s)
    center, scale = np.full_like(log_s, np.nan), np.full_like(log_s, np.nan)
    scored_all = np.zeros(log_s.shape, dtype=bool)
    for j in np.unique(fold):
        held, train = np.flatnonzero(fold == j), training(int(j))
        if train.size == 0:
            continue
        z, mean, spread, scored = standardise(log_s, condition, train, n_conditions)
        x, enough, leverage = _center_features(features_of(int(j)), condition, train, n_conditions)
        kept = train[enough[train]]
        usable = scored[held] & enough[held, None]
        scored_all[held] = usable
        if kept.size == 0:
            continue
        weights = _fit_ridge(x[kept], z[kept], leverage[kept])
        z_all[held] = np.where(usable, z[held], 0.0)
        predicted[held] = np.where(usable, x[held] @ weights, 0.0)
        center[held] = np.where(usable, mean[held], np.nan)
        scale[held] = np.where(usable, spread[held], np.nan)
    return HeldOut(z_all, predicted, center, scale, scored_all)
