"""A table as it was read, which knows how to name each of its cells."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from decimal import Decimal

import numpy as np

from portfire.errors import InputError, nearest

SPIKE_COLUMNS: dict[str, str] = {
    "unit": "the label of the unit",
    "time_s": "the time of the spike in seconds",
}
TRIAL_COLUMNS: dict[str, str] = {
    "set_s": "the time of the set cue in seconds",
    "response_s": "the time of the response in seconds, empty where there was none",
    "end_s": "when observation ends, in seconds",
    "sample_s": "the sample interval in seconds",
    "context": "the label of the context",
    "target_s": "the interval asked for, in seconds",
    "include": "0 or 1",
    "trial": "the label of the trial",
}

# Beyond three hundred years no clock counts seconds.
LARGEST_TIME_S = 1e10


@dataclass(frozen=True, eq=False)
class Table:
    """Columns under their own names, with the place that each cell has in its file.

    Parameters
    ----------
    place : str
        Where the table is, as messages name it.
    columns : mapping of str to ndarray, each (row,)
        Cells by the names of the interface; text cells are `str`, blank ones are None.
    names : mapping of str to str
        The name that the file gives a column, where it differs.
    lines : ndarray of int (row,) or None
        Line of each row in a text file; None where the file has no lines.
    """

    place: str
    columns: Mapping[str, np.ndarray]
    names: Mapping[str, str]
    lines: np.ndarray | None = None

    def __len__(self) -> int:
        return len(next(iter(self.columns.values()))) if self.columns else 0

    def locate(self, row: int, column: str | None = None) -> str:
        """Name a cell, or a row, for a message; `row` counts from 0."""
        if self.lines is None:
            where = f"{self.place}, row {row + 1}"
        else:
            where = f"{self.place}, line {self.lines[row]} (data row {row + 1})"
        return where if column is None else f"{where}, column {self.names.get(column, column)!r}"


def map_columns(
    place: str, found: list[str], columns: Mapping[str, str] | None, known: Mapping[str, str]
) -> dict[str, str]:
    """Match the columns of a file to the names of the interface.

    Parameters
    ----------
    place : str
        The table, as messages name it.
    found : list of str
        Column names of the file.
    columns : mapping of str to str, optional
        Interface name to file name, where they differ.
    known : mapping of str to str
        Names of the interface that this table may hold.

    Returns
    -------
    dict of str to str
        Name under which a column is kept, to its name in the file; columns without a meaning keep theirs.

    Raises
    ------
    InputError
        If a mapped column is not in the file, or two columns have one name.
    """
    for name in found:
        if found.count(name) > 1:
            raise InputError(
                f"{place}: column {name!r} is there more than once; give every column its own name."
            )
    mapped = {own: theirs for own, theirs in (columns or {}).items() if own in known}
    for own, theirs in mapped.items():
        if theirs not in found:
            raise InputError(f"{place}: no column {theirs!r} to stand for {own!r}{suggest(theirs, found)}.")
    kept = {name: name for name in found if name not in mapped.values() and name not in mapped}
    return {**kept, **mapped}


def check_column_map(columns: Mapping[str, str] | None) -> None:
    """Refuse a mapping of columns whose names mean nothing.

    Raises
    ------
    InputError
        If a name is not one of the interface or its counterpart is not text.
    """
    known = [*SPIKE_COLUMNS, *TRIAL_COLUMNS]
    for own, theirs in (columns or {}).items():
        if own not in known:
            raise InputError(f"columns: {own!r} is no column of a session{suggest(own, known)}.")
        if not isinstance(theirs, str) or not theirs:
            raise InputError(f"columns: {own!r} is mapped to {theirs!r}; give the name of a column as text.")


def suggest(word: str, known: list[str]) -> str:
    """Return a clause that names the nearest known word, or all of them where none is near."""
    near = nearest(word, known)
    if near is not None:
        return f"; the nearest is {near!r}"
    return f"; there is {', '.join(repr(name) for name in known[:12])}" if known else ""


def require_columns(table: Table, names: tuple[str, ...], known: Mapping[str, str]) -> None:
    """Refuse a table that lacks a column.

    Raises
    ------
    InputError
        If one of `names` is missing; the message names the nearest column there is.
    """
    head = table.place if table.lines is None else f"{table.place}, line 1"
    for name in names:
        if name in table.columns:
            continue
        found = [str(table.names.get(column, column)) for column in table.columns if column not in known]
        if len(table.columns) == 1 and found and any(mark in found[0] for mark in ";\t"):
            raise InputError(
                f"{head}: no column {name!r}, for the cells are not parted by commas; use commas."
            )
        raise InputError(f"{head}: no column {name!r} ({known[name]}){suggest(name, found)}.")


def parse_times(table: Table, column: str, blank_ok: bool | np.ndarray = False) -> np.ndarray:
    """Read a column of seconds.

    Parameters
    ----------
    table : Table
        The table; it has the column.
    column : str
        Name of the column.
    blank_ok : bool or ndarray of bool (row,), default False
        Rows that may be blank.

    Returns
    -------
    ndarray of float (row,)
        Seconds, NaN where blank.

    Raises
    ------
    InputError
        If a cell is no number, not finite, absurdly large, or blank where it must not be.
    """
    values = parse_numbers(table, column)
    blank = np.isnan(values) & ~np.broadcast_to(blank_ok, values.shape)
    if blank.any():
        row = int(np.flatnonzero(blank)[0])
        raise InputError(
            f"{table.locate(row, column)}: the cell is empty or NaN; a time in seconds is needed."
        )
    huge = np.abs(values) > LARGEST_TIME_S
    if huge.any():
        row = int(np.flatnonzero(huge)[0])
        raise InputError(
            f"{table.locate(row, column)}: {values[row]:.6g} is too large for a time in seconds; "
            "convert the clock to seconds from the start of the session."
        )
    return values


def parse_numbers(table: Table, column: str) -> np.ndarray:
    """Read a column of finite numbers; blank cells become NaN.

    Raises
    ------
    InputError
        If a cell is no number or is infinite.
    """
    cells = np.asarray(table.columns[column])
    if cells.ndim != 1:
        raise InputError(
            f"{table.place}, column {column!r}: a list stands in every row; one number is needed."
        )
    if cells.dtype.kind in "fiu":
        values = cells.astype(np.float64)
    else:
        values = np.array(
            [_parse_number(table, row, column, cell) for row, cell in enumerate(cells)], dtype=float
        )
    infinite = np.isinf(values)
    if infinite.any():
        row = int(np.flatnonzero(infinite)[0])
        raise InputError(f"{table.locate(row, column)}: the value is infinite; a finite number is needed.")
    return values


def _parse_number(table: Table, row: int, column: str, cell: object) -> float:
    if is_blank(cell):
        return math.nan
    where = table.locate(row, column)
    if isinstance(cell, str):
        text = cell.strip()
        try:
            value = float(text) if "_" not in text else None
        except ValueError:
            value = None
        if value is None:
            hint = "use a decimal point" if "," in text else "a plain number is needed"
            raise InputError(f"{where}: {shorten(cell)} is not a number; {hint}.")
        if math.isnan(value):
            raise InputError(f"{where}: {shorten(cell)} is no number; leave a cell without a value empty.")
        return value
    if isinstance(cell, bool | np.bool_):
        return float(cell)
    if isinstance(cell, int | float | np.integer | np.floating | Decimal):
        return float(cell)
    raise InputError(f"{where}: {shorten(cell)} is not a number; a plain number is needed.")


def parse_labels(table: Table, column: str) -> list[str | None]:
    """Read a column of labels as text without surrounding blanks; blank cells become None.

    Whole numbers that a file holds as floats lose their decimals, so that the label is the same whatever the
    format of the file.
    """
    cells = np.asarray(table.columns[column], dtype=object)
    return [None if is_blank(cell) else format_label(cell) for cell in cells]


def format_label(cell: object) -> str:
    """Return a label as text; 3.0 becomes `3`."""
    if isinstance(cell, float | np.floating) and float(cell).is_integer():
        return str(int(cell))
    if isinstance(cell, bytes):
        return cell.decode("utf-8", errors="replace").strip()
    return str(cell).strip()


def is_blank(cell: object) -> bool:
    """Say whether a cell holds nothing: None, NaN, or text of blanks only."""
    if cell is None:
        return True
    if isinstance(cell, str):
        return not cell.strip()
    if isinstance(cell, float | np.floating):
        return math.isnan(cell)
    return type(cell).__name__ in ("NAType", "NaTType")


def shorten(cell: object) -> str:
    """Return a cell as a message shows it, cut after forty characters."""
    text = repr(cell.item() if isinstance(cell, np.generic) else cell)
    return text if len(text) <= 42 else text[:40] + "…"
