"""Sessions from disk."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

from portfire.errors import InputError
from portfire.session._files import find_table, read_spike_table, read_table
from portfire.session._nwb import read_nwb
from portfire.session._session import Session, build_session
from portfire.session._table import SPIKE_COLUMNS, TRIAL_COLUMNS, check_column_map


def read_session(path: str | Path, columns: Mapping[str, str] | None = None) -> Session:
    """Read and validate one recording.

    Parameters
    ----------
    path : str or Path
        A folder with `spikes` and `trials` as `.csv` or `.parquet`, or an NWB 2.x file (`.nwb`).
    columns : mapping of str to str, optional
        Names that differ in the file: `{"set_s": "cue2_time"}`.

    Returns
    -------
    Session
        Validated; see `Session`.

    Raises
    ------
    InputError
        If a table, a column or a value is missing, malformed or contradictory; the message is one sentence
        that names file, row and column, and what would be right. Rows are counted from the first data row, 1;
        for CSV the line of the file is named too, the header being line 1.
    """
    if not isinstance(path, str | Path):
        raise InputError(f"session: {path!r} is no path; give the path of a folder or an NWB file.")
    check_column_map(columns)
    place = Path(path)
    silent: tuple[str, ...] = ()
    if place.is_dir():
        spike_path, trial_path = find_table(place, "spikes"), find_table(place, "trials")
        trials = read_table(trial_path, columns, TRIAL_COLUMNS)
        spikes = read_spike_table(spike_path, columns, SPIKE_COLUMNS)
    elif not place.exists():
        raise InputError(f"{place}: there is no such folder or file; give a session folder or an NWB file.")
    elif place.suffix.lower() == ".nwb":
        spikes, trials, silent = read_nwb(place, columns)
    else:
        raise InputError(
            f"{place}: this is no session; give a folder with spikes and trials, or an NWB 2.x file (.nwb)."
        )
    return build_session(spikes, trials, str(path), silent)
