"""Tasks: what is to be computed, in which order, and what is there already."""

from __future__ import annotations

import heapq
import time
import traceback
from collections.abc import Mapping, Sequence
from concurrent.futures import FIRST_COMPLETED, BrokenExecutor, Executor, Future, wait
from dataclasses import dataclass, field
from importlib import import_module
from pathlib import Path
from typing import Any

from portfire.errors import InputError, PortfireError
from portfire.job._executor import LocalExecutor, SerialExecutor
from portfire.job._progress import Progress
from portfire.job._stop import Stop, Stopped
from portfire.job._store import Store

_SECONDS_PER_LOOK = 0.1


@dataclass(frozen=True)
class Task:
    """One computation whose result goes to the store.

    Parameters
    ----------
    name : str
        How messages call it.
    key : str
        Where its result goes; see `task_key`.
    function : str
        ``"module:function"``. It is called with the path of the store, the path of the shared
        data, ``kwargs``, ``deps`` and ``key``, writes the entry ``key`` to the store, and returns
        a few numbers for the log, or None.
    kwargs : mapping
        Plain values.
    deps : tuple of str
        Keys of the tasks whose results it reads.
    stage : str
        The part of the job it belongs to.
    """

    name: str
    key: str
    function: str
    kwargs: Mapping[str, Any] = field(default_factory=dict)
    deps: tuple[str, ...] = ()
    stage: str = "fit"


def run_tasks(
    tasks: Sequence[Task],
    store: Store,
    executor: Executor,
    progress: Progress,
    stop: Stop,
    data: Path,
) -> dict[str, dict[str, Any]]:
    """Run what is not in the store yet, each task after those it depends on.

    May be called again and again on the same executor and progress, as further tasks become known.

    Parameters
    ----------
    tasks : sequence of Task
        Those with the longest chain of dependents start first; else in this order. A dependency
        is another of these tasks, or in the store already.
    store : Store
        Where results go. Damaged entries are removed and redone.
    executor : Executor
        What the tasks run in.
    progress : Progress
        Hears of every task that ends.
    stop : Stop
        Asks the run to end early.
    data : Path
        Shared data, handed to every task.

    Returns
    -------
    dict of str to dict
        The plain values (``fit.json``) of every task, by key, in the order of `tasks`; the same
        whether a task ran now or its result was there.

    Raises
    ------
    PortfireError
        If a task fails (names it; what runs already is finished and stored first), if a worker
        was killed, or if the run was asked to stop.
    ValueError
        If dependencies are unknown or go in a circle, or one key stands for two tasks.
    """
    by_key = _index(tasks)
    heights = _measure_heights(by_key, store)
    intact = {key for key in by_key if _is_intact(store, key, progress)}
    for task in by_key.values():
        progress.expect(task.stage, task.key)
    for task in by_key.values():
        if task.key in intact:
            progress.finish(task.stage, task.key, task.name, reused=True)
    left = [task for task in by_key.values() if task.key not in intact]
    order = {task.key: (-heights[task.key], position) for position, task in enumerate(left)}
    _Run(left, order, store, executor, progress, stop, data).run()
    return {key: store.read_meta(key) for key in by_key}


@dataclass(frozen=True)
class Outcome:
    """How a task ended, in plain values that any executor can carry.

    Parameters
    ----------
    numbers : dict of str to float
        What its function returned.
    seconds : float
        How long it took (s).
    error : str
        Why it failed; empty if it did not.
    is_input : bool
        Whether the input was wrong.
    trace : str
        Where it failed, for the log.
    """

    numbers: dict[str, float] = field(default_factory=dict)
    seconds: float = 0.0
    error: str = ""
    is_input: bool = False
    trace: str = ""


def call_task(
    function: str, store: Path, data: Path, kwargs: Mapping[str, Any], deps: tuple[str, ...], key: str
) -> Outcome:
    """Call the function of a task; this is what runs in a worker."""
    started = time.monotonic()
    module, _, name = function.partition(":")
    try:
        numbers = getattr(import_module(module), name)(store, data, dict(kwargs), deps, key)
        fault = Store(store).fault(key)
        if fault is not None:
            raise PortfireError(f"{function} left no result: {fault}")
        plain = {label: float(number) for label, number in (numbers or {}).items()}
        return Outcome(numbers=plain, seconds=time.monotonic() - started)
    except Exception as error:
        text = str(error) if isinstance(error, PortfireError) else f"{type(error).__name__}: {error}"
        return Outcome(
            seconds=time.monotonic() - started,
            error=text,
            is_input=isinstance(error, InputError),
            trace=traceback.format_exc(),
        )


class _Run:
    """One pass over the tasks that are left."""

    def __init__(
        self,
        tasks: Sequence[Task],
        order: Mapping[str, tuple[int, int]],
        store: Store,
        executor: Executor,
        progress: Progress,
        stop: Stop,
        data: Path,
    ) -> None:
        self.store, self.executor, self.progress = store, executor, progress
        self.stop, self.data, self.order = stop, data, order
        self.tasks = {task.key: task for task in tasks}
        self.waiting = {task.key: {d for d in task.deps if d in self.tasks} for task in tasks}
        self.ready = [order[key] + (key,) for key, deps in self.waiting.items() if not deps]
        heapq.heapify(self.ready)
        self.running: dict[Future[Outcome], Task] = {}
        self.failure: PortfireError | None = None
        # Enough that no worker waits for this loop, and few enough that what becomes ready later
        # and matters more does not queue behind all the rest.
        self.n_at_once = getattr(executor, "n_workers", len(tasks)) + 1
        if isinstance(executor, SerialExecutor):
            self.n_at_once = 1

    def run(self) -> None:
        n_done = 0
        with self.stop.polled():
            while self.running or (self.ready and self.failure is None):
                if self.stop.asked:
                    self._abandon()
                    raise Stopped(
                        f"Stopped after {n_done} of {len(self.tasks)} fits; "
                        "the same command resumes from what is stored."
                    )
                self._submit()
                done, _ = wait(self.running, timeout=_SECONDS_PER_LOOK, return_when=FIRST_COMPLETED)
                for future in done:
                    n_done += self._take(future)
        if self.failure is not None:
            raise self.failure

    def _submit(self) -> None:
        while self.ready and self.failure is None and len(self.running) < self.n_at_once:
            task = self.tasks[heapq.heappop(self.ready)[-1]]
            parts = (task.function, self.store.path, self.data, task.kwargs, task.deps, task.key)
            try:
                future = self.executor.submit(call_task, *parts)
            except BrokenExecutor as error:
                self._fail(_describe(task, error))
                return
            self.running[future] = task

    def _take(self, future: Future[Outcome]) -> bool:
        task = self.running.pop(future)
        if future.cancelled():
            return False
        broken = future.exception()
        if broken is not None:
            self._fail(_describe(task, broken))
            return False
        outcome = future.result()
        if outcome.error:
            self.progress.log(outcome.trace)
            kind = InputError if outcome.is_input else PortfireError
            self._fail(kind(f"{task.name} failed: {outcome.error}"))
            return False
        seconds, numbers = outcome.seconds, outcome.numbers
        self.progress.finish(task.stage, task.key, task.name, seconds, numbers)
        for key, deps in self.waiting.items():
            if task.key in deps:
                deps.discard(task.key)
                if not deps:
                    heapq.heappush(self.ready, self.order[key] + (key,))
        return True

    def _fail(self, failure: PortfireError) -> None:
        self.progress.log(str(failure))
        if self.failure is None:
            self.failure = failure
            for future in self.running:
                future.cancel()

    def _abandon(self) -> None:
        with self.stop.ending():
            for future in self.running:
                future.cancel()
            if isinstance(self.executor, LocalExecutor):
                self.executor.kill()


def _describe(task: Task, error: BaseException) -> PortfireError:
    """Say in a sentence how the executor itself failed."""
    if not isinstance(error, BrokenExecutor):
        return PortfireError(f"{task.name} could not be run: {type(error).__name__}: {error}")
    return PortfireError(
        f"A worker process ended while {task.name} was running, perhaps for lack of memory; finished fits "
        "are stored: run again, with fewer workers if it happens twice. (A script that calls portfire.run "
        'must do so under: if __name__ == "__main__".)'
    )


def _index(tasks: Sequence[Task]) -> dict[str, Task]:
    by_key: dict[str, Task] = {}
    for task in tasks:
        if by_key.setdefault(task.key, task) != task:
            raise ValueError(f"{task.name} and {by_key[task.key].name} have the same key, {task.key}")
    return by_key


def _is_intact(store: Store, key: str, progress: Progress) -> bool:
    if not store.folder(key).exists():
        return False
    fault = store.fault(key)
    if fault is None:
        return True
    progress.warn(f"{fault}; it is removed and redone")
    store.remove(key)
    return False


def _measure_heights(tasks: Mapping[str, Task], store: Store) -> dict[str, int]:
    """Return for every task how long the longest chain of tasks is that wait for it."""
    dependents: dict[str, list[str]] = {key: [] for key in tasks}
    n_deps = dict.fromkeys(tasks, 0)
    for task in tasks.values():
        for dep in dict.fromkeys(task.deps):
            if dep in tasks:
                dependents[dep].append(task.key)
                n_deps[task.key] += 1
            elif not store.has(dep):
                raise ValueError(f"{task.name} depends on {dep}, which is neither a task nor in the store")
    free = [key for key, n in n_deps.items() if n == 0]
    for key in free:
        for dependent in dependents[key]:
            n_deps[dependent] -= 1
            if n_deps[dependent] == 0:
                free.append(dependent)
    if len(free) < len(tasks):
        circle = ", ".join(sorted(tasks[key].name for key, n in n_deps.items() if n > 0))
        raise ValueError(f"tasks wait for each other in a circle: {circle}")
    heights = dict.fromkeys(tasks, 0)
    for key in reversed(free):
        heights[key] = max((heights[d] + 1 for d in dependents[key]), default=0)
    return heights
