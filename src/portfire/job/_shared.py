"""Trials on disk, for workers to read: written once, never sent through a pipe."""

from __future__ import annotations

from dataclasses import fields
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from portfire.job._store import Store, task_key

if TYPE_CHECKING:
    from portfire.session import Trials


def write_trials(folder: Path, trials: Trials) -> Path:
    """Write trials into a folder of their own, named by their content.

    Parameters
    ----------
    folder : Path
        Where that folder goes.
    trials : Trials
        Counts, mask and covariates.

    Returns
    -------
    Path
        What `read_trials` takes. The same trials always have the same path, and are written once.
    """
    plain: dict[str, Any] = {}
    arrays: dict[str, np.ndarray] = {}
    for field in fields(trials):
        value = getattr(trials, field.name)
        if isinstance(value, np.ndarray | float):
            arrays[field.name] = np.asarray(value)
        else:
            plain[field.name] = value
    store = Store(folder)
    key = task_key(plain=plain, arrays=arrays)
    return store.folder(key) if store.has(key) else store.write(key, plain, arrays, compress=True)


@lru_cache(maxsize=4)
def read_trials(path: Path) -> Trials:
    """Read what `write_trials` wrote; a process reads each path once.

    Raises
    ------
    PortfireError
        If the files are absent or damaged.
    """
    from portfire.session import Trials

    plain, arrays = Store(path.parent).read(path.name)
    values = {name: _freeze(value) for name, value in plain.items()}
    for name, array in arrays.items():
        array.flags.writeable = False
        values[name] = array.item() if array.ndim == 0 else array
    return Trials(**values)


def _freeze(value: Any) -> Any:
    return tuple(_freeze(part) for part in value) if isinstance(value, list) else value
