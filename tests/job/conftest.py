import sys
from pathlib import Path

import pytest

from portfire.job import Store, Task, task_key


@pytest.fixture
def toys(monkeypatch):
    """Make the toy tasks importable here and in worker processes."""
    monkeypatch.syspath_prepend(str(Path(__file__).parent))
    yield
    sys.modules.pop("toy_tasks", None)


@pytest.fixture
def store(tmp_path):
    return Store(tmp_path / "fits")


@pytest.fixture
def make_task():
    """Return a maker of toy tasks whose key is the hash of their name."""

    def make(name, function="add", deps=(), stage="toys", **kwargs):
        keys = tuple(task_key(name=dep) for dep in deps)
        return Task(name, task_key(name=name), f"toy_tasks:{function}", kwargs, keys, stage)

    return make
