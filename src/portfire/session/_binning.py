"""Spike times to counts on bins that start at the set cue."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import pandas as pd

from portfire.errors import InputError
from portfire.session._trials import Condition, Trials

# Sums such as 0.1 + 0.2 miss an edge by a few units in the last place; that far, a time counts as on the
# edge.
_EDGE = 1e-9
_SMALLEST_BIN_S = 1e-4
_LONGEST_RUN_UP_S = 60.0
_MOST_CELLS = 2**31
LAPSE = "lapse"
_LAPSE_FACTOR = 3.0


def bin_session(
    units: Sequence[str],
    spikes: Sequence[np.ndarray],
    trials: pd.DataFrame,
    digest: str,
    bin_s: float,
    before_set_s: float,
    min_rate_hz: float,
) -> Trials:
    """Bin a validated session; see `Session.bin`."""
    bin_s, n_before, min_rate_hz = _check_settings(bin_s, before_set_s, min_rate_hz)
    rows, trials_left_out = screen_trials(trials, bin_s)
    if len(rows) == 0:
        raise InputError(f"no usable trial with bins of {bin_s:g} s: {summarise_reasons(trials_left_out)}.")
    used = trials.iloc[rows]
    start, stop = used["set_s"].to_numpy(), _observe_until(used)
    n_bins = count_bins(start, stop, bin_s)
    n_time = n_before + int(n_bins.max())
    placed = [_place_spikes(train, start, n_bins, n_before, bin_s) for train in spikes]
    scored_s = float(n_bins.sum()) * bin_s
    n_scored = np.array([np.count_nonzero(bins >= n_before) for _, bins in placed])
    kept, units_left_out = _screen_units(units, n_scored, scored_s, min_rate_hz)
    if len(rows) * n_time * len(kept) > _MOST_CELLS:
        raise InputError(
            f"bin_s = {bin_s:g} gives {len(rows)} trials × {n_time} bins × {len(kept)} units, more than "
            "memory holds; use longer bins, or set include to 0 for the longest trials."
        )
    counts = np.zeros((len(rows), n_time, len(kept)), dtype=np.uint16)
    for place, unit in enumerate(kept):
        row, bins = placed[unit]
        flat = np.bincount(row * n_time + bins, minlength=len(rows) * n_time)
        if flat.max() > np.iinfo(np.uint16).max:
            raise InputError(
                f"unit {units[unit]!r}: {flat.max()} spikes in one bin of {bin_s:g} s; use shorter bins."
            )
        counts[:, :, place] = flat.reshape(len(rows), n_time)
    sample = used["sample_s"].to_numpy() if "sample_s" in used else None
    context = tuple(used["context"]) if "context" in used else None
    condition, conditions = index_conditions(used)
    spread = 0.0 if sample is None else float(np.std(sample))
    varies = sample is not None and spread > 1e-9 * float(np.abs(sample).max())
    return Trials(
        counts=counts,
        mask=np.arange(n_time) < (n_before + n_bins)[:, None],
        n_before=n_before,
        bin_s=bin_s,
        trial=tuple(used["trial"]),
        unit=tuple(units[unit] for unit in kept),
        set_s=start.copy(),
        produced_s=used["response_s"].to_numpy() - start,
        sample_s=None if sample is None else sample.copy(),
        context=context,
        target_s=used["target_s"].to_numpy().copy() if "target_s" in used else None,
        contexts=() if context is None else tuple(sorted(set(context))),
        condition=condition,
        conditions=conditions,
        sample_center=0.0 if sample is None else float(np.mean(sample)),
        sample_scale=spread if varies else 1.0,
        index=np.arange(len(rows)),
        n_session=len(rows),
        session_span=(float(start[0]), float(start[-1])),
        units_left_out=units_left_out,
        trials_left_out=trials_left_out,
        digest=digest,
    )


def _check_settings(bin_s: float, before_set_s: float, min_rate_hz: float) -> tuple[float, int, float]:
    bin_s = _check_number("bin_s", bin_s, "seconds")
    before_set_s = _check_number("before_set_s", before_set_s, "seconds")
    min_rate_hz = _check_number("min_rate_hz", min_rate_hz, "spikes/s")
    if bin_s < _SMALLEST_BIN_S:
        raise InputError(
            f"bin_s = {bin_s:g} is no width for a bin; give seconds, {_SMALLEST_BIN_S:g} or more."
        )
    if not 0 <= before_set_s <= _LONGEST_RUN_UP_S:
        raise InputError(
            f"before_set_s = {before_set_s:g} is no run-up; give seconds, 0 to {_LONGEST_RUN_UP_S:g}."
        )
    if min_rate_hz < 0:
        raise InputError(f"min_rate_hz = {min_rate_hz:g} is no rate; give spikes/s, 0 or more.")
    n_before = math.floor(before_set_s / bin_s + 0.5)
    if n_before == 0 and before_set_s > 0:
        raise InputError(
            f"before_set_s = {before_set_s:g} is below half a bin of {bin_s:g} s; give 0 or a whole bin."
        )
    return bin_s, n_before, min_rate_hz


def _check_number(name: str, value: float, unit: str) -> float:
    wrong = isinstance(value, bool | np.bool_) or not isinstance(
        value, int | float | np.integer | np.floating
    )
    if wrong or not math.isfinite(value):
        raise InputError(f"{name} = {value!r} is no finite number; give {unit}.")
    return float(value)


def screen_trials(trials: pd.DataFrame, bin_s: float) -> tuple[np.ndarray, dict[str, str]]:
    """Choose the trials that are used.

    Parameters
    ----------
    trials : DataFrame
        Trials of a validated session.
    bin_s : float
        Width of a bin (s).

    Returns
    -------
    rows : ndarray of int
        Rows of the used trials.
    left_out : dict of str to str
        Reason for every other trial, by label.
    """
    start, stop = trials["set_s"].to_numpy(), _observe_until(trials)
    length = stop - start
    candidate = trials["include"].to_numpy() & np.isfinite(length)
    median = np.full(len(trials), np.nan)
    rows = np.flatnonzero(candidate)
    condition, conditions = index_conditions(trials.iloc[rows])
    produced = (trials["response_s"].to_numpy() - start)[rows]
    for level in range(len(conditions)):
        members = condition == level
        intervals = produced[members & np.isfinite(produced)]
        if len(intervals):
            median[rows[members]] = np.median(intervals)
    lapse = candidate & (length > _LAPSE_FACTOR * median)
    short = np.zeros(len(trials), dtype=bool)
    short[rows] = count_bins(start[rows], stop[rows], bin_s) < 1
    left_out: dict[str, str] = {}
    for row, label in enumerate(trials["trial"]):
        if not trials["include"].iat[row]:
            left_out[label] = "include is 0"
        elif not candidate[row]:
            left_out[label] = "no response and no end_s"
        elif lapse[row]:
            left_out[label] = (
                f"{LAPSE}: {length[row]:.3g} s, more than three times its condition's median of "
                f"{median[row]:.3g} s"
            )
        elif short[row]:
            left_out[label] = f"{length[row]:.3g} s, shorter than one bin of {bin_s:g} s"
    return np.flatnonzero(candidate & ~lapse & ~short), left_out


def _observe_until(trials: pd.DataFrame) -> np.ndarray:
    stop = trials["response_s"]
    return (stop.fillna(trials["end_s"]) if "end_s" in trials else stop).to_numpy()


def index_conditions(trials: pd.DataFrame) -> tuple[np.ndarray, tuple[Condition, ...]]:
    """Number the combinations of context and sample interval.

    Sample intervals that agree to a microsecond are one interval.

    Returns
    -------
    condition : ndarray of int (trial,)
        Index of each trial's condition.
    conditions : tuple of (str or None, float or None)
        Context and sample interval (s), sorted.
    """
    context = list(trials["context"]) if "context" in trials else [None] * len(trials)
    sample = (
        np.round(trials["sample_s"].to_numpy(), 6).tolist() if "sample_s" in trials else [None] * len(trials)
    )
    pairs: list[Condition] = list(zip(context, sample, strict=True))
    conditions = tuple(sorted(set(pairs), key=lambda pair: (pair[0] or "", pair[1] or 0.0)))
    number = {pair: place for place, pair in enumerate(conditions)}
    return np.array([number[pair] for pair in pairs], dtype=np.intp), conditions


def _slack(time_s: np.ndarray, bin_s: float) -> np.ndarray:
    """Distance from an edge, in bins, within which a time on the session clock counts as on it."""
    return np.maximum(_EDGE, 4 * np.spacing(np.abs(time_s)) / bin_s)


def count_bins(start: np.ndarray, stop: np.ndarray, bin_s: float) -> np.ndarray:
    """Count the whole bins from `start` that end at or before `stop`, both in seconds, (trial,)."""
    return np.floor((stop - start) / bin_s + _slack(stop, bin_s)).astype(np.int64)


def _place_spikes(
    train: np.ndarray, start: np.ndarray, n_bins: np.ndarray, n_before: int, bin_s: float
) -> tuple[np.ndarray, np.ndarray]:
    """Find trial and time index of every spike of one unit that falls into a bin."""
    first = np.searchsorted(train, start - (n_before + 1) * bin_s)
    last = np.searchsorted(train, start + (n_bins + 1) * bin_s)
    n_near = last - first
    row = np.repeat(np.arange(len(start)), n_near)
    nth = np.arange(n_near.sum()) - np.repeat(np.cumsum(n_near) - n_near, n_near)
    time_s = train[np.repeat(first, n_near) + nth]
    bins = np.floor((time_s - start[row]) / bin_s + _slack(time_s, bin_s)).astype(np.int64) + n_before
    inside = (bins >= 0) & (bins < n_before + n_bins[row])
    return row[inside], bins[inside]


def _screen_units(
    units: Sequence[str], n_scored: np.ndarray, scored_s: float, min_rate_hz: float
) -> tuple[list[int], dict[str, str]]:
    kept: list[int] = []
    left_out: dict[str, str] = {}
    for place, label in enumerate(units):
        rate = n_scored[place] / scored_s
        if n_scored[place] == 0:
            left_out[label] = "no spike in the scored windows"
        elif rate < min_rate_hz:
            left_out[label] = f"{rate:.2g} spikes/s, below {min_rate_hz:g}"
        else:
            kept.append(place)
    if not kept:
        raise InputError(
            f"no usable unit: none of {len(units)} fires {min_rate_hz:g} spikes/s or more within the trials "
            f"(the busiest fires {n_scored.max() / scored_s:.2g}); lower min_rate_hz, or check that spikes "
            "and trials are in seconds on one clock."
        )
    return kept, left_out


def summarise_reasons(left_out: dict[str, str]) -> str:
    """Return how many were left out for each kind of reason, as a clause."""
    kinds: dict[str, int] = {}
    for reason in left_out.values():
        kind = "lapse" if reason.startswith(LAPSE) else reason.split(" s, ")[-1]
        kinds[kind] = kinds.get(kind, 0) + 1
    return ", ".join(f"{n} × {kind}" for kind, n in kinds.items())
