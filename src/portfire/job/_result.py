"""The result of a run, read from its folder."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from portfire.errors import InputError, PortfireError

if TYPE_CHECKING:
    import pandas as pd

RESULT = "result.json"


@dataclass(frozen=True)
class Result:
    """What a run found.

    Parameters
    ----------
    path : Path
        The folder of the run.
    raw : dict
        Content of ``result.json``.
    """

    path: Path
    raw: dict[str, Any]

    @property
    def contrasts(self) -> pd.DataFrame:
        """A row a source: scores of its four accounts (nats/trial), gains, p and verdict.

        Nested values have joined names, such as ``sustained_unique_nats_per_trial`` and
        ``sustained_unique_ci95_low``.
        """
        return _tabulate(self.raw["contrasts"])

    @property
    def decode(self) -> pd.DataFrame:
        """A row a cutoff (s) and feature set: R² within condition, its interval, null and p."""
        return _tabulate(self.raw["decode"])

    @property
    def accounts(self) -> pd.DataFrame:
        """A row an account: held-out log-likelihood (nats/trial), its error, bits per spike."""
        return _tabulate(self.raw["accounts"])

    @property
    def scores(self) -> pd.DataFrame:
        """A row a held-out trial and account: log-likelihood (nats) and its Monte-Carlo error."""
        import pandas as pd

        return pd.read_parquet(self.path / "scores.parquet")

    def __str__(self) -> str:
        return "\n".join(summarise(self.raw))

    def __repr__(self) -> str:
        return f"<portfire result in {self.path}: {'; '.join(summarise(self.raw))}>"


def load_result(path: str | Path) -> Result:
    """Load the result of a finished run.

    Parameters
    ----------
    path : str or Path
        The out folder of the run.

    Returns
    -------
    Result
        Its tables, and the raw content of ``result.json``.

    Raises
    ------
    InputError
        If there is no such folder, or no finished run in it.
    PortfireError
        If ``result.json`` is damaged.
    """
    folder = Path(path)
    if not folder.is_dir():
        what = "is a file" if folder.exists() else "does not exist"
        raise InputError(f"{folder}: {what}; the out folder of a finished run is needed")
    file = folder / RESULT
    if not file.is_file():
        raise InputError(f"{folder}: holds no {RESULT}; it is no finished run: finish it with portfire run")
    try:
        raw = json.loads(file.read_text(encoding="utf-8"))
    except ValueError as error:
        raise PortfireError(f"{file}: is damaged ({error}); run the job again to redo it") from None
    missing = [name for name in ("accounts", "contrasts", "decode") if name not in raw]
    if missing:
        raise PortfireError(f"{file}: has no {', '.join(missing)}; run the job again to redo it")
    return Result(folder, raw)


def summarise(raw: Mapping[str, Any]) -> list[str]:
    """Say in lines of plain text what a run found.

    Parameters
    ----------
    raw : mapping
        Content of ``result.json``.

    Returns
    -------
    list of str
        A line a source, the decode from both pushes at every cutoff, and what was not run.
    """
    lines = []
    for row in raw["contrasts"]:
        told = row.get("words") or f"verdict {row['verdict']}"
        whose = f"{row['session']}, " if "session" in row else ""
        lines.append(f"{whose}{row['source']}: {told}")
    shown: dict[float, Mapping[str, Any]] = {}
    for row in raw["decode"]:
        if row.get("variant", "all") != "all" or row["features"] != "initial+sustained":
            continue
        if row["r2_within_condition"] is not None:
            shown[row["cutoff_s"]] = row
    for cutoff, row in sorted(shown.items()):
        p = "not tested" if row["p"] is None else f"p = {row['p']:.3g}"
        lines.append(
            f"decode at {cutoff:g} s, initial+sustained: "
            f"R² within condition {row['r2_within_condition']:.3f} ({p}, {row['n_trials']} trials)"
        )
    lines += [f"not run: {sentence}" for sentence in raw.get("not_run", [])]
    return lines


def _tabulate(rows: list[dict[str, Any]]) -> pd.DataFrame:
    import pandas as pd

    return pd.DataFrame([_flatten(row) for row in rows])


def _flatten(row: Mapping[str, Any], prefix: str = "") -> dict[str, Any]:
    flat: dict[str, Any] = {}
    for name, value in row.items():
        if isinstance(value, dict):
            flat.update(_flatten(value, f"{prefix}{name}_"))
        elif name.endswith("95") and isinstance(value, list) and len(value) == 2:
            flat[f"{prefix}{name}_low"], flat[f"{prefix}{name}_high"] = value
        else:
            flat[f"{prefix}{name}"] = tuple(value) if isinstance(value, list) else value
    return flat
