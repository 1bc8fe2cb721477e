"""The fits that a job needs, as tasks: sizes inside training sets, then ladders of accounts."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from portfire.comparison import Choice, choose_smallest, fold_of, inner_sets
from portfire.dynamics import ModelFile, model_to_dict
from portfire.job._file import Job
from portfire.job._store import task_key
from portfire.job._tasks import Task
from portfire.job._version import code_version
from portfire.job._workspace import Workspace
from portfire.session import Trials

ALL = -1
# Nats that four iterations together must gain for a search to go on: a size is chosen on differences of
# hundredths of a nat a held-out trial, a likelihood ratio on tenths of a nat in all.
SIZE_TOLERANCE, HELD_OUT_TOLERANCE, ALL_TOLERANCE, NEIGHBOUR_TOLERANCE = 1.0, 0.3, 0.1, 0.3

# The folds that a fit holds out, and which half of the rest where those are split once more.
Split = tuple[tuple[int, ...], int | None]
# With a dimension to spare a search creeps along a ridge; what it has after this many steps lacks a nat or
# two in all, which is little beside the smallest gain worth having.
MAX_ITERATIONS, NEIGHBOUR_ITERATIONS = 300, 50
_OF_TESTS = (
    "profile_push",
    "test_routes",
    "check_fit",
    "score_rivals",
    "score_unseen_units",
    "score_unseen_condition",
)


@dataclass(frozen=True)
class Size:
    """What is chosen inside a training set: model file, latent dimensions, drift."""

    model: int
    latent_dim: int
    drift: bool


def shifted(size: Size, shift: int, n_units: int) -> Size | None:
    """The size with one latent dimension more or fewer; None where there is no such model."""
    d = size.latent_dim + shift
    return replace(size, latent_dim=d) if 1 <= d <= n_units else None


@dataclass(frozen=True)
class Sizes:
    """The choices of every training set; key `ALL` stands for all trials.

    Parameters
    ----------
    chosen : dict of int to Size
    fits : dict of (Size, int) to str
        Key of the full account's fit of a size on a training set.
    choices : dict of int to (tuple of Size, Choice)
        Candidates in order, and what was chosen among them, on all trials and in every fold.
    """

    chosen: dict[int, Size]
    fits: dict[tuple[Size, int], str]
    choices: dict[int, tuple[tuple[Size, ...], Choice]]


@dataclass(frozen=True)
class Stages:
    """Makes and runs the tasks of one session.

    Parameters
    ----------
    job : Job
    workspace : Workspace
    trials : Trials
    data : Path
        The trials as written for the workers.
    models : sequence of ModelFile
    """

    job: Job
    workspace: Workspace
    trials: Trials
    data: Path
    models: Sequence[ModelFile]

    @property
    def folds(self) -> tuple[int, ...]:
        """The folds, by number."""
        return tuple(range(self.job.compare.folds))

    def task(self, function: str, name: str, stage: str, deps: Sequence[str], **kwargs: Any) -> Task:
        """A task whose key hangs on everything that determines its result."""
        key = task_key(
            function=function,
            data=self.data.name,
            code=code_version(),
            deps=list(deps),
            kwargs=dict(kwargs),
        )
        module = "_work_tests" if function in _OF_TESTS else "_work"
        return Task(name, key, f"portfire.job.{module}:{function}", kwargs, tuple(deps), stage)

    def run(self, tasks: Sequence[Task]) -> dict[str, dict[str, Any]]:
        """Run tasks in the workspace."""
        return self.workspace.run(tasks, self.data)

    def common(self, size: Size, held_out: Sequence[int]) -> dict[str, Any]:
        """What every fit of a size on a training set is told."""
        return {
            "model": model_to_dict(self.models[size.model]),
            "latent_dim": size.latent_dim,
            "drift": size.drift,
            "folds": self.job.compare.folds,
            "held_out": list(held_out),
            "seed": self.job.seed,
            "n_reference": max(1, round(float(np.median(self.trials.n_bins)))),
        }

    def full_task(
        self, size: Size, held_out: Sequence[int], deps: Sequence[str], inner: int | None = None
    ) -> Task:
        """Fit the full account to what is left when folds are held out, and score those."""
        what = "all trials" if not held_out else f"without fold {' and '.join(str(f + 1) for f in held_out)}"
        extra = {} if inner is None else {"inner": inner}
        kwargs = {**self.common(size, held_out), "tolerance": SIZE_TOLERANCE, **extra}
        name = f"{size.latent_dim} latent dimensions, {what}"
        return self.task("fit_full", name, "size", deps, **kwargs)

    def inner_tasks(self, size: Size, deps: dict[Split, str]) -> dict[Split, Task]:
        """Fits inside training sets, by what they hold out; one serves both folds that it holds out."""
        pairs: list[Split]
        pairs = inner_sets(self.trials.n_session, len(self.folds))
        return {
            (held, inner): self.full_task(
                size, held, [deps[held, inner]] if (held, inner) in deps else [], inner
            )
            for held, inner in pairs
        }

    def inner_scores(self, tasks: dict[Split, Task], outer: int) -> np.ndarray:
        """Held-out scores, inside the training set of a fold, of the trials in its other folds."""
        fold = fold_of(self.trials.index, self.trials.n_session, self.job.compare.folds)
        out = np.full(len(self.trials), np.nan)
        for (held, inner), task in tasks.items():
            if outer not in held:
                continue
            _, arrays = self.workspace.store.read(task.key)
            rows, loglik = arrays["rows"], arrays["loglik"]
            keep = np.ones(len(rows), bool) if inner is not None else fold[rows] != outer
            out[rows[keep]] = loglik[keep]
        return out[np.isfinite(out)]

    def outer_scores(self, keys: dict[int, str]) -> np.ndarray:
        """Scores of all trials, each from the fold that held it out."""
        out = np.full(len(self.trials), np.nan)
        for fold in self.folds:
            _, arrays = self.workspace.store.read(keys[fold])
            out[arrays["rows"]] = arrays["loglik"]
        return out

    def choose_sizes(self) -> Sizes:
        """Choose model file, latent dimensions and drift inside every training set and on all trials."""
        dims = self.job.compare.latent_dims or ()
        first = {m: self.models[m].drift != "off" for m in range(len(self.models))}
        candidates = [Size(m, d, first[m]) for d in dims for m in range(len(self.models))]
        inner, outer = self._fit_candidates(candidates, {})
        chosen = {where: self._pick(candidates, inner, outer, where)[0] for where in (*self.folds, ALL)}
        # Drift is settled at the chosen size: first on, then off from there.
        wanted = {size for size in chosen.values() if self.models[size.model].drift == "choose"}
        without = [Size(size.model, size.latent_dim, False) for size in sorted(wanted, key=str)]
        if without:
            more_inner, more_outer = self._fit_candidates(
                without, {Size(s.model, s.latent_dim, True): s for s in without}, inner, outer
            )
            inner, outer = inner | more_inner, outer | more_outer
        choices, settled = {}, {}
        for where in (*self.folds, ALL):
            own = Size(chosen[where].model, chosen[where].latent_dim, False)
            options = [own, chosen[where]] if own in inner and chosen[where].drift else [chosen[where]]
            pick, _ = self._pick(options, inner, outer, where)
            settled[where] = pick
            choices[where] = (tuple(candidates), self._pick(candidates, inner, outer, where)[1])
        fits = {(size, where): key for size, keys in outer.items() for where, key in keys.items()}
        return Sizes(settled, fits, choices)

    def _pick(
        self,
        options: Sequence[Size],
        inner: dict[Size, dict[Split, Task]],
        outer: dict[Size, dict[int, str]],
        where: int,
    ) -> tuple[Size, Choice]:
        if where == ALL:
            scores = [self.outer_scores(outer[size]) for size in options]
        else:
            scores = [self.inner_scores(inner[size], where) for size in options]
        choice = choose_smallest(scores, self.job.compare.min_gain)
        return options[choice.chosen], choice

    def _fit_candidates(
        self,
        sizes: Sequence[Size],
        starts: dict[Size, Size],
        inner_before: dict[Size, dict[Split, Task]] | None = None,
        outer_before: dict[Size, dict[int, str]] | None = None,
    ) -> tuple[dict[Size, dict[Split, Task]], dict[Size, dict[int, str]]]:
        """Fit candidates on every training set, small sets first: larger ones start from within them."""
        came_from = {new: old for old, new in starts.items()}
        inner: dict[Size, dict[Split, Task]] = {}
        tasks: list[Task] = []
        outer: dict[Size, dict[int, str]] = {}
        for size in sizes:
            old = came_from.get(size)
            deps = {held: task.key for held, task in (inner_before or {})[old].items()} if old else {}
            inner[size] = self.inner_tasks(size, deps)
            tasks += inner[size].values()
            outer[size] = {}
            for fold in self.folds:
                if old:
                    start = (outer_before or {})[old][fold]
                else:
                    start = next(t.key for (held, _), t in inner[size].items() if fold in held)
                task = self.full_task(size, [fold], [start])
                tasks.append(task)
                outer[size][fold] = task.key
            start = (outer_before or {})[old][ALL] if old else outer[size][self.folds[0]]
            task = self.full_task(size, [], [start])
            tasks.append(task)
            outer[size][ALL] = task.key
        self.run(tasks)
        return inner, outer

    def full_fits(self, wanted: Sequence[tuple[Size, int]], sizes: Sizes) -> dict[tuple[Size, int], str]:
        """Keys of full fits of these sizes on these training sets; those that no stage made are made."""
        keys, tasks = dict(sizes.fits), []
        for size, where in wanted:
            if (size, where) not in keys:
                with_drift = (Size(size.model, size.latent_dim, True), where)
                deps = [keys[with_drift]] if with_drift in keys else []
                task = self.full_task(size, [] if where == ALL else [where], deps)
                tasks.append(task)
                keys[size, where] = task.key
        self.run(tasks)
        return keys

    def ladder_task(self, size: Size, where: int, full: str, sources: Sequence[str], scored: bool) -> Task:
        """Fit all accounts of the contrasts at one size on one training set.

        ``scored`` asks for the scores of the training trials themselves, where none are held out.
        """
        held = [] if where == ALL else [where]
        tolerance = HELD_OUT_TOLERANCE if held else NEIGHBOUR_TOLERANCE if scored else ALL_TOLERANCE
        kwargs = {
            **self.common(size, held),
            "tolerance": tolerance,
            "sources": list(sources),
            "score_training": scored,
            "max_iterations": NEIGHBOUR_ITERATIONS if scored else MAX_ITERATIONS,
        }
        what = "all trials" if where == ALL else f"without fold {where + 1}"
        only = f" for {sources[0]}" if len(sources) == 1 else ""
        name = f"accounts{only} at {size.latent_dim} latent dimensions, {what}"
        return self.task("fit_ladder", name, "accounts", [full], **kwargs)
