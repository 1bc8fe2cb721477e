"""A whole fit against the bare readout pass, and how the cost of the objective grows."""

from __future__ import annotations

from collections import defaultdict
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from typing import Any

import jax
import numpy as np
from _clock import Figure, Rounds, clock, interleave
from _problem import Problem, Sizes, make_problem
from _sweep import floor_tasks

from portfire.estimation import Fit, fit
from portfire.estimation._objective import Objective, n_threads

_FLOOR_ROUNDS = 5


def measure_fit(problem: Problem, n_rounds: int) -> tuple[Rounds, dict[str, Any]]:
    """Time whole cold fits of the full account and the floor in turn, compiled code at hand.

    Beside it stand the time that compiling took, and the fit's status and its objective against
    that of the parameters which the trials were drawn from (nats a trial).
    """
    found: list[Fit] = []

    def whole_fit(max_iterations: int = 300) -> None:
        d = problem.sizes.latent_dim
        found.append(fit(problem.trials, latent_dim=d, seed=0, max_iterations=max_iterations))

    jax.clear_caches()
    first, again = clock(lambda: whole_fit(1)), clock(lambda: whole_fit(1))
    seconds: dict[str, list[float]] = defaultdict(list)
    with ThreadPoolExecutor(n_threads()) as pool:
        floors = floor_tasks(problem, pool)
        for _ in range(n_rounds):
            # A fit outlasts many floors, so each is compared with those just before and just after it.
            before = interleave(floors, _FLOOR_ROUNDS, n_best=2).seconds
            seconds["fit"].append(clock(whole_fit))
            after = interleave(floors, _FLOOR_ROUNDS, n_best=2).seconds
            for name in floors:
                seconds[name].append(float(np.median([*before[name], *after[name]])))
    objective = Objective(problem.packed, problem.setup)
    truth, _ = objective({name: np.asarray(value) for name, value in problem.params.items()})
    objective.close()
    fitted = found[-1]
    rounds = Rounds({name: np.array(values) for name, values in seconds.items()})
    return rounds, {
        "compile_s": first - again,
        "status": fitted.status,
        "iterations": len(fitted.trace) - 1,
        "nats_per_trial_above_truth": (fitted.value - truth) / problem.sizes.n_trials,
    }


class _Evaluation:
    """The objective and its gradient from settled modes: one Newton sweep and one gradient a trial."""

    def __init__(self, sizes: Sizes) -> None:
        problem = make_problem(sizes)
        self.objective = Objective(problem.packed, problem.setup)
        self.params = {name: np.asarray(value) for name, value in problem.params.items()}
        self()

    def __call__(self) -> tuple[float, dict[str, np.ndarray]]:
        return self.objective(self.params)


def measure_growth(base: Sizes, grid: dict[str, tuple[int, ...]], n_rounds: int) -> dict[str, dict[str, Any]]:
    """Cost of the objective and its gradient at three sizes along every axis, timed in turn.

    Returns
    -------
    dict
        For every axis: the sizes, the time for one of its elements at each (s), and how much more
        an element costs at the largest size than at the smallest (1 is linear, below 1 cheaper).
    """
    out = {}
    for axis, values in grid.items():
        tasks = {str(value): _Evaluation(replace(base, **{axis: value})) for value in values}
        rounds = interleave(tasks, n_rounds, n_best=2)
        each = {name: values / int(name) for name, values in rounds.seconds.items()}
        small, large = str(min(values)), str(max(values))
        growth: Figure = Rounds(each).ratio(large, small)
        for task in tasks.values():
            task.objective.close()
        out[axis] = {
            "sizes": list(values),
            "seconds_each": {name: float(np.median(spent)) for name, spent in each.items()},
            "growth": growth,
        }
    return out
