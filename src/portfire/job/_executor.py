"""Executors that fits run in: local processes, or this process."""

from __future__ import annotations

import multiprocessing
import os
import signal
import threading
from collections.abc import Callable, Iterator
from concurrent.futures import Executor, Future, ProcessPoolExecutor
from contextlib import contextmanager, nullcontext
from multiprocessing.connection import wait
from multiprocessing.context import SpawnContext, SpawnProcess
from typing import Any, ParamSpec, TypeVar

from portfire.job._stop import Stop

_P = ParamSpec("_P")
_T = TypeVar("_T")

ONE_THREAD = {
    "OMP_NUM_THREADS": "1",
    "OPENBLAS_NUM_THREADS": "1",
    "MKL_NUM_THREADS": "1",
    "NPROC": "1",  # the size that XLA gives its own pool of threads
    "JAX_PLATFORMS": "cpu",
}
XLA_ONE_THREAD = "--xla_cpu_multi_thread_eigen=false intra_op_parallelism_threads=1"
_SECONDS_TO_DIE = 5.0


def count_cores() -> int:
    """Return how many processor cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


class LocalExecutor(Executor):
    """Spawned processes of one thread each, which end with this process, however it ends.

    Parameters
    ----------
    workers : int
        Number of processes. They start when the first work is submitted.
    """

    def __init__(self, workers: int) -> None:
        self.n_workers = workers
        self._context = _Context()
        self._pool = ProcessPoolExecutor(workers, mp_context=self._context, initializer=_prepare_worker)

    def submit(self, fn: Callable[_P, _T], /, *args: _P.args, **kwargs: _P.kwargs) -> Future[_T]:
        """Run ``fn(*args, **kwargs)`` in one of the processes."""
        return self._pool.submit(fn, *args, **kwargs)

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        """Let the processes finish what they were given, then end them."""
        self._pool.shutdown(wait=wait, cancel_futures=cancel_futures)

    def kill(self) -> None:
        """End the processes now, whatever they are doing, and wait until they are gone."""
        for process in self._context.started:
            process.kill()
        for process in self._context.started:
            process.join(_SECONDS_TO_DIE)
        self._pool.shutdown(wait=True, cancel_futures=True)


class SerialExecutor(Executor):
    """Does everything at once in this process; what is submitted is done when `submit` returns."""

    n_workers = 1

    def submit(self, fn: Callable[_P, _T], /, *args: _P.args, **kwargs: _P.kwargs) -> Future[_T]:
        """Run ``fn(*args, **kwargs)`` here and now."""
        future: Future[_T] = Future()
        future.set_running_or_notify_cancel()
        try:
            future.set_result(fn(*args, **kwargs))
        except Exception as error:
            future.set_exception(error)
        return future

    def kill(self) -> None:
        """Do nothing: no process of its own is running."""


@contextmanager
def local_executor(workers: int, stop: Stop | None = None) -> Iterator[LocalExecutor]:
    """Yield an executor of `workers` processes; they are gone when the block ends.

    Where the block ends well they finish their work first; where it raises they are killed, and
    signals to `stop` are held back meanwhile.
    """
    executor = LocalExecutor(workers)
    try:
        yield executor
        executor.shutdown()
    except BaseException:
        with stop.ending() if stop is not None else nullcontext():
            executor.kill()
        raise


class _Worker(SpawnProcess):
    """A process that starts with one thread for every numerical library and no ear for Ctrl-C.

    The variables must stand before the process exists: it may import numerical libraries while it
    is still reading what to do.
    """

    def start(self) -> None:
        with _environment(), _blocked(signal.SIGINT):
            super().start()


class _Context(SpawnContext):
    def __init__(self) -> None:
        self.started: list[_Worker] = []

    # The stubs have a class in this place, which a method cannot be.
    def Process(self, *args: Any, **kwargs: Any) -> _Worker:  # type: ignore[override]
        process = _Worker(*args, **kwargs)
        self.started.append(process)
        return process


@contextmanager
def _environment() -> Iterator[None]:
    flags = f"{os.environ.get('XLA_FLAGS', '')} {XLA_ONE_THREAD}".strip()
    wanted = {**ONE_THREAD, "XLA_FLAGS": flags}
    before = {name: os.environ.get(name) for name in wanted}
    os.environ.update(wanted)
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value


@contextmanager
def _blocked(number: signal.Signals) -> Iterator[None]:
    # A new process inherits the mask: the terminal's Ctrl-C then reaches the parent alone.
    if not hasattr(signal, "pthread_sigmask"):  # Windows
        yield
        return
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {number})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


def _prepare_worker() -> None:
    parent = multiprocessing.parent_process()
    if parent is not None:
        threading.Thread(target=_end_with, args=(parent.sentinel,), daemon=True).start()


def _end_with(sentinel: int) -> None:
    wait([sentinel])
    os._exit(1)
