"""What a run works with: its folder, store, processes, progress and the wish to stop."""

from __future__ import annotations

import os
import platform
import shlex
import sys
import tempfile
import traceback
from collections.abc import Iterator, Sequence
from concurrent.futures import Executor
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from portfire.errors import InputError, PortfireError
from portfire.job._executor import count_cores, local_executor
from portfire.job._progress import Progress
from portfire.job._stop import Stop, stop_on_signals
from portfire.job._store import Store
from portfire.job._tasks import Task, run_tasks

_FITS, _DATA, _LOG, _LOCK = "fits", "data", "log.txt", ".lock"


@dataclass(frozen=True)
class Workspace:
    """What a run works with.

    Parameters
    ----------
    out : Path
        Folder of the results.
    store : Store
        Results of fits, in ``<out>/fits``.
    executor : Executor
        What fits run in.
    progress : Progress
        Where to say what happens.
    stop : Stop
        Whether somebody asked to stop.
    """

    out: Path
    store: Store
    executor: Executor
    progress: Progress
    stop: Stop

    @property
    def data(self) -> Path:
        """Folder for what workers share; see `write_trials`."""
        return self.out / _DATA

    def run(self, tasks: Sequence[Task], data: Path) -> dict[str, dict[str, Any]]:
        """Run tasks; see `run_tasks`."""
        return run_tasks(tasks, self.store, self.executor, self.progress, self.stop, data)


@contextmanager
def open_workspace(out: Path, workers: int | None = None, quiet: bool = False) -> Iterator[Workspace]:
    """Open the folder of a run, alone, and end all that was started when the block ends.

    Parameters
    ----------
    out : Path
        Folder of the results; made where it is not there.
    workers : int, optional
        Number of processes. Default: one for every core that this process may use.
    quiet : bool
        Say nothing but warnings.

    Raises
    ------
    InputError
        If the folder cannot be made or written, or `workers` is less than 1.
    PortfireError
        If another run is working in the folder; `Stopped`, if Ctrl-C or SIGTERM came.
    """
    n_workers = count_cores() if workers is None else workers
    if n_workers < 1:
        raise InputError(f"workers must be 1 or more, but is {n_workers}")
    out = check_out(out)
    with _lock(out), Progress(out / _LOG, quiet, n_workers=n_workers) as progress:
        store = Store(out / _FITS)
        try:
            with stop_on_signals(Stop()) as stop, local_executor(n_workers, stop) as executor:
                _log_start(progress, n_workers)
                for left in (*store.clean(), *Store(out / _DATA).clean()):
                    progress.log(f"removed {left}, left by a run that was killed")
                yield Workspace(out, store, executor, progress, stop)
        except PortfireError as error:
            progress.log(f"ended: {error}")
            raise
        except BaseException:
            progress.log("ended by an unexpected error\n" + traceback.format_exc())
            raise
        progress.log("done")


def check_out(out: Path) -> Path:
    """Make a folder for results where there is none, and check that it can be written to.

    Returns
    -------
    Path
        The folder, absolute.

    Raises
    ------
    InputError
        If it is a file, or cannot be made or written to.
    """
    out = out.absolute()
    for path in (out, *out.parents):
        if path.exists():
            if not path.is_dir():
                raise InputError(f"{path}: is a file, but a folder for results is needed")
            break
    try:
        out.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=out):
            pass
    except OSError as error:
        reason = error.strerror
        raise InputError(f"{out}: results cannot be written here ({reason}); give another folder") from None
    return out


@contextmanager
def _lock(out: Path) -> Iterator[None]:
    if sys.platform == "win32":
        yield
        return
    import fcntl

    handle = os.open(out / _LOCK, os.O_RDWR | os.O_CREAT, 0o644)
    try:
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            raise PortfireError(
                f"{out}: another run is working in this folder; wait for it, or give another folder"
            ) from None
        yield
    finally:
        os.close(handle)  # which gives the lock up, as does the end of the process, however it ends


def _log_start(progress: Progress, n_workers: int) -> None:
    from portfire import __version__

    system = f"Python {platform.python_version()} on {platform.system()} {platform.machine()}"
    progress.log(f"portfire {__version__}, {system}, {n_workers} workers: {shlex.join(sys.argv)}")
