"""Reading the files that a finished run left."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr

from portfire.errors import InputError

_COLUMNS = {
    "trials.parquet": ("trial", "condition", "produced_s"),
    "scores.parquet": ("trial", "account", "model", "loglik"),
    "decode.parquet": (
        "trial",
        "condition",
        "cutoff_s",
        "features",
        "produced_s",
        "baseline_s",
        "predicted_s",
    ),
}
_VARIABLES = {
    "latents.nc": {"state": 3, "initial": 2, "sustained": 2},
    "rates.nc": {"recorded": 3, "model": 3},
}
_LISTS = ("accounts", "contrasts", "rivals", "checks", "unseen_conditions", "decode", "sessions")


@dataclass(frozen=True)
class RunFolder:
    """What a finished run left, as far as the report reads it; a file that is absent is None.

    Attributes
    ----------
    path : Path
    result : mapping
        The content of `result.json`.
    trials, scores, predictions : DataFrame or None
        `trials.parquet`, `scores.parquet` and `decode.parquet`.
    latents, rates : xarray.Dataset or None
    """

    path: Path
    result: Mapping[str, Any]
    trials: pd.DataFrame | None
    scores: pd.DataFrame | None
    predictions: pd.DataFrame | None
    latents: xr.Dataset | None
    rates: xr.Dataset | None

    @cached_property
    def contexts(self) -> tuple[str, ...]:
        """The contexts of the used trials, by mean produced interval; empty where the session has none."""
        if self.trials is None or not has_values(self.trials, "context"):
            return ()
        known = self.trials[self.trials["context"].notna()]
        mean = known.groupby(known["context"].astype(str))["produced_s"].mean()
        return tuple(sorted(mean.index, key=lambda c: (np.nan_to_num(mean[c], nan=np.inf), c)))

    @cached_property
    def samples(self) -> tuple[float, ...]:
        """The sample intervals (s) of the used trials, sorted; empty where the session has none."""
        if self.trials is None or not has_values(self.trials, "sample_s"):
            return ()
        return tuple(float(s) for s in np.unique(self.trials["sample_s"].dropna()))

    @cached_property
    def has_responses(self) -> bool:
        """Whether any used trial has a produced interval."""
        return self.trials is not None and has_values(self.trials, "produced_s")

    def rows(self, key: str) -> list[Mapping[str, Any]]:
        """Return a list of `result.json` (empty where the key is absent)."""
        return list(self.result.get(key) or [])

    def part(self, key: str) -> Mapping[str, Any]:
        """Return an object of `result.json` (empty where the key is absent)."""
        return self.result.get(key) or {}

    def setting(self, section: str, key: str, default: Any) -> Any:
        """Return a setting of the job as it was resolved."""
        inside = self.part("settings").get(section)
        return inside.get(key, default) if isinstance(inside, Mapping) else default

    @property
    def min_gain(self) -> float:
        """The gain (nats a trial) below which no gain is worth having."""
        return float(self.setting("compare", "min_gain", 0.05))

    @property
    def level(self) -> float:
        """The level of the tests."""
        return float(self.setting("tests", "level", 0.05))


def has_values(table: pd.DataFrame, column: str) -> bool:
    """Return whether a table has the column and anything in it."""
    return column in table.columns and bool(table[column].notna().any())


def trials_in_order(run: RunFolder, labels: Iterable[object]) -> pd.DataFrame:
    """Return the rows of the trial table in the order of the labels (trial,)."""
    assert run.trials is not None
    labels = list(labels)
    table = run.trials.assign(trial=run.trials["trial"].astype(str)).set_index("trial")
    unknown = [str(label) for label in labels if str(label) not in table.index]
    if unknown:
        raise InputError(
            f"{run.path / 'latents.nc'}: trial {unknown[0]!r} is not in trials.parquet; "
            "both files must come from one run."
        )
    return table.loc[[str(label) for label in labels]].reset_index()


def name_lacking(run: RunFolder) -> str:
    """Return which of the two files that the latents need are absent."""
    files = (("latents.nc", run.latents), ("trials.parquet", run.trials))
    return " and no ".join(name for name, content in files if content is None)


def read_run_folder(out_dir: Path) -> RunFolder:
    """Read the files of a finished run.

    Parameters
    ----------
    out_dir : Path
        The out folder of the run.

    Raises
    ------
    InputError
        Where `result.json` is absent or is not the result of a run, or another file cannot be read.
    """
    return RunFolder(
        path=out_dir,
        result=_read_result(out_dir),
        trials=_read_table(out_dir / "trials.parquet"),
        scores=_read_table(out_dir / "scores.parquet"),
        predictions=_read_table(out_dir / "decode.parquet"),
        latents=_read_arrays(out_dir / "latents.nc"),
        rates=_read_arrays(out_dir / "rates.nc"),
    )


def _read_result(out_dir: Path) -> dict[str, Any]:
    path = out_dir / "result.json"
    if not out_dir.is_dir():
        raise InputError(f"{out_dir}: no such folder; give the out folder of a finished run.")
    if not path.is_file():
        raise InputError(f"{path}: no such file; give the out folder of a run that has finished.")
    try:
        result = json.loads(path.read_text(encoding="utf-8"))
    except UnicodeDecodeError as error:
        raise InputError(f"{path}: not UTF-8 at byte {error.start}; the file should be JSON.") from error
    except json.JSONDecodeError as error:
        where = f"line {error.lineno}, column {error.colno}"
        raise InputError(f"{path}: not JSON at {where}; run the job again to write it anew.") from error
    if not isinstance(result, dict) or "portfire" not in result:
        raise InputError(f"{path}: no key 'portfire'; this is not the result of a run.")
    for key in _LISTS:
        entries = result.get(key) or []
        if not isinstance(entries, list) or not all(isinstance(e, dict) for e in entries):
            raise InputError(f"{path}: {key!r} should be a list of objects, and is not.")
    for key in ("session", "behaviour", "chosen", "yardsticks", "settings", "versions"):
        if not isinstance(result.get(key) or {}, dict):
            raise InputError(f"{path}: {key!r} should be an object, and is not.")
    return result


def _read_table(path: Path) -> pd.DataFrame | None:
    if not path.is_file():
        return None
    try:
        table = pd.read_parquet(path)
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: cannot be read as Parquet ({error}).") from error
    for column in _COLUMNS[path.name]:
        if column not in table.columns:
            raise InputError(f"{path}: no column {column!r}; it has {', '.join(map(str, table.columns))}.")
    return table


def _read_arrays(path: Path) -> xr.Dataset | None:
    if not path.is_file():
        return None
    try:
        data = xr.load_dataset(path, engine="h5netcdf")
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: cannot be read as netCDF ({error}).") from error
    for name, n_dims in _VARIABLES[path.name].items():
        if name not in data:
            raise InputError(f"{path}: no variable {name!r}; it has {', '.join(map(str, data.data_vars))}.")
        if data[name].ndim != n_dims:
            raise InputError(f"{path}: {name!r} has {data[name].ndim} dimensions; it should have {n_dims}.")
    return data
