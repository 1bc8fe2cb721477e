"""A look at a recording and its behaviour before anything is fitted."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from portfire.session._binning import LAPSE
from portfire.session._intervals import fit_weber_fraction, tabulate_conditions
from portfire.session._session import Session
from portfire.session._smooth import explain_by_time
from portfire.session._trials import Trials
from portfire.session._warnings import collect_warnings

DRIFT_LEVEL = 0.01


def inspect_session(
    session: Session,
    bin_s: float = 0.02,
    before_set_s: float = 0.0,
    min_rate_hz: float = 0.5,
    seed: int = 0,
) -> dict[str, Any]:
    """Check a recording and its behaviour.

    Parameters
    ----------
    session : Session
        The recording.
    bin_s : float, default 0.02
        Width of a bin (s).
    before_set_s : float, default 0.0
        Run-up before the set cue (s).
    min_rate_hz : float, default 0.5
        Units below are left out (spikes/s).
    seed : int, default 0
        Seed of the bootstrap of the Weber fraction.

    Returns
    -------
    dict
        Plain values, ready for JSON. `session`: what is in the recording. `use`: what a job would use.
        `units_left_out`, `trials_left_out`: reason by label. `lapses`: labels of the trials left out as
        lapses. `rates`: a row a used unit: `rate_hz` within the scored windows (spikes/s), `drift_rho` and
        `drift_p`, the rank correlation of its rate, less the mean of each condition, with trial time.
        `drift`: how many units have p below `level`. `behaviour`: per condition and the Weber fraction.
        `interval_slope`: least-squares slope of produced on sample interval within contexts, with its
        standard error. `interval_drift`: rank correlation of the log produced interval, less the mean of each
        condition, with trial time. `confounding`: adjusted R² of context and of sample interval regressed on
        a smooth of trial time, and whether the two can be told apart. `warnings`: sentences.

    Raises
    ------
    InputError
        If a setting is no sensible number, or no trial or no unit is left.
    """
    trials = session.bin(bin_s, before_set_s, min_rate_hz)
    drift_rho, drift_p = measure_unit_drift(trials)
    scored = trials.counts[:, trials.n_before :].sum(axis=(0, 1), dtype=np.int64) / trials.duration_s.sum()
    columns = zip(trials.unit, scored, drift_rho, drift_p, strict=True)
    rates = [
        {"unit": unit, "rate_hz": float(rate), "drift_rho": _plain(rho), "drift_p": _plain(p)}
        for unit, rate, rho, p in columns
    ]
    n_drifting = int(np.sum(drift_p < DRIFT_LEVEL))
    weber, interval = fit_weber_fraction(trials, seed=seed)
    conditions = [
        {str(name): _plain(value) for name, value in row.items()}
        for row in tabulate_conditions(trials).to_dict("records")
    ]
    found: dict[str, Any] = {
        "session": _describe(session),
        "use": {
            "units_used": len(trials.unit),
            "trials_used": len(trials),
            "conditions": len(trials.conditions),
            "with_response": int(trials.responded.sum()),
            "bin_s": trials.bin_s,
            "before_set_s": trials.n_before * trials.bin_s,
            "min_rate_hz": float(min_rate_hz),
            "bins_median": float(np.median(trials.n_bins)),
            "bins_max": int(trials.n_bins.max()),
            "scored_s": float(trials.duration_s.sum()),
            "spikes_scored": int(trials.counts[:, trials.n_before :].sum(dtype=np.int64)),
        },
        "units_left_out": dict(trials.units_left_out),
        "trials_left_out": dict(trials.trials_left_out),
        "lapses": [label for label, reason in trials.trials_left_out.items() if reason.startswith(LAPSE)],
        "rates": rates,
        "drift": {"level": DRIFT_LEVEL, "n_units": n_drifting, "share": n_drifting / len(trials.unit)},
        "behaviour": {
            "conditions": conditions,
            "weber_fraction": weber,
            "weber_ci95": None if interval is None else list(interval),
        },
        "interval_slope": _measure_interval_slope(trials),
        "interval_drift": _measure_interval_drift(trials),
        "confounding": {
            "context_r2": None if trials.context is None else explain_by_time(trials.context, trials.set_s),
            "sample_r2": None if trials.sample_s is None else explain_by_time(trials.sample_s, trials.set_s),
            "separable": _are_separable(trials),
        },
    }
    found["warnings"] = collect_warnings(found, session, trials)
    return found


def _plain(value: Any) -> Any:
    if value is None or value != value:
        return None
    return value.item() if isinstance(value, np.generic) else value


def _describe(session: Session) -> dict[str, Any]:
    start = session.trials["set_s"].dropna().to_numpy()
    pooled_first = min(float(train[0]) for train in session.spikes if len(train))
    pooled_last = max(float(train[-1]) for train in session.spikes if len(train))
    return {
        "source": session.source,
        "digest": session.digest,
        "units": len(session.units),
        "trials": len(session.trials),
        "spikes": int(sum(len(train) for train in session.spikes)),
        "first_spike_s": pooled_first,
        "last_spike_s": pooled_last,
        "first_set_s": float(start[0]),
        "last_set_s": float(start[-1]),
    }


def measure_unit_drift(trials: Trials) -> tuple[np.ndarray, np.ndarray]:
    """Correlate the rate of every unit with trial time.

    Parameters
    ----------
    trials : Trials
        Binned trials.

    Returns
    -------
    rho : ndarray (unit,)
        Spearman's rank correlation of the rate within the scored window, less its condition's mean, with
        trial time; NaN where the rate does not vary.
    p : ndarray (unit,)
        Two-sided, as if trials were independent.
    """
    rate = trials.counts[:, trials.n_before :].sum(axis=1, dtype=np.int64) / trials.duration_s[:, None]
    return rank_correlate(_remove_condition_means(rate, trials.condition), trials.set_s)


def _remove_condition_means(values: np.ndarray, condition: np.ndarray) -> np.ndarray:
    rest = values.astype(float)
    for level in np.unique(condition):
        rest[condition == level] -= rest[condition == level].mean(axis=0)
    return rest


def rank_correlate(values: np.ndarray, time_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return Spearman's rank correlation of each column with `time_s`, and its two-sided p."""
    from scipy.stats import rankdata, t

    n = len(time_s)
    # Differences that are only rounding would otherwise be ranked.
    ranks = rankdata(np.round(values, 9), axis=0) - (n + 1) / 2
    order = rankdata(time_s) - (n + 1) / 2
    size = np.sqrt((ranks**2).sum(axis=0) * (order**2).sum())
    rho = np.divide(order @ ranks, size, out=np.full(size.shape, np.nan), where=size > 0)
    if n < 4:
        return rho, np.full(rho.shape, np.nan)
    with np.errstate(divide="ignore"):
        statistic = rho * np.sqrt((n - 2) / np.maximum(1 - rho**2, 0))
    return rho, 2 * t.sf(np.abs(statistic), n - 2)


def _measure_interval_drift(trials: Trials) -> dict[str, Any] | None:
    rows = np.flatnonzero(trials.responded)
    if len(rows) < 8:
        return None
    rest = _remove_condition_means(np.log(trials.produced_s[rows])[:, None], trials.condition[rows])
    rho, p = rank_correlate(rest, trials.set_s[rows])
    third = len(rows) // 3
    change = float(np.exp(rest[-third:].mean() - rest[:third].mean()) - 1)
    return {"rho": _plain(rho[0]), "p": _plain(p[0]), "last_third_over_first": change}


def _measure_interval_slope(trials: Trials) -> dict[str, Any] | None:
    rows = np.flatnonzero(trials.responded)
    if trials.sample_s is None or len(rows) < 8:
        return None
    frame = pd.DataFrame({"sample": trials.sample_s[rows], "produced": trials.produced_s[rows]})
    group = pd.Series(["" if trials.context is None else trials.context[row] for row in rows])
    rest = frame - frame.groupby(group).transform("mean")
    square = float((rest["sample"] ** 2).sum())
    if square < 1e-12:
        return None
    slope = float((rest["sample"] * rest["produced"]).sum()) / square
    n_free = len(rows) - group.nunique() - 1
    spread = float(((rest["produced"] - slope * rest["sample"]) ** 2).sum()) / max(n_free, 1)
    return {"slope": slope, "se": float(np.sqrt(spread / square))}


def _are_separable(trials: Trials) -> bool | None:
    if trials.context is None or trials.sample_s is None:
        return None
    if len(trials.contexts) < 2 or np.ptp(trials.sample_s) < 1e-9:
        return None
    levels = np.array(trials.context)[:, None] == np.array(trials.contexts)[None, :]
    sample = (trials.sample_s - trials.sample_center) / trials.sample_scale
    return bool(np.linalg.matrix_rank(np.column_stack([levels.astype(float), sample])) > len(trials.contexts))
