"""Quasi-Newton ascent (L-BFGS: Liu and Nocedal 1989, Math. Program. 45:503) in scaled coordinates."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from portfire.estimation._objective import Objective, Values
from portfire.estimation._scaling import Scaling

MEMORY = 40
_LOOK_BACK = 4
_ARMIJO = 1e-4
_MAX_HALVINGS = 12


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
    """

    params: Values
    value: float
    trace: tuple[float, ...]
    status: str


class _Memory:
    """Pairs of steps and gradient changes in flat coordinates, newest last."""

    def __init__(self) -> None:
        self.pairs: list[tuple[np.ndarray, np.ndarray]] = []

    def add(self, step: np.ndarray, change: np.ndarray) -> None:
        """Keep a pair whose curvature is positive."""
        if step @ change > 1e-8 * np.linalg.norm(step) * np.linalg.norm(change):
            self.pairs = [*self.pairs, (step, change)][-MEMORY:]

    def solve(self, gradient: np.ndarray) -> np.ndarray:
        """Inverse Hessian times a vector (two-loop recursion)."""
        q, kept = gradient.copy(), []
        for step, change in reversed(self.pairs):
            rho = 1.0 / (step @ change)
            alpha = rho * (step @ q)
            q -= alpha * change
            kept.append((rho, alpha))
        if self.pairs:
            step, change = self.pairs[-1]
            q *= (step @ change) / (change @ change)
        for (step, change), (rho, alpha) in zip(self.pairs, reversed(kept), strict=True):
            q += (alpha - rho * (change @ q)) * step
        return q


def ascend(objective: Objective, scaling: Scaling, tolerance: float, max_iterations: int) -> Ascent:
    """Maximise the objective from the centre of the scaling.

    Stops when the last four iterations together gained less than ``tolerance`` nats.
    """
    params = scaling.centre
    value, gradient = objective(params)
    flat = np.zeros(scaling.size)
    slope = -scaling.pull_back(gradient, flat)
    memory, trace, status = _Memory(), [value], "iterations"
    for _ in range(max_iterations):
        moved = _search(objective, scaling, flat, value, slope, -memory.solve(slope))
        if moved is None and memory.pairs:
            # Old curvature may mislead; a step in the coordinates themselves is safe.
            memory = _Memory()
            moved = _search(objective, scaling, flat, value, slope, -slope)
        if moved is None:
            status = "converged"
            break
        new_flat, value, params, gradient = moved
        new_slope = -scaling.pull_back(gradient, new_flat)
        memory.add(new_flat - flat, new_slope - slope)
        flat, slope = new_flat, new_slope
        trace.append(value)
        if len(trace) > _LOOK_BACK and trace[-1] - trace[-1 - _LOOK_BACK] < tolerance:
            status = "converged"
            break
    return Ascent(params, value, tuple(trace), status)


def _search(
    objective: Objective,
    scaling: Scaling,
    flat: np.ndarray,
    value: float,
    slope: np.ndarray,
    direction: np.ndarray,
) -> tuple[np.ndarray, float, Values, Values] | None:
    """A step along a direction that raises the objective enough; None where there is none."""
    descent = float(slope @ direction)
    if not np.isfinite(descent) or descent >= 0:
        return None
    length = scaling.longest(direction)
    for _ in range(_MAX_HALVINGS):
        trial = flat + length * direction
        params = scaling.parameters(trial)
        new_value, gradient = objective(params, scaling.frame(trial))
        finite = np.isfinite(new_value) and all(np.all(np.isfinite(part)) for part in gradient.values())
        if finite and new_value >= value - _ARMIJO * length * descent:
            return trial, new_value, params, gradient
        if finite:
            # Minimum of the parabola through both values and the first slope, kept within bounds.
            fitted = -0.5 * descent * length**2 / (value - new_value - descent * length)
            length = float(np.clip(fitted, 0.1 * length, 0.5 * length))
        else:
            length *= 0.2
    return None
