"""Statistics of produced intervals by condition."""

from __future__ import annotations

import numpy as np
import pandas as pd

from portfire.session._trials import Trials


def tabulate_conditions(trials: Trials) -> pd.DataFrame:
    """Summarise the produced intervals of every condition.

    Parameters
    ----------
    trials : Trials
        Binned trials.

    Returns
    -------
    DataFrame
        One row a condition: `context`, `sample_s` (None where the session has none); `n`, trials with a
        response; `mean_s`; `sd_s`, with n − 1; `cv`, their ratio; and where targets are given `target_s`,
        their mean, and `bias_s`, the mean of produced minus target. Numbers that do not exist are NaN.
    """
    rows = []
    for level, (context, sample) in enumerate(trials.conditions):
        members = (trials.condition == level) & trials.responded
        produced = trials.produced_s[members]
        n = len(produced)
        mean = float(produced.mean()) if n else np.nan
        spread = float(produced.std(ddof=1)) if n > 1 else np.nan
        row = {
            "context": context,
            "sample_s": sample,
            "n": n,
            "mean_s": mean,
            "sd_s": spread,
            "cv": spread / mean,
        }
        if trials.target_s is not None:
            target = trials.target_s[members]
            given = np.isfinite(target)
            row["target_s"] = float(target[given].mean()) if given.any() else np.nan
            row["bias_s"] = float((produced - target)[given].mean()) if given.any() else np.nan
        rows.append(row)
    return pd.DataFrame(rows).astype({"context": object, "sample_s": object})


def fit_weber_fraction(
    trials: Trials, draws: int = 1000, seed: int = 0
) -> tuple[float | None, tuple[float, float] | None]:
    """Fit the slope of within-condition standard deviation on mean.

    Parameters
    ----------
    trials : Trials
        Binned trials.
    draws : int, default 1000
        Bootstrap draws.
    seed : int, default 0
        Seed of the bootstrap.

    Returns
    -------
    weber_fraction : float or None
        Slope of an ordinary least-squares line through the conditions with two responses or more, each with
        the same weight; None where fewer than two such conditions differ in their mean.
    ci95 : tuple of float or None
        Percentile interval of a bootstrap that draws trials anew within every condition.

    References
    ----------
    Getty 1975, Perception & Psychophysics 18:1, for the generalised form of Weber's law, in which spread
    grows along a line (from memory).
    """
    groups = [
        trials.produced_s[(trials.condition == level) & trials.responded]
        for level in range(len(trials.conditions))
    ]
    groups = [group for group in groups if len(group) > 1]
    if len(groups) < 2:
        return None, None
    means = np.array([[group.mean()] for group in groups])
    spreads = np.array([[group.std(ddof=1)] for group in groups])
    if np.ptp(means) <= 1e-12 * np.abs(means).max():
        return None, None
    rng = np.random.default_rng(seed)
    drawn_means, drawn_spreads = [], []
    for group in groups:
        drawn = group[rng.integers(0, len(group), (draws, len(group)))]
        drawn_means.append(drawn.mean(axis=1))
        # A drawn sample varies less than the trials it is drawn from, by (n − 1)/n in variance.
        drawn_spreads.append(drawn.std(axis=1, ddof=1) * np.sqrt(len(group) / (len(group) - 1)))
    slopes = _fit_slope(np.array(drawn_means), np.array(drawn_spreads))
    slopes = slopes[np.isfinite(slopes)]
    low, high = np.quantile(slopes, [0.025, 0.975]) if len(slopes) else (np.nan, np.nan)
    weber = float(_fit_slope(means, spreads)[0])
    return weber, (float(low), float(high)) if np.isfinite(low) else None


def _fit_slope(x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Slope of y on x over the first axis, NaN where x does not vary."""
    x = x - x.mean(axis=0)
    square = (x**2).sum(axis=0)
    return np.divide((x * y).sum(axis=0), square, out=np.full(square.shape, np.nan), where=square > 0)
