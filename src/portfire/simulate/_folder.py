"""A drawn session as a folder."""

from __future__ import annotations

import json
import os
import uuid
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from portfire.errors import InputError
from portfire.simulate._draw import Drawn
from portfire.simulate._truth import INVENTED, KIND, describe_truth

# The truth comes first: with it there, a folder that was left half written is known as a drawn session.
_TRUTH = "truth.json"
_NAMES = (_TRUTH, "README.txt", "trials.csv", "spikes.csv")

_TABLES = """
spikes.csv   one row a spike: unit, time_s (seconds)
trials.csv   one row a trial: set_s (set cue), response_s (empty: no response), end_s (when observation
             ended, where there is no response); where the task has them sample_s, context, target_s (the
             interval asked for) and lead_s (the cue before the set cue; nothing reads it)
truth.json   the parameters, pushes, states and rules that all of it was drawn from
"""


def check_folder(out: Path) -> None:
    """Refuse a folder that holds anything but an earlier drawn session.

    Raises
    ------
    InputError
        Naming what is in the way.
    """
    if out.exists() and not out.is_dir():
        raise InputError(f"{out}: is a file, but a folder for the session is needed.")
    names = sorted(p.name for p in out.iterdir() if not p.name.startswith(".")) if out.is_dir() else []
    foreign = [name for name in names if name not in _NAMES]
    if foreign or (names and not _is_drawn(out)):
        first = (foreign or names)[0]
        raise InputError(
            f"{out}: the folder holds {first!r} and is no simulated session; give a new or an empty folder."
        )


def write_folder(out: Path, drawn: Drawn, made_from: dict[str, Any], story: str) -> None:
    """Write ``spikes.csv``, ``trials.csv``, ``truth.json`` and ``README.txt``.

    A folder that holds the very same session is left as it is; another drawn session is replaced.

    Raises
    ------
    InputError
        If the folder holds anything else.
    """
    check_folder(out)
    out.mkdir(parents=True, exist_ok=True)
    truth = json.dumps(describe_truth(drawn, made_from), ensure_ascii=False, allow_nan=False)
    content = {
        _TRUTH: truth + "\n",
        "README.txt": f"{INVENTED}\n\n{story}\n{_TABLES}",
        "trials.csv": drawn.trials.to_csv(index=False, lineterminator="\n"),
        "spikes.csv": _spike_table(drawn).to_csv(index=False, lineterminator="\n"),
    }
    for name in _NAMES:
        data = content[name].encode("utf-8")
        path = out / name
        if not path.is_file() or path.read_bytes() != data:
            _replace(path, data)


def _is_drawn(folder: Path) -> bool:
    try:
        truth = json.loads((folder / _TRUTH).read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return False
    return isinstance(truth, dict) and truth.get("kind") == KIND


def _spike_table(drawn: Drawn) -> pd.DataFrame:
    units = list(drawn.spike_times)
    times = np.concatenate([drawn.spike_times[unit] for unit in units])
    unit = np.repeat(np.arange(len(units)), [len(drawn.spike_times[u]) for u in units])
    order = np.lexsort((unit, times))
    labels = pd.Categorical.from_codes(unit[order], categories=units)
    return pd.DataFrame({"unit": labels, "time_s": times[order]})


def _replace(path: Path, data: bytes) -> None:
    draft = path.parent / f".{path.name}-{uuid.uuid4().hex[:8]}"
    try:
        with draft.open("wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        os.replace(draft, path)
    finally:
        draft.unlink(missing_ok=True)
