"""One recording: spike times of simultaneously recorded units, and a trial table."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from portfire.errors import InputError
from portfire.session._binning import bin_session
from portfire.session._check import check_clock, check_spikes, check_trials, natural_key
from portfire.session._table import TRIAL_COLUMNS, Table, map_columns
from portfire.session._trials import Trials


@dataclass(frozen=True, eq=False)
class Session:
    """A validated recording; immutable.

    Make one with `read_session` or `Session.from_arrays`, which validate.

    Parameters
    ----------
    units : tuple of str
        Labels, in natural order.
    spikes : tuple of ndarray of float
        Sorted spike times of each unit (s).
    trials : DataFrame
        One row a trial in the order of the set cues: `trial` (str), `set_s`, `response_s` (NaN: none),
        `include` (bool), and where given `end_s`, `sample_s`, `context`, `target_s`; further columns are kept
        and ignored.
    source : str
        Where the session came from.
    digest : str
        `sha256:` and the digest of spikes and trials as used; the same content gives the same digest,
        whatever the file format, the order of rows, or further columns.
    """

    units: tuple[str, ...]
    spikes: tuple[np.ndarray, ...]
    trials: pd.DataFrame
    source: str
    digest: str

    @staticmethod
    def from_arrays(
        spike_times: Mapping[str, Iterable[float]], trials: pd.DataFrame | Mapping[str, Any]
    ) -> Session:
        """Make a session from memory.

        Parameters
        ----------
        spike_times : mapping of str to array_like
            Spike times of each unit (s), in any order. A unit without spikes is kept, and left out when
            binning.
        trials : DataFrame or mapping of str to array_like
            Columns as in a trial table: `set_s`, `response_s` (NaN: no response) and the optional ones.

        Returns
        -------
        Session
            Validated; units in natural order of their labels.

        Raises
        ------
        InputError
            If anything is missing, malformed or contradictory; the message names table, row and column.
        """
        if not isinstance(spike_times, Mapping) or not spike_times:
            raise InputError(
                "spike_times: a mapping of unit label to spike times is needed, with one unit at least."
            )
        trains = {str(unit): _as_train(str(unit), times) for unit, times in spike_times.items()}
        if len(trains) < len(spike_times):
            raise InputError(
                "spike_times: two units have the same label; every unit needs a label of its own."
            )
        counts = [len(train) for train in trains.values()]
        spikes = Table(
            "spike_times",
            {
                "unit": np.repeat(np.array(list(trains), dtype=object), counts),
                "time_s": np.concatenate(list(trains.values())),
            },
            {},
        )
        try:
            frame = pd.DataFrame(trials)
        except ValueError as error:
            raise InputError(
                f"trials: the columns are no table ({error}); give arrays of one length."
            ) from error
        names = map_columns("trials", [str(name) for name in frame.columns], None, TRIAL_COLUMNS)
        columns = {str(name): frame.iloc[:, place].to_numpy() for place, name in enumerate(frame.columns)}
        table = Table("trials", columns, names)
        return build_session(
            spikes, table, "arrays", silent_units=tuple(u for u, t in trains.items() if not len(t))
        )

    def bin(self, bin_s: float = 0.02, before_set_s: float = 0.0, min_rate_hz: float = 0.5) -> Trials:
        """Count spikes on bins that start at the set cue.

        Bin k of a trial is [set + k·bin, set + (k+1)·bin). A spike on an edge belongs to the later bin, and
        the last bin is the last whole one that ends at or before the response (or `end_s`); a time that
        misses an edge by less than 1e-9 of a bin, as sums of decimal fractions do, is on it.

        Parameters
        ----------
        bin_s : float, default 0.02
            Width of a bin (s), 0.0001 or more.
        before_set_s : float, default 0.0
            Run-up before the set cue (s), rounded to whole bins.
        min_rate_hz : float, default 0.5
            Units that fire less within the scored windows (spikes/s) are left out and named.

        Returns
        -------
        Trials
            Used trials in session order. Left out and named are trials with include 0, without response and
            `end_s`, longer than three times their condition's median produced interval (lapses), and shorter
            than one bin.

        Raises
        ------
        InputError
            If a setting is no sensible number, or no trial or no unit is left.
        """
        return bin_session(
            self.units, self.spikes, self.trials, self.digest, bin_s, before_set_s, min_rate_hz
        )


def _as_train(unit: str, times: Iterable[float]) -> np.ndarray:
    try:
        train = np.asarray(times, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise InputError(
            f"spike_times, unit {unit!r}: the times are not all numbers; give seconds."
        ) from error
    if train.ndim != 1:
        raise InputError(
            f"spike_times, unit {unit!r}: the times form a {train.ndim}-d array; give a flat one."
        )
    wrong = np.flatnonzero(~np.isfinite(train))
    if len(wrong):
        raise InputError(
            f"spike_times, unit {unit!r}, row {wrong[0] + 1}: {train[wrong[0]]} is not a finite time; give "
            "seconds."
        )
    return train


def build_session(spikes: Table, trials: Table, source: str, silent_units: tuple[str, ...] = ()) -> Session:
    """Validate two tables and make a session of them.

    Parameters
    ----------
    spikes, trials : Table
        As read.
    source : str
        Where they came from.
    silent_units : tuple of str
        Units that are known but have no spike.

    Raises
    ------
    InputError
        If anything is missing, malformed or contradictory.
    """
    checked = check_trials(trials)
    units, trains = check_spikes(spikes)
    check_clock(trains, checked, spikes.place, trials.place)
    units, trains = units + silent_units, trains + (np.empty(0),) * len(silent_units)
    order = sorted(range(len(units)), key=lambda place: natural_key(units[place]))
    units, trains = tuple(units[place] for place in order), tuple(trains[place] for place in order)
    for train in trains:
        train.setflags(write=False)
    return Session(units, trains, checked, source, compute_digest(units, trains, checked))


def compute_digest(units: tuple[str, ...], spikes: tuple[np.ndarray, ...], trials: pd.DataFrame) -> str:
    """Return `sha256:` and the digest of what a session holds."""
    digest = hashlib.sha256()
    for label, train in zip(units, spikes, strict=True):
        digest.update(f"{label!r}:{len(train)}\n".encode())
        digest.update(np.ascontiguousarray(train, dtype="<f8").tobytes())
    for name in TRIAL_COLUMNS:
        if name not in trials:
            continue
        cells = trials[name]
        digest.update(f"{name}:{len(cells)}\n".encode())
        if name in ("trial", "context"):
            digest.update(repr(list(cells)).encode())
        else:
            values = cells.to_numpy().astype("<f8")
            digest.update(np.where(np.isnan(values), np.nan, values).tobytes())
    return f"sha256:{digest.hexdigest()}"
