"""Validation: from tables as read to spikes and trials that can be trusted."""

from __future__ import annotations

import re
from collections.abc import Sequence

import numpy as np
import pandas as pd

from portfire.errors import InputError
from portfire.session._table import (
    SPIKE_COLUMNS,
    TRIAL_COLUMNS,
    Table,
    format_label,
    is_blank,
    parse_labels,
    parse_numbers,
    parse_times,
    require_columns,
    shorten,
)

# Times that were added up differ in their last digits; a nanosecond is far below any recording's resolution.
_SLACK_S = 1e-9


def check_spikes(table: Table) -> tuple[tuple[str, ...], tuple[np.ndarray, ...]]:
    """Check a spike table and part it by unit.

    Parameters
    ----------
    table : Table
        One row a spike: `unit`, `time_s`.

    Returns
    -------
    units : tuple of str
        Labels, in natural order (`n2` before `n10`).
    spikes : tuple of ndarray of float
        Sorted spike times of each unit (s).

    Raises
    ------
    InputError
        If a column is missing, a cell is wrong, or there is no spike.
    """
    require_columns(table, ("unit", "time_s"), SPIKE_COLUMNS)
    if len(table) == 0:
        raise InputError(f"{table.place}: there is no spike below the header; one row a spike is needed.")
    times = parse_times(table, "time_s")
    codes, cells = pd.factorize(np.asarray(table.columns["unit"], dtype=object), use_na_sentinel=False)
    for code, cell in enumerate(cells):
        if is_blank(cell):
            row = int(np.flatnonzero(codes == code)[0])
            raise InputError(
                f"{table.locate(row, 'unit')}: the cell is empty; {SPIKE_COLUMNS['unit']} is needed."
            )
    names = np.array([format_label(cell) for cell in cells], dtype=object)
    labels = sorted(set(names.tolist()), key=natural_key)
    rank = {label: place for place, label in enumerate(labels)}
    unit = np.array([rank[name] for name in names])[codes]
    order = np.lexsort((times, unit))
    cuts = np.cumsum(np.bincount(unit, minlength=len(labels)))[:-1]
    return tuple(labels), tuple(np.split(times[order], cuts))


def natural_key(label: str) -> tuple[tuple[int, int, str], ...]:
    """Return a sorting key that puts `n2` before `n10`."""
    parts = re.split(r"([0-9]+)", label)
    return tuple((0, int(part), part) if part.isdigit() else (1, 0, part) for part in parts if part)


def check_trials(table: Table) -> pd.DataFrame:
    """Check a trial table and put it in session order.

    Parameters
    ----------
    table : Table
        One row a trial, columns as in the interface.

    Returns
    -------
    DataFrame
        Columns `trial` (str), `set_s`, `response_s`, `include` (bool), and of `end_s`, `sample_s`, `context`,
        `target_s` those that hold anything; further columns behind them. Times in seconds.

    Raises
    ------
    InputError
        If a column is missing, a cell is wrong, times contradict each other, trials overlap, labels are there
        twice, or no trial can be used.
    """
    require_columns(table, ("set_s", "response_s"), TRIAL_COLUMNS)
    if len(table) == 0:
        raise InputError(f"{table.place}: there is no trial below the header; one row a trial is needed.")
    include = _parse_include(table)
    columns: dict[str, object] = {"trial": _parse_trial_labels(table)}
    columns["set_s"] = parse_times(table, "set_s", blank_ok=~include)
    columns["response_s"] = parse_times(table, "response_s", blank_ok=True)
    for name in ("end_s", "sample_s", "target_s"):
        if name in table.columns:
            values = parse_times(table, name, blank_ok=True)
            if not np.isnan(values[include]).all():
                columns[name] = values
    if "context" in table.columns:
        labels = parse_labels(table, "context")
        if any(label is not None for label, wanted in zip(labels, include, strict=True) if wanted):
            columns["context"] = np.array(labels, dtype=object)
    columns["include"] = include
    trials = pd.DataFrame(columns)
    _check_order(table, trials)
    _check_covariates(table, trials)
    _check_overlap(table, trials)
    usable = include & (trials["response_s"].notna() | trials.get("end_s", trials["response_s"]).notna())
    if not usable.any():
        raise InputError(
            f"{table.place}: no usable trial; at least one needs include 1 (or no such column) and a "
            "response_s or end_s."
        )
    for name, cells in table.columns.items():
        if name not in TRIAL_COLUMNS:
            trials[name] = _tidy_extra(np.asarray(cells))
    return trials.iloc[np.argsort(trials["set_s"].to_numpy(), kind="stable")].reset_index(drop=True)


def _parse_include(table: Table) -> np.ndarray:
    if "include" not in table.columns:
        return np.ones(len(table), dtype=bool)
    values = parse_numbers(table, "include")
    wrong = ~np.isin(values, (0.0, 1.0))
    if wrong.any():
        row = int(np.flatnonzero(wrong)[0])
        received = "an empty cell" if np.isnan(values[row]) else shorten(table.columns["include"][row])
        raise InputError(f"{table.locate(row, 'include')}: {received} is neither 0 nor 1; give 0 or 1.")
    return values == 1.0


def _parse_trial_labels(table: Table) -> list[str]:
    if "trial" not in table.columns:
        return [str(row + 1) for row in range(len(table))]
    first: dict[str, int] = {}
    for row, label in enumerate(parse_labels(table, "trial")):
        if label is None:
            raise InputError(
                f"{table.locate(row, 'trial')}: the label is empty; every trial needs a label of its own."
            )
        if label in first:
            raise InputError(
                f"{table.locate(row, 'trial')}: trial {label!r} is already in data row {first[label] + 1}; "
                "every trial needs a label of its own."
            )
        first[label] = row
    return list(first)


def _refuse(
    table: Table, wrong: np.ndarray, column: str, message: str, **values: pd.Series | np.ndarray
) -> None:
    rows = np.flatnonzero(wrong)
    if len(rows):
        row = int(rows[0])
        shown = {name: f"{np.asarray(cells)[row]:.9g}" for name, cells in values.items()}
        raise InputError(f"{table.locate(row, column)}: {message.format(**shown)}")


def _check_order(table: Table, trials: pd.DataFrame) -> None:
    include, start = trials["include"].to_numpy(), trials["set_s"].to_numpy()
    response = trials["response_s"].to_numpy()
    _refuse(
        table,
        include & (response <= start),
        "response_s",
        "the response at {response} s is not after the set cue at {start} s; a response comes later than "
        "set_s.",
        response=response,
        start=start,
    )
    if "end_s" not in trials:
        return
    end = trials["end_s"].to_numpy()
    _refuse(
        table,
        include & (end <= start),
        "end_s",
        "observation ends at {end} s, not after the set cue at {start} s; end_s comes later than set_s.",
        end=end,
        start=start,
    )
    _refuse(
        table,
        include & (end < response - _SLACK_S),
        "end_s",
        "observation ends at {end} s, before the response at {response} s; end_s is at or after response_s.",
        end=end,
        response=response,
    )


def _check_covariates(table: Table, trials: pd.DataFrame) -> None:
    include = trials["include"].to_numpy()
    for name in ("sample_s", "target_s"):
        if name in trials:
            values = trials[name].to_numpy()
            _refuse(
                table, values <= 0, name, "{values} is no interval; an interval is above 0 s.", values=values
            )
    for name in ("sample_s", "context"):
        if name in trials:
            _refuse(
                table,
                include & trials[name].isna().to_numpy(),
                name,
                "the cell is empty, while other trials have one; fill it in, or set include to 0 for this "
                "trial.",
            )


def _check_overlap(table: Table, trials: pd.DataFrame) -> None:
    stop = trials["response_s"]
    if "end_s" in trials:
        stop = stop.fillna(trials["end_s"])
    rows = np.flatnonzero(trials["include"].to_numpy())
    start = trials["set_s"].to_numpy()
    rows = rows[np.argsort(start[rows], kind="stable")]
    start, stop_s = start[rows], stop.fillna(trials["set_s"]).to_numpy()[rows]
    reach = np.maximum.accumulate(stop_s)
    clash = (start[1:] < reach[:-1] - _SLACK_S) | (start[1:] == start[:-1])
    if clash.any():
        later = int(np.flatnonzero(clash)[0]) + 1
        earlier = int(np.argmax(stop_s[:later]))
        span = f"{start[earlier]:.9g} to {stop_s[earlier]:.9g} s"
        raise InputError(
            f"{table.locate(int(rows[later]), 'set_s')}: the set cue at {start[later]:.9g} s falls into the "
            f"trial of data row {rows[earlier] + 1}, which runs from {span}; trials must not overlap."
        )


def _tidy_extra(cells: np.ndarray) -> np.ndarray:
    if cells.dtype.kind != "O" or not all(isinstance(cell, str) for cell in cells):
        return cells
    try:
        return np.array([np.nan if is_blank(cell) else float(cell) for cell in cells])
    except ValueError:
        return cells


def check_clock(
    spikes: Sequence[np.ndarray], trials: pd.DataFrame, spike_place: str, trial_place: str
) -> None:
    """Refuse a session whose spikes and trials are not in seconds on one clock.

    Raises
    ------
    InputError
        If spikes and trials hardly overlap, or intervals and rates are both off by a factor that milliseconds
        or samples would give.
    """
    used = trials[trials["include"]]
    start = used["set_s"].to_numpy()
    stop = used["response_s"]
    if "end_s" in used:
        stop = stop.fillna(used["end_s"])
    stop_s = stop.fillna(used["set_s"]).to_numpy()
    pooled = np.concatenate(spikes)
    first, last = float(pooled.min()), float(pooled.max())
    covered = np.mean((stop_s >= first) & (start <= last))
    inside = np.mean((pooled >= start.min()) & (pooled <= stop_s.max()))
    enough = len(pooled) >= 2 * len(used)
    if min(covered, inside) == 0 or (enough and (covered < 0.2 or inside < 0.01)):
        span, trial_span = last - first, float(stop_s.max() - start.min())
        suspect = ""
        if trial_span > 100 * span:
            suspect = f"; {trial_place} looks like milliseconds or samples"
        elif span > 100 * trial_span:
            suspect = f"; {spike_place} looks like milliseconds or samples"
        raise InputError(
            f"{spike_place}, column 'time_s', and {trial_place}, column 'set_s': spikes run from {first:.6g} "
            f"to {last:.6g} and trials from {start.min():.6g} to {stop_s.max():.6g}, so that they hardly "
            f"overlap{suspect}; "
            "both must be in seconds on one clock."
        )
    length = float(np.median(stop_s - start))
    rate = max(len(train) for train in spikes) / max(last - first, 1e-9)
    if length > 30 and rate < 0.3:
        raise InputError(
            f"{trial_place}, column 'response_s': the median trial would last {length:.6g} s and the busiest "
            f"unit fire {rate:.2g} spikes/s; the clock looks like milliseconds or samples, and must be in "
            "seconds."
        )
