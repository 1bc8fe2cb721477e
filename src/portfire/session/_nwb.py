"""Tables from an NWB 2.x file."""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from portfire.errors import InputError
from portfire.session._table import LARGEST_TIME_S, TRIAL_COLUMNS, Table, map_columns, parse_labels, suggest


def read_nwb(path: Path, columns: Mapping[str, str] | None) -> tuple[Table, Table, tuple[str, ...]]:
    """Read the spikes and the trials of an NWB file.

    Parameters
    ----------
    path : Path
        The file.
    columns : mapping of str to str, optional
        Interface name to the name in the file, where they differ. `time_s` stands for the ragged column of
        the units table, `spike_times` where nothing else is said. `stop_time` stands in for `end_s` where the
        trials table has none.

    Returns
    -------
    spikes : Table
        One row a spike, as in a spike table.
    trials : Table
        One row a trial.
    silent : tuple of str
        Units without a spike.

    Raises
    ------
    InputError
        If pynwb is not installed, the file is no NWB file, or a table or column is missing.
    """
    try:
        import pynwb
    except ImportError as error:
        raise InputError(
            f"{path}: reading NWB needs the package pynwb, which is not installed; run pip install "
            "'portfire[nwb]'."
        ) from error
    # pynwb warns about cached schemas and optional metadata, which say nothing about spikes or trials.
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            with pynwb.NWBHDF5IO(str(path), "r") as io:
                content = io.read()
                spikes, silent = _read_units(path, content.units, columns)
                return spikes, _read_trials(path, content.trials, columns), silent
        except InputError:
            raise
        except Exception as error:  # pynwb, hdmf and h5py raise errors of many kinds on a broken file
            reason = str(error).strip().splitlines()[0] if str(error).strip() else type(error).__name__
            raise InputError(f"{path}: this is not a readable NWB 2.x file ({reason}).") from error


def _read_units(path: Path, units: Any, columns: Mapping[str, str] | None) -> tuple[Table, tuple[str, ...]]:
    place = f"{path}, units table"
    if units is None or len(units) == 0:
        raise InputError(f"{path}: no units table; a units table with spike_times is needed.")
    found = list(units.colnames)
    wanted = (columns or {}).get("time_s", "spike_times")
    if wanted not in found:
        raise InputError(f"{place}: no column {wanted!r} (the spike times){suggest(wanted, found)}.")
    index = units[wanted]
    if not hasattr(index, "target"):
        raise InputError(
            f"{place}, column {wanted!r}: one value stands for each unit; a list of times is needed."
        )
    ends = np.asarray(index.data[:], dtype=np.int64)
    times = np.asarray(index.target.data[:])
    label = (columns or {}).get("unit", "unit" if "unit" in found else None)
    if label is not None and label not in found:
        raise InputError(f"{place}: no column {label!r} to stand for 'unit'{suggest(label, found)}.")
    cells = units.id[:] if label is None else units[label][:]
    table = Table(place, {"unit": np.asarray(cells, dtype=object)}, {"unit": label or "id"})
    labels: list[str] = []
    for row, text in enumerate(parse_labels(table, "unit")):
        if text is None or text in labels:
            problem = "the label is empty" if text is None else f"unit {text!r} is there twice"
            raise InputError(f"{table.locate(row, 'unit')}: {problem}; every unit needs a label of its own.")
        labels.append(text)
    counts = np.diff(ends, prepend=0)
    unit = np.repeat(np.array(labels, dtype=object), counts)
    times = _check_times(f"{place}, column {wanted!r}", times[: ends[-1]], unit)
    silent = tuple(text for text, count in zip(labels, counts, strict=True) if count == 0)
    return Table(place, {"unit": unit, "time_s": times}, {"unit": label or "id", "time_s": wanted}), silent


def _check_times(place: str, times: np.ndarray, unit: np.ndarray) -> np.ndarray:
    if times.dtype.kind not in "fiu":
        raise InputError(
            f"{place}: the spike times are of type {times.dtype}; numbers in seconds are needed."
        )
    wrong = np.flatnonzero(~(np.abs(times) <= LARGEST_TIME_S))
    if len(wrong):
        first = int(wrong[0])
        nth = first - int(np.flatnonzero(unit == unit[first])[0]) + 1
        raise InputError(
            f"{place}, unit {unit[first]!r}, spike {nth}: {times[first]:g} is no time in seconds; give "
            "finite seconds on the session clock."
        )
    return times


def _read_trials(path: Path, trials: Any, columns: Mapping[str, str] | None) -> Table:
    place = f"{path}, trials table"
    if trials is None or len(trials) == 0:
        raise InputError(f"{path}: no trials table, or an empty one; a trials table with set_s is needed.")
    found = list(trials.colnames)
    names = map_columns(place, found, columns, TRIAL_COLUMNS)
    if "end_s" not in names and "stop_time" in found:
        names["end_s"] = "stop_time"
    kept: dict[str, np.ndarray] = {}
    for own, theirs in names.items():
        column = trials[theirs]
        plain = not hasattr(column, "target") and not hasattr(column, "table")
        if plain:
            kept[own] = _as_cells(column.data[:])
        elif own in TRIAL_COLUMNS:
            raise InputError(f"{place}, column {theirs!r}: a list stands in every row; one value is needed.")
    if "trial" not in kept:
        kept["trial"] = np.asarray(trials.id[:], dtype=object)
        names["trial"] = "id"
    return Table(place, kept, {own: names[own] for own in kept})


def _as_cells(data: Any) -> np.ndarray:
    cells = np.asarray(data)
    if cells.ndim != 1:
        cells = np.empty(len(data), dtype=object)
        cells[:] = [list(row) for row in data]
    return cells
