"""Timing of tasks in turn, so that a slow spell of the machine meets all of them alike."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from threadpoolctl import threadpool_limits

Figure = dict[str, float]


@dataclass(frozen=True)
class Rounds:
    """Seconds that every task took in every round.

    Parameters
    ----------
    seconds : dict of str to array, shape (round,)
    """

    seconds: dict[str, np.ndarray]

    def ratio(self, x: str, y: str) -> Figure:
        """Over rounds, the time of x over the time of y in the same round; and of the fastest of each."""
        over, under = self.seconds[x], self.seconds[y]
        return {**describe(over / under), "of_fastest": float(over.min() / under.min())}

    def fastest(self, name: str, *forms: str) -> Rounds:
        """Add a task that took as long as the form with the least median."""
        best = min(forms, key=lambda form: float(np.median(self.seconds[form])))
        return Rounds({**self.seconds, name: self.seconds[best]})

    def summary(self) -> dict[str, Figure]:
        """Median, least and greatest time of every task (s)."""
        return {name: describe(values) for name, values in self.seconds.items()}


def describe(values: np.ndarray) -> Figure:
    """Median, least and greatest."""
    return {"median": float(np.median(values)), "min": float(np.min(values)), "max": float(np.max(values))}


def with_one_blas_thread(task: Callable[[], Any]) -> Callable[[], Any]:
    """The same task with numpy's and scipy's products on one thread.

    On small matrices a second one costs more than it brings (statsmodels: four to seven times the time).
    """

    def limited() -> Any:
        with threadpool_limits(1):
            return task()

    return limited


def clock(task: Callable[[], Any]) -> float:
    """Wall time of one call (s)."""
    start = time.perf_counter()
    task()
    return time.perf_counter() - start


def interleave(tasks: dict[str, Callable[[], Any]], n_rounds: int, n_best: int = 1) -> Rounds:
    """Time tasks in turn, round after round; each has run once before the first.

    Parameters
    ----------
    tasks : dict of str to callable
    n_rounds : int
    n_best : int, default 1
        Calls of a task in a round, of which the fastest counts.
    """
    for task in tasks.values():
        task()
    seconds: dict[str, list[float]] = {name: [] for name in tasks}
    for _ in range(n_rounds):
        for name, task in tasks.items():
            seconds[name].append(min(clock(task) for _ in range(n_best)))
    return Rounds({name: np.array(values) for name, values in seconds.items()})
