"""The whole job: job file, tasks, store of results, processes, progress.

Names are loaded when they are first asked for, so that the command line answers at once.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from portfire.job._atomic import (
        finite,
        replacing,
        write_dataset_atomic,
        write_json_atomic,
        write_table_atomic,
    )
    from portfire.job._file import Job, check_job, read_job
    from portfire.job._result import Result, load_result, summarise
    from portfire.job._run import run
    from portfire.job._shared import read_trials, write_trials
    from portfire.job._store import Store, task_key
    from portfire.job._tasks import Task, run_tasks
    from portfire.job._version import code_version, library_versions
    from portfire.job._workspace import Workspace, check_out, open_workspace

_HOME_OF = {
    "finite": "_atomic",
    "replacing": "_atomic",
    "write_dataset_atomic": "_atomic",
    "write_json_atomic": "_atomic",
    "write_table_atomic": "_atomic",
    "Job": "_file",
    "check_job": "_file",
    "read_job": "_file",
    "Result": "_result",
    "load_result": "_result",
    "summarise": "_result",
    "run": "_run",
    "read_trials": "_shared",
    "write_trials": "_shared",
    "Store": "_store",
    "task_key": "_store",
    "Task": "_tasks",
    "run_tasks": "_tasks",
    "code_version": "_version",
    "library_versions": "_version",
    "Workspace": "_workspace",
    "check_out": "_workspace",
    "open_workspace": "_workspace",
}

__all__ = [
    "Job",
    "Result",
    "Store",
    "Task",
    "Workspace",
    "check_job",
    "check_out",
    "code_version",
    "finite",
    "library_versions",
    "load_result",
    "open_workspace",
    "read_job",
    "read_trials",
    "replacing",
    "run",
    "run_tasks",
    "summarise",
    "task_key",
    "write_dataset_atomic",
    "write_json_atomic",
    "write_table_atomic",
    "write_trials",
]


def __getattr__(name: str) -> object:
    if name not in _HOME_OF:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(f"{__name__}.{_HOME_OF[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
