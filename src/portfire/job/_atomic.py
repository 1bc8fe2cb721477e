"""Files that appear whole or not at all."""

from __future__ import annotations

import json
import math
import os
import uuid
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr


@contextmanager
def replacing(path: Path) -> Iterator[Path]:
    """Yield a path in the same folder to write to; it becomes `path` when the block ends well.

    The new content is on disk before the old is replaced, so that a reader, or a power cut, finds
    one or the other.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    draft = path.parent / f".{path.name}-{uuid.uuid4().hex[:8]}{path.suffix}"
    try:
        yield draft
        sync_path(draft)
        os.replace(draft, path)
        sync_folder(path.parent)
    finally:
        draft.unlink(missing_ok=True)


def write_json_atomic(path: Path, value: Any) -> None:
    """Write `value` as UTF-8 JSON; numbers that are not finite become null.

    Raises
    ------
    TypeError
        If a value has no JSON form.
    """
    text = json.dumps(finite(value), indent=1, ensure_ascii=False, allow_nan=False)
    with replacing(path) as draft:
        draft.write_text(text + "\n", encoding="utf-8")


def write_table_atomic(path: Path, table: pd.DataFrame) -> None:
    """Write a table as Parquet, without its index; numbers that are not finite become null."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    columns = table.copy()
    for name in columns.columns:
        if columns[name].dtype.kind == "f":
            values = columns[name].to_numpy(dtype=float, na_value=np.nan)
            columns[name] = np.where(np.isfinite(values), values, np.nan)
    arrow = pa.Table.from_pandas(columns, preserve_index=False)
    with replacing(path) as draft:
        pq.write_table(arrow, draft)


def write_dataset_atomic(path: Path, dataset: xr.Dataset) -> None:
    """Write labelled arrays as netCDF-4."""
    with replacing(path) as draft:
        dataset.to_netcdf(draft, engine="h5netcdf")


def finite(value: Any) -> Any:
    """Turn a value into what JSON holds: NumPy values into plain ones, NaN and infinity into None.

    Raises
    ------
    TypeError
        If a value has no JSON form.
    """
    if isinstance(value, Mapping):
        return {_name(name): finite(part) for name, part in value.items()}
    if isinstance(value, np.ndarray | list | tuple):
        return [finite(part) for part in value]
    if isinstance(value, np.generic):
        return finite(value.item())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, os.PathLike):
        return str(value)
    if value is None or isinstance(value, str | bool | int):
        return value
    raise TypeError(f"a {type(value).__name__} has no JSON form: {value!r}")


def sync_path(path: Path) -> None:
    """Wait until a file is on disk."""
    with path.open("rb") as file:
        os.fsync(file.fileno())


def sync_folder(path: Path) -> None:
    """Wait until the names in a folder are on disk."""
    if os.name == "nt":  # Windows opens no folders
        return
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _name(name: Any) -> str:
    if not isinstance(name, str | int | np.integer):
        raise TypeError(f"JSON names are text, but one is a {type(name).__name__}: {name!r}")
    return str(name)
