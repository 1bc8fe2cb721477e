"""Tables from CSV and Parquet files."""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv as pa_csv
import pyarrow.parquet as pa_parquet

from portfire.errors import InputError, nearest
from portfire.session._table import LARGEST_TIME_S, Table, is_blank, map_columns

_MAGIC = {b"PAR1": "a Parquet file", b"\x89HDF": "an HDF5 file", b"PK\x03\x04": "a zip or spreadsheet file"}


def find_table(folder: Path, stem: str) -> Path:
    """Find the one file of a session folder that holds a table.

    Parameters
    ----------
    folder : Path
        The session folder.
    stem : str
        `spikes` or `trials`.

    Raises
    ------
    InputError
        If neither `stem.csv` nor `stem.parquet` is there, or both are.
    """
    wanted = [folder / f"{stem}.csv", folder / f"{stem}.parquet"]
    present = [path for path in wanted if path.is_file()]
    if len(present) == 2:
        raise InputError(
            f"{folder}: both {stem}.csv and {stem}.parquet are there; keep the one that is meant."
        )
    if not present:
        others = sorted(path.name for path in folder.iterdir())
        near = nearest(f"{stem}.csv", others)
        hint = "" if near is None else f"; the nearest file is {near}"
        raise InputError(f"{folder}: no {stem}.csv or {stem}.parquet in the folder{hint}.")
    return present[0]


def read_table(path: Path, columns: Mapping[str, str] | None, known: Mapping[str, str]) -> Table:
    """Read a whole CSV or Parquet table.

    Parameters
    ----------
    path : Path
        The file.
    columns : mapping of str to str, optional
        Interface name to file name, where they differ.
    known : mapping of str to str
        Names of the interface that this table may hold.

    Raises
    ------
    InputError
        If the file cannot be read as what its name says.
    """
    if path.suffix == ".parquet":
        return _read_parquet(path, columns, known)
    return _parse_csv(path, read_bytes(path), columns, known)


def read_spike_table(path: Path, columns: Mapping[str, str] | None, known: Mapping[str, str]) -> Table:
    """Read a spike table, by the fast reader where nothing is amiss.

    Whatever the fast reader stumbles over goes through the row-by-row reader, which knows the line of a cell.
    """
    if path.suffix == ".parquet":
        return _read_parquet(path, columns, known)
    data = read_bytes(path)
    return _read_fast(path, data, columns, known) or _parse_csv(path, data, columns, known)


def read_bytes(path: Path) -> bytes:
    """Read a text file and refuse a binary one.

    Raises
    ------
    InputError
        If the file cannot be opened, is empty, or is not text.
    """
    try:
        data = path.read_bytes()
    except OSError as error:
        raise InputError(f"{path}: the file cannot be read ({error.strerror}).") from error
    if not data.strip():
        raise InputError(f"{path}: the file is empty; a header row and data rows are needed.")
    for magic, kind in _MAGIC.items():
        if data.startswith(magic):
            raise InputError(
                f"{path}: this is {kind}, not text; save it as CSV in UTF-8, or give it its own suffix."
            )
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise InputError(f"{path}: the text is UTF-16; save it as UTF-8.")
    at = data.find(b"\0")
    if at >= 0:
        line = data.count(b"\n", 0, at) + 1
        raise InputError(f"{path}, line {line}: the file is binary, not text; save it as CSV in UTF-8.")
    return data


def _decode(path: Path, data: bytes) -> str:
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        raise InputError(
            f"{path}, line {line}: byte 0x{data[error.start]:02x} is not UTF-8; save the file as UTF-8."
        ) from error


def _parse_csv(path: Path, data: bytes, columns: Mapping[str, str] | None, known: Mapping[str, str]) -> Table:
    reader = csv.reader(io.StringIO(_decode(path, data), newline=""), strict=True)
    rows: list[list[str]] = []
    lines: list[int] = []
    header: list[str] | None = None
    try:
        for row in reader:
            if not row:
                continue
            if header is None:
                header = [name.strip() for name in row]
                continue
            if len(row) != len(header):
                raise InputError(
                    f"{path}, line {reader.line_num} (data row {len(rows) + 1}): {len(row)} cells where the "
                    f"header has {len(header)}; give every row one cell a column."
                )
            rows.append(row)
            lines.append(reader.line_num)
    except csv.Error as error:
        raise InputError(f"{path}, line {reader.line_num}: the row is not valid CSV ({error}).") from error
    if header is None:
        raise InputError(f"{path}: the file is empty; a header row and data rows are needed.")
    cells = np.array(rows, dtype=object).reshape(len(rows), len(header))
    names = map_columns(str(path), header, columns, known)
    place = {name: index for index, name in enumerate(header)}
    return Table(
        str(path),
        {own: cells[:, place[theirs]] for own, theirs in names.items()},
        names,
        np.array(lines, dtype=int),
    )


def _read_fast(
    path: Path, data: bytes, columns: Mapping[str, str] | None, known: Mapping[str, str]
) -> Table | None:
    mapped = {own: (columns or {}).get(own, own) for own in known}
    kinds = {mapped["unit"]: pa.dictionary(pa.int32(), pa.string()), mapped["time_s"]: pa.float64()}
    header = data.partition(b"\n")[0].removeprefix(b"\xef\xbb\xbf").decode("utf-8", errors="replace")
    if len(kinds) < 2 or any(header.split(",").count(name) > 1 for name in kinds):
        return None
    try:
        table = pa_csv.read_csv(
            pa.BufferReader(data),
            parse_options=pa_csv.ParseOptions(newlines_in_values=b'"' in data),
            convert_options=pa_csv.ConvertOptions(column_types=kinds, include_columns=list(kinds)),
        )
    except (pa.ArrowInvalid, pa.ArrowKeyError):
        return None
    times = table.column(mapped["time_s"]).to_numpy()
    units = table.column(mapped["unit"]).to_pandas()
    if len(times) == 0 or not (np.abs(times) <= LARGEST_TIME_S).all():
        return None
    if units.isna().any() or any(is_blank(label) for label in units.cat.categories):
        return None
    return Table(str(path), {"unit": units.to_numpy(dtype=object), "time_s": times}, mapped)


def _read_parquet(path: Path, columns: Mapping[str, str] | None, known: Mapping[str, str]) -> Table:
    try:
        table = pa_parquet.read_table(path)
    except (pa.ArrowInvalid, pa.ArrowNotImplementedError, OSError) as error:
        reason = str(error).strip().splitlines()[0]
        raise InputError(f"{path}: this is not a readable Parquet file ({reason}).") from error
    names = map_columns(str(path), list(table.column_names), columns, known)
    kept = {own: table.column(theirs).to_pandas().to_numpy() for own, theirs in names.items()}
    return Table(str(path), kept, names)
