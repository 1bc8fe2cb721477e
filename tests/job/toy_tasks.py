"""Tasks without mathematics, for tests of what runs them."""

import os
import time
from pathlib import Path

import numpy as np

from portfire.errors import InputError
from portfire.job import Store


def add(store, data, kwargs, deps, key):
    """Store kwargs["value"] plus what the dependencies hold."""
    time.sleep(kwargs.get("seconds", 0.0))
    total = kwargs["value"] + sum(Store(store).read_meta(dep)["value"] for dep in deps)
    if "trace" in kwargs:
        with Path(kwargs["trace"]).open("a") as file:
            file.write(key + "\n")
    Store(store).write(key, {"value": total}, {"squares": np.arange(3.0) * total})
    return {"value": total}


def fail(store, data, kwargs, deps, key):
    """Fail with an error of a kind that cannot be unpickled."""
    time.sleep(kwargs.get("seconds", 0.0))

    class TwoWordsError(Exception):
        def __init__(self, one, two):
            super().__init__(f"{one} {two}")

    raise TwoWordsError("tyre", "flat")


def reject(store, data, kwargs, deps, key):
    """Fail because the input is wrong."""
    raise InputError("unit 'u3' has no spikes")


def forget(store, data, kwargs, deps, key):
    """Return without a result."""


def die(store, data, kwargs, deps, key):
    """End the whole process, as for lack of memory."""
    os._exit(9)


def report_process(store, data, kwargs, deps, key):
    """Store what the process was given to start with."""
    names = ("XLA_FLAGS", "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "JAX_PLATFORMS")
    meta = {name: os.environ.get(name) for name in names}
    Store(store).write(key, {**meta, "pid": os.getpid(), "data": str(data)})
