"""Fits in which the parameters themselves differ between groups of trials."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from typing import cast

import jax
import jax.numpy as jnp
import numpy as np
from numpy.typing import NDArray

from portfire.accounts import Account, make_design
from portfire.dynamics import Params, Setup
from portfire.errors import PortfireError
from portfire.estimation._ascent import _open_covariances
from portfire.estimation._fit import Fit
from portfire.estimation._freedom import free_parameters, project
from portfire.estimation._objective import Objective, Values, drift_penalty, n_threads, settle, to_device
from portfire.estimation._optimise import ascend
from portfire.estimation._scaling import make_scaling
from portfire.inference import Chunk, Guess, Packed, bound_gradient, pack, start_guess
from portfire.session import Trials

Array = NDArray[np.float64]
# Parameters of a group from the common ones (with ``extra`` among them) and the group's design row.
Bend = Callable[[Params, jax.Array], Params]
MAX_GROUPS = 24


@dataclass(frozen=True)
class GroupedFit:
    """Maximum of the objective of a model whose parameters differ between groups.

    Parameters
    ----------
    params : dict of arrays
        Common parameters, with ``extra``.
    value : float
        Penalised bound on the log marginal likelihood (nats).
    status : str
    """

    params: Values
    value: float
    status: str


def split_groups(trials: Trials) -> list[NDArray[np.int64]]:
    """Rows of the trials of each distinct design row.

    Raises
    ------
    PortfireError
        If there are more than 24.
    """
    rows = make_design(trials).rows
    if not rows.shape[1]:
        return [np.arange(len(trials))]
    _, member = np.unique(np.round(rows, 9), axis=0, return_inverse=True)
    n_groups = int(member.max()) + 1
    if n_groups > MAX_GROUPS:
        raise PortfireError(
            f"the trials have {n_groups} conditions, and at most {MAX_GROUPS} can be told apart"
        )
    return [np.flatnonzero(member.ravel() == g) for g in range(n_groups)]


class GroupedObjective:
    """The objective where each group of trials has parameters of its own, bent from the common ones.

    Parameters
    ----------
    trials : Trials
    setup : Setup
    bend : callable
        Pure and differentiable.
    """

    def __init__(self, trials: Trials, setup: Setup, bend: Bend) -> None:
        self.setup, self.bend = setup, bend
        groups = split_groups(trials)
        rows = make_design(trials).rows
        self.packs: list[Packed] = [pack(trials[group], setup) for group in groups]
        self.rows = [jnp.asarray(rows[group[0]]) for group in groups]
        self.guesses: list[list[Guess]] = [[start_guess(setup, c) for c in p.chunks] for p in self.packs]
        self._pool = ThreadPoolExecutor(n_threads())

    def __call__(self, params: Values, frame: Array | None = None) -> tuple[float, Values]:
        """Penalised bound (nats) and its gradient by every common parameter."""
        common = to_device(params)
        bent = [jax.vjp(lambda p, row=row: self.bend(p, row), common) for row in self.rows]

        def one(task: tuple[int, Chunk, Guess]) -> tuple[int, Guess, float, Params]:
            g, chunk, guess = task
            own = bent[g][0]
            bound = settle(own, self.setup, chunk, guess)
            gradient = bound_gradient(own, self.setup, chunk, bound)
            return g, bound.guess, float(bound.value @ chunk.weight), gradient

        tasks = [
            (g, chunk, guess)
            for g, packed in enumerate(self.packs)
            for chunk, guess in zip(packed.chunks, self.guesses[g], strict=True)
        ]
        done = list(self._pool.map(one, tasks))
        value = sum(part[2] for part in done)
        gradient = {name: np.zeros(np.shape(value)) for name, value in params.items()}
        for g in range(len(self.packs)):
            mine = [part[3] for part in done if part[0] == g]
            total = {name: sum((part[name] for part in mine[1:]), mine[0][name]) for name in mine[0]}
            pulled = bent[g][1](total)[0]
            for name in gradient:
                gradient[name] += np.asarray(pulled[name])
        if np.isfinite(value):
            self.guesses = [[part[1] for part in done if part[0] == g] for g in range(len(self.packs))]
        gradient["drift"] = gradient["drift"] - params["drift"]
        return value - drift_penalty(params), gradient

    def close(self) -> None:
        """Let the threads go."""
        self._pool.shutdown()


def fit_grouped(
    start: Fit,
    trials: Trials,
    account: Account,
    bend: Bend,
    n_extra: int,
    tolerance: float = 0.1,
    max_iterations: int = 100,
) -> GroupedFit:
    """Maximise the objective of a bent model from a fit, with its extra parameters starting at zero.

    Parameters
    ----------
    start : Fit
        To the same trials.
    account : Account
        What the common parameters free.
    bend : callable
        Reads ``extra``, shape (n_extra,), among the parameters; must return the same names, without it.
    n_extra : int
    tolerance : float, default 0.1
        In nats.
    """
    setup = start.setup
    freedom = free_parameters(account, setup, start.drift)
    plain = Objective(pack(trials, setup), setup)
    params = _open_covariances(plain, project(start.params, freedom), setup, freedom)
    plain(params)
    scaling = make_scaling(params, setup, freedom, plain.packed, plain.last)
    plain.close()
    grouped = GroupedObjective(trials, setup, bend)
    params = {**params, "extra": np.zeros(n_extra)}
    scale = np.ones(n_extra)
    if n_extra:
        slope = grouped(params)[1]["extra"]
        for k in range(n_extra):
            for step in (1e-3, 1e-2):
                bumped = grouped({**params, "extra": step * np.eye(n_extra)[k]})[1]["extra"][k]
                curvature = (slope[k] - bumped) / step
                if np.isfinite(curvature) and curvature > 1e-6:
                    scale[k] = 1.0 / np.sqrt(curvature)
                    break
    scaling = replace(scaling, centre=params, scalars={**scaling.scalars, "extra": scale})
    ascent = ascend(cast(Objective, grouped), scaling, tolerance, max_iterations)
    grouped.close()
    return GroupedFit(ascent.params, ascent.value, ascent.status)
