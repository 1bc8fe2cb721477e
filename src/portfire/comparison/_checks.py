"""Predictive checks: does the fitted model draw sessions that look like the recorded one?"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..errors import PortfireError
from ..session import Trials
from ._gain import holm

Array = NDArray[np.float64]
_SEGMENTS = 4
_LEAST_TRIALS = 8
# What a difference must exceed to matter, beside being beyond chance: a relative error of the rates, a
# difference of log Fano factors, and of correlations.
MATTERS = {
    "rates": 0.15,
    "Fano factors": 0.1,
    "noise correlations": 0.03,
    "single-trial autocorrelation": 0.03,
}


@dataclass(frozen=True)
class Check:
    """One predictive check.

    Parameters
    ----------
    name : str
    p : float
        Share of drawn sessions that are as unlike the other draws as the recorded one is, counting the
        recorded one; adjusted over the checks (Holm).
    recorded, drawn : float
        The check's summary of the recorded session, and its mean over drawn ones.
    difference : float
        How far the two are apart, in the unit of ``matters``.
    matters : float
        What the difference must exceed.
    failed : bool
        Beyond chance, and large enough to matter.
    """

    name: str
    p: float
    recorded: float
    drawn: float
    difference: float
    matters: float
    failed: bool


def cut_windows(trials: Trials) -> NDArray[np.int64]:
    """Bins of each condition, from the set cue on, that nine tenths of its trials run; whole segments."""
    out = np.zeros(len(trials.conditions), dtype=int)
    for c in range(len(out)):
        n_bins = trials.n_bins[trials.condition == c]
        if len(n_bins):
            out[c] = int(np.quantile(n_bins, 0.1)) // _SEGMENTS * _SEGMENTS
    return out


def summarise_activity(trials: Trials, windows: NDArray[np.int64]) -> dict[str, Array]:
    """What the checks compare, over trials that run through their condition's window.

    Returns
    -------
    dict of str to array
        ``rates``: spikes a bin of every condition, segment and unit. ``Fano factors``: mean and SD over
        units of the log of variance over mean of the count in the window. ``noise correlations``: mean
        and root mean square over pairs of units of the correlation of root counts in the window.
        ``single-trial autocorrelation``: mean over units of the correlation of root counts between
        segments one to three apart. All but the rates are within conditions, averaged by trials.

    Raises
    ------
    PortfireError
        If no condition has enough trials.
    """
    before = trials.n_before
    rates, totals, segments, weights = [], [], [], []
    for c, width in enumerate(windows):
        rows = np.flatnonzero((trials.condition == c) & (trials.n_bins >= width))
        if width < _SEGMENTS or not np.any(trials.condition == c):
            continue
        counts = trials.counts[rows, before : before + width].astype(float)
        parts = counts.reshape(len(rows), _SEGMENTS, -1, counts.shape[2]).sum(axis=2)
        # A condition that a draw leaves without trials counts as silent, so that shapes agree.
        mean = parts.mean(axis=0) if len(rows) else np.zeros(parts.shape[1:])
        rates.append(mean / (width / _SEGMENTS))
        if len(rows) >= _LEAST_TRIALS:
            segments.append(parts)
            totals.append(parts.sum(axis=1))
            weights.append(float(len(rows)))
    if not totals:
        raise PortfireError(f"no condition has {_LEAST_TRIALS} trials that run for {_SEGMENTS} bins")
    share = np.array(weights) / np.sum(weights)
    fano = np.zeros(trials.counts.shape[2])
    for w, total in zip(share, totals, strict=True):
        mean = total.mean(axis=0)
        variance = np.maximum(total.var(axis=0, ddof=1), 0.5 / len(total))
        fano += w * np.where(mean > 0, np.log(variance / np.maximum(mean, 1e-12)), 0.0)
    together = np.concatenate([_standardise(np.sqrt(total)) for total in totals])
    pairs = (together.T @ together / len(together))[np.triu_indices(together.shape[1], 1)]
    scaled = np.concatenate([_standardise(np.sqrt(part)) for part in segments])
    lagged = [
        float(np.mean([(scaled[:, k] * scaled[:, k + lag]).mean() for k in range(_SEGMENTS - lag)]))
        for lag in range(1, _SEGMENTS)
    ]
    pairs = pairs if len(pairs) else np.zeros(1)
    return {
        "rates": np.concatenate([rate.ravel() for rate in rates]),
        "Fano factors": np.array([fano.mean(), fano.std()]),
        "noise correlations": np.array([pairs.mean(), np.sqrt(np.mean(pairs**2))]),
        "single-trial autocorrelation": np.array(lagged),
    }


def _standardise(values: Array) -> Array:
    centred = values - values.mean(axis=0)
    return centred / np.maximum(centred.std(axis=0), 1e-9)


def check_predictions(
    recorded: Mapping[str, Array], drawn: Sequence[Mapping[str, Array]], level: float = 0.05
) -> tuple[Check, ...]:
    """Set the recorded session among drawn ones.

    For each check the distance of a session from the others is the mean squared deviation from their mean,
    in units of their SD; p is the rank of the recorded session's distance (posterior predictive checks:
    Gelman, Meng and Stern 1996, Stat. Sin. 6:733, with fitted values in the place of draws, so that p errs
    high; from memory).

    Parameters
    ----------
    recorded : mapping of str to array
        From `summarise_activity`.
    drawn : sequence of such mappings
    level : float, default 0.05
        Of all checks together.

    Raises
    ------
    PortfireError
        If there are fewer than ten draws.
    """
    if len(drawn) < 10:
        raise PortfireError(f"a predictive check needs ten drawn sessions or more; got {len(drawn)}")
    raw = []
    for name in MATTERS:
        everyone = np.stack([recorded[name], *(one[name] for one in drawn)])
        raw.append(_rank(everyone))
    adjusted = holm(raw)
    checks = []
    for (name, matters), p in zip(MATTERS.items(), adjusted, strict=True):
        others = np.stack([one[name] for one in drawn])
        mean, spread = others.mean(axis=0), others.var(axis=0, ddof=1)
        off = recorded[name] - mean
        if name == "rates":
            # What is beyond the scatter of draws, relative to the rates.
            excess = np.sum(off**2 - spread * (1 + 1 / len(drawn)))
            difference = float(np.sqrt(max(excess, 0.0) / np.sum(mean**2)))
            summary = float(recorded[name].mean()), float(mean.mean())
        else:
            difference = float(np.abs(off).max())
            at = int(np.abs(off).argmax())
            summary = float(recorded[name][at]), float(mean[at])
            if name == "Fano factors":
                summary = float(np.exp(recorded[name][0])), float(np.exp(mean[0]))
        failed = bool(p <= level and difference > matters)
        checks.append(Check(name, float(p), *summary, difference, matters, failed))
    return tuple(checks)


def _rank(everyone: Array) -> float:
    """p of the first session: distances of each from all others, in units of their SD."""
    n = len(everyone)
    total, squares = everyone.sum(axis=0), (everyone**2).sum(axis=0)
    mean = (total - everyone) / (n - 1)
    spread = (squares - everyone**2) / (n - 1) - mean**2
    distance = np.mean((everyone - mean) ** 2 / np.maximum(spread, 1e-12 + 1e-6 * mean**2), axis=1)
    return float(np.mean(distance >= distance[0] * (1 - 1e-12)))


def say_failed(checks: Sequence[Check]) -> str | None:
    """A clause that names the checks that failed; None where none did."""
    failed = [c for c in checks if c.failed]
    if not failed:
        return None
    parts = [f"{c.name} ({c.recorded:.2f} recorded, {c.drawn:.2f} drawn from the fit)" for c in failed]
    return f"the fitted model fails the check of {' and of '.join(parts)}"
