"""What is asked of the accounts beside their scores: how long pushes last, tests, rivals, checks."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from portfire.job._stages import (
    ALL,
    ALL_TOLERANCE,
    HELD_OUT_TOLERANCE,
    MAX_ITERATIONS,
    NEIGHBOUR_ITERATIONS,
    NEIGHBOUR_TOLERANCE,
    Size,
    Sizes,
    Stages,
    shifted,
)
from portfire.job._tasks import Task
from portfire.session import Trials


@dataclass(frozen=True)
class Tested:
    """Keys of what the tasks of this module left.

    Parameters
    ----------
    profiles : mapping of (int, str) to str
        Persistence by shift of the size and source.
    routes, rivals : mapping of str to str
        Tests of a source's routes, and rivals of its pushes.
    checks : str
        Predictive checks; empty where there are none.
    yardsticks : tuple of str
        By fold: unseen units.
    unseen : mapping of int to str
        Scores by condition that was left out.
    not_run : tuple of str
        Sentences on what was not asked, and why.
    """

    profiles: Mapping[tuple[int, str], str] = field(default_factory=dict)
    routes: Mapping[str, str] = field(default_factory=dict)
    rivals: Mapping[str, str] = field(default_factory=dict)
    checks: str = ""
    yardsticks: tuple[str, ...] = ()
    unseen: Mapping[int, str] = field(default_factory=dict)
    not_run: tuple[str, ...] = ()


def run_tests(stages: Stages, sizes: Sizes, ladders: Mapping[tuple[int, int, str], str]) -> Tested:
    """Make and run the tasks; what a kind of dynamics or a readout does not define is said."""
    best, sources = sizes.chosen[ALL], stages.job.compare.sources
    model = stages.models[best.model]
    not_run = []
    if sources and not stages.job.tests.bootstrap:
        not_run.append("No bootstrap of the contrasts: the job asks for no draws ([tests] bootstrap).")
    if model.dynamics != "linear":
        not_run.append(
            "No persistence, time course, tests of scores, rivals and predictive checks: they are for "
            f"linear dynamics, and {model.name} is {model.dynamics}."
        )
        return Tested(not_run=tuple(not_run))
    whole, asked = ladders[0, ALL, ""], stages.job.tests
    profiles: dict[tuple[int, str], Task] = {}
    routes: dict[str, Task] = {}
    rivals: dict[str, Task] = {}
    checks: list[Task] = []
    if asked.thorough:
        profiles = {
            (shift, source): _profile_task(
                stages, sizes, shift, ladders[shift, ALL, source if shift else ""], source
            )
            for shift in sorted({shift for shift, _, _ in ladders})
            for source in sources
        }
        rivals = {s: _ask(stages, best, "score_rivals", f"rivals of the {s}", whole, s) for s in sources}
        checks = [_ask(stages, best, "check_fit", "predictive checks", whole)]
    else:
        not_run.append(
            "No persistence, time course, rivals, tests that survive a wrong model, predictive checks or "
            "unseen units: the job does not ask for them ([tests] thorough)."
        )
    if asked.thorough or asked.bootstrap:
        routes = {s: _ask(stages, best, "test_routes", f"tests of the {s}", whole, s) for s in sources}
    tasks = [*profiles.values(), *routes.values(), *rivals.values(), *checks]
    unseen: dict[int, Task] = {}
    if stages.job.tests.unseen_conditions:
        unseen = _unseen_tasks(stages, best, whole)
        if not unseen:
            not_run.append("No unseen conditions: leaving one out leaves its level out of the others.")
    elif sources and len(stages.trials.conditions) > 1:
        not_run.append("No unseen conditions: the job does not ask for them ([tests] unseen_conditions).")
    units: list[Task] = []
    if asked.thorough and model.readout != "gaussian" and len(stages.trials.unit) > 1:
        fits = stages.full_fits([(best, fold) for fold in stages.folds], sizes)
        units = [
            stages.task(
                "score_unseen_units",
                f"unseen units, fold {fold + 1}",
                "yardsticks",
                [fits[best, fold]],
                **stages.common(best, [fold]),
            )
            for fold in stages.folds
        ]
    stages.run(sorted([*tasks, *unseen.values(), *units], key=lambda task: -task.kwargs["latent_dim"]))
    return Tested(
        {which: task.key for which, task in profiles.items()},
        {source: task.key for source, task in routes.items()},
        {source: task.key for source, task in rivals.items()},
        checks[0].key if checks else "",
        tuple(task.key for task in units),
        {condition: task.key for condition, task in unseen.items()},
        tuple(not_run),
    )


def _profile_task(stages: Stages, sizes: Sizes, shift: int, ladder: str, source: str) -> Task:
    size = shifted(sizes.chosen[ALL], shift, len(stages.trials.unit))
    assert size is not None
    kwargs = {
        **stages.common(size, []),
        "source": source,
        "tolerance": NEIGHBOUR_TOLERANCE if shift else ALL_TOLERANCE,
        "max_iterations": NEIGHBOUR_ITERATIONS if shift else MAX_ITERATIONS,
        "course": not shift,
    }
    name = f"persistence of the {source} at {size.latent_dim} latent dimensions"
    return stages.task("profile_push", name, "persistence", [ladder], **kwargs)


def _ask(stages: Stages, size: Size, function: str, name: str, ladder: str, source: str = "") -> Task:
    tests = stages.job.tests
    own: dict[str, Any] = {"source": source} if source else {"level": tests.level}
    if function == "test_routes":
        own |= {"bootstrap": tests.bootstrap, "assignment": tests.assignment}
    if function == "score_rivals":
        own["tolerance"] = HELD_OUT_TOLERANCE
    stage = {"test_routes": "tests", "score_rivals": "rivals"}.get(function, "checks")
    return stages.task(function, name, stage, [ladder], **{**stages.common(size, []), **own})


def _unseen_tasks(stages: Stages, size: Size, ladder: str) -> dict[int, Task]:
    from portfire.comparison import separable_conditions

    return {
        condition: stages.task(
            "score_unseen_condition",
            f"condition {condition + 1} from the others",
            "unseen conditions",
            [ladder],
            **stages.common(size, []),
            condition=condition,
            sources=[s for s in stages.job.compare.sources if s != "trial"],
            tolerance=HELD_OUT_TOLERANCE,
        )
        for condition in _or_none(separable_conditions, stages.trials)
    }


def _or_none(find: Any, trials: Trials) -> Sequence[int]:
    return find(trials) if len(np.unique(trials.condition)) > 1 else []
