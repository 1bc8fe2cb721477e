"""Quasi-Newton ascent (L-BFGS: Liu and Nocedal 1989) in scaled coordinates."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize

from portfire.dynamics import Setup
from portfire.estimation._freedom import Freedom
from portfire.estimation._objective import Objective, Values
from portfire.estimation._scaling import make_scaling

_MEMORY = 30
_LOOK_BACK = 4


@dataclass(frozen=True)
class Ascent:
    """Where an ascent ended.

    Parameters
    ----------
    params : dict of arrays
    value : float
        Objective, in nats.
    trace : tuple of float
        Objective after every iteration.
    status : {"converged", "iterations"}
    gradient : dict of arrays
        At the end.
    """

    params: Values
    value: float
    trace: tuple[float, ...]
    status: str
    gradient: Values


def ascend(
    objective: Objective,
    params: Values,
    setup: Setup,
    freedom: Freedom,
    tolerance: float,
    max_iterations: int,
) -> Ascent:
    """Maximise the objective from ``params`` over what is free.

    Stops when the last four iterations together gained less than ``tolerance`` nats.
    """
    packed = objective.packed
    objective(params)
    n_chunks = min(len(packed.chunks), 3)
    share = sum(len(rows) for rows in packed.members[:n_chunks]) / packed.n_trials
    scaling = make_scaling(params, setup, freedom, packed, objective.last[:n_chunks], share)
    best: dict[str, object] = {"value": -np.inf, "params": params, "gradient": None}
    trace: list[float] = []

    def negative(flat: np.ndarray) -> tuple[float, np.ndarray]:
        moved = scaling.parameters(flat)
        value, gradient = objective(moved)
        slope = scaling.pull_back(gradient)
        if not np.isfinite(value) or not np.all(np.isfinite(slope)):
            return 1e15, np.zeros_like(flat)
        if value > best["value"]:  # type: ignore[operator]
            best.update(value=value, params=moved, gradient=gradient)
        return -value, -slope

    def watch(intermediate_result) -> None:  # type: ignore[no-untyped-def]
        trace.append(-float(intermediate_result.fun))
        if len(trace) > _LOOK_BACK and trace[-1] - trace[-1 - _LOOK_BACK] < tolerance:
            raise StopIteration

    minimize(
        negative,
        np.zeros(scaling.size),
        jac=True,
        method="L-BFGS-B",
        callback=watch,
        options={"maxcor": _MEMORY, "maxiter": max_iterations, "ftol": 0.0, "gtol": 1e-6, "maxls": 30},
    )
    status = "iterations" if len(trace) >= max_iterations else "converged"
    return Ascent(best["params"], best["value"], tuple(trace), status, best["gradient"])  # type: ignore[arg-type]
