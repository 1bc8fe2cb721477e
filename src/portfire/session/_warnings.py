"""What in a recording may spoil a fit, in plain words."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np

from portfire.session._session import Session
from portfire.session._trials import Trials

CONFOUNDED_R2 = 0.5
_FEW_TRIALS = 10
_FEW_BINS = 5


def collect_warnings(found: dict[str, Any], session: Session, trials: Trials) -> list[str]:
    """Return the warnings about a recording, one sentence each.

    Parameters
    ----------
    found : dict
        What `inspect_session` measured.
    session : Session
        The recording.
    trials : Trials
        The same, binned.
    """
    return [
        *_warn_of_size(found, session, trials),
        *_warn_of_conditions(found, trials),
        *_warn_of_time(found),
        *_warn_of_spikes(session, trials),
    ]


def _warn_of_size(found: dict[str, Any], session: Session, trials: Trials) -> Iterator[str]:
    use, n_trials = found["use"], len(session.trials)
    if use["with_response"] == 0:
        yield "No used trial has a response: nothing can be said of produced intervals, and nothing decoded."
    elif use["with_response"] < len(trials):
        yield (
            f"{len(trials) - use['with_response']} of {len(trials)} used trials have no response; "
            "they count for the state, not for produced intervals."
        )
    if len(found["lapses"]) > 0.05 * n_trials:
        yield f"{len(found['lapses'])} of {n_trials} trials are lapses, more than one in twenty."
    if len(trials) < 0.8 * n_trials:
        yield f"Only {len(trials)} of {n_trials} trials can be used; see what was left out."
    if len(trials.unit) < 0.5 * len(session.units):
        yield f"Only {len(trials.unit)} of {len(session.units)} units can be used; see what was left out."
    if len(trials.unit) < 5:
        yield f"With {len(trials.unit)} units only one or two latent dimensions can be seen."
    if use["bins_median"] < _FEW_BINS:
        yield (
            f"Half of the trials have {use['bins_median']:g} bins of {use['bin_s']:g} s or fewer; "
            "shorter bins show more of the path."
        )


def _warn_of_conditions(found: dict[str, Any], trials: Trials) -> Iterator[str]:
    sizes = np.bincount(trials.condition, minlength=len(trials.conditions))
    few = int(np.sum(sizes < _FEW_TRIALS))
    if trials.sample_s is not None and len(trials.conditions) > len(trials) / 5:
        n_values = len({sample for _, sample in trials.conditions})
        yield (
            f"sample_s has {n_values} different values over {len(trials)} trials, so that few conditions "
            "repeat; give the nominal interval rather than the measured one."
        )
    elif few:
        yield f"{few} of {len(trials.conditions)} conditions have fewer than {_FEW_TRIALS} trials."
    alike: dict[str, list[str]] = {}
    for label in trials.contexts:
        alike.setdefault(label.casefold(), []).append(label)
    for labels in alike.values():
        if len(labels) > 1:
            named = " and ".join(map(repr, labels))
            yield f"Contexts {named} differ only in upper and lower case; are they one?"
    if found["confounding"]["separable"] is False:
        yield (
            "Context and sample interval go together on every trial, so that their pushes cannot be told "
            "apart; leave one of the two sources out."
        )
    if trials.sample_s is not None and trials.responded.any():
        ratio = float(np.median(trials.sample_s) / np.nanmedian(trials.produced_s))
        if not 0.01 < ratio < 100:
            yield (
                f"The median sample interval is {ratio:.3g} times the median produced interval; is sample_s "
                "in seconds?"
            )
    slope = found["interval_slope"]
    if slope is not None and slope["slope"] < -3 * slope["se"]:
        yield (
            f"Produced intervals fall with the sample interval ({slope['slope']:.2f} s a second); "
            "where the subject reproduces it, they rise."
        )


def _warn_of_time(found: dict[str, Any]) -> Iterator[str]:
    drift, n_units = found["drift"], found["use"]["units_used"]
    if (drift["n_units"] >= 2 and drift["share"] > 0.1) or drift["share"] > 0.5:
        yield (
            f"{drift['n_units']} of {n_units} units change their rate over the session "
            f"(rank correlation with trial time, p < {drift['level']:g}); keep the slow drift in the model."
        )
    share = found["confounding"]["context_r2"]
    if share is not None and share > CONFOUNDED_R2:
        yield (
            f"Trial time predicts the context (R² = {share:.2f}): what the context does cannot be told from "
            "slow drift, and its verdict will be undetermined."
        )
    share = found["confounding"]["sample_r2"]
    if share is not None and share > CONFOUNDED_R2:
        yield (
            f"Trial time predicts the sample interval (R² = {share:.2f}): what the interval does is hard to "
            "tell from slow drift."
        )
    interval = found["interval_drift"]
    if interval is not None and interval["p"] is not None and interval["p"] < drift["level"]:
        yield (
            f"Produced intervals drift over the session: {100 * interval['last_third_over_first']:+.0f} % "
            f"from the first to the last third of trials (p = {interval['p']:.2g})."
        )


def _warn_of_spikes(session: Session, trials: Trials) -> Iterator[str]:
    silent = trials.counts.sum(axis=(1, 2), dtype=np.int64) == 0
    if silent.any() and trials.counts.sum(dtype=np.int64) > 5 * len(trials):
        names = ", ".join(np.array(trials.trial)[silent][:8])
        more = ", …" if silent.sum() > 8 else ""
        yield f"No unit fires in {silent.sum()} trials ({names}{more}); was the recording running?"
    stop = trials.set_s + np.where(trials.responded, trials.produced_s, trials.duration_s)
    start = trials.set_s - trials.n_before * trials.bin_s
    reach = int(np.sum(start[1:] < stop[:-1]))
    if reach:
        yield f"The run-up of {reach} trials reaches into the trial before; a shorter one keeps them apart."
    first = min(float(train[0]) for train in session.spikes if len(train))
    if trials.n_before and start[0] < first:
        early = int(np.sum(start < first))
        yield f"The run-up of {early} trials begins before the first spike of the recording."
    twice = [
        unit
        for unit, train in zip(session.units, session.spikes, strict=True)
        if len(train) > 100 and np.mean(np.diff(train) == 0) > 0.01
    ]
    if twice:
        shown = ", ".join(twice[:8]) + (", …" if len(twice) > 8 else "")
        yield (
            f"More than one in a hundred spikes of {len(twice)} units ({shown}) has the same time as the one "
            "before; are spikes listed twice, or times rounded?"
        )
