"""From trials to a maximum: cold from the data, or warm from a fit that contains or is contained."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from portfire.accounts import Account
from portfire.dynamics import Setup
from portfire.estimation._freedom import Freedom, free_parameters, project
from portfire.estimation._objective import Objective, Values
from portfire.estimation._optimise import ascend
from portfire.estimation._scaling import Scaling, make_scaling
from portfire.estimation._start import start_values
from portfire.estimation._stretch import n_stretches
from portfire.inference import Packed, Path, pack
from portfire.session import Trials

_PART_TRIALS = 64
# Nats that four iterations must gain for an ascent to count as far off; after that the coordinates are made
# anew, and the latent space may stretch.
_NEAR = 5.0
_STRETCH_STEP = 0.03


@dataclass(frozen=True)
class Maximum:
    """Where the search ended, with the modes of all paths."""

    params: Values
    value: float
    trace: tuple[float, ...]
    status: str
    packed: Packed
    paths: list[Path]


def _open_covariances(objective: Objective, params: Values, setup: Setup, freedom: Freedom) -> Values:
    """Start covariances that are free but zero from the positive eigenvectors of their score.

    At zero the gradient by the factor vanishes although the score by the covariance may not; a score
    without a positive eigenvalue marks a maximum at the boundary, and the factor stays at zero.
    """
    unit = float(setup.n_reference * params["noise"])
    sizes = {"initial_factor": setup.initial_bins * float(params["noise"]), "sustained_factor": unit}
    allowed = {"initial_factor": freedom.initial_factor, "sustained_factor": freedom.sustained_factor}
    for name, size in sizes.items():
        if not allowed[name] or np.any(params[name]):
            continue
        d = setup.latent_dim
        small = 1e-3 * np.sqrt(size)
        base, gradient = objective({**params, name: small * np.eye(d)})
        score = (gradient[name] + gradient[name].T) / (4 * small)
        values, vectors = np.linalg.eigh(score)
        if values[-1] <= 0:
            continue
        towards = vectors * np.sqrt(np.maximum(values, 0) / values[-1])
        tried = [(base, params[name])]
        for share in (0.03, 0.1, 0.3, 1.0):
            candidate = np.sqrt(share * size) * towards
            tried.append((objective({**params, name: candidate})[0], candidate))
        best = max(tried, key=lambda pair: pair[0])[1]
        # Any positive size serves as a start: the ascent settles it.
        params = {**params, name: best if np.any(best) else np.sqrt(0.01 * size) * towards}
    return params


def _scale(objective: Objective, params: Values, setup: Setup, freedom: Freedom) -> Scaling:
    """Scaled coordinates around ``params``, from the posteriors there."""
    objective(params)
    return make_scaling(params, setup, freedom, objective.packed, objective.last)


def _part(trials: Trials, n_trials: int) -> Trials:
    """Trials spread evenly over the session."""
    if len(trials) <= n_trials:
        return trials
    return trials[np.round(np.linspace(0, len(trials) - 1, n_trials)).astype(int)]


def _add_stretches(scaling: Scaling, part: Trials, whole: Objective) -> Scaling:
    """The same scaling with stretches of the latent space, scaled by their curvature on a part."""
    setup = whole.setup
    size = n_stretches(setup.latent_dim)
    free = replace(scaling, stretches=np.eye(size))
    objective = Objective(pack(part, setup), setup)

    def slope(position: int | None) -> np.ndarray:
        flat = np.zeros(free.size)
        if position is not None:
            flat[free.size - size + position] = _STRETCH_STEP
        return free.pull_back(objective(free.parameters(flat), free.frame(flat))[1], flat)[-size:]

    base = slope(None)
    curvature = np.array([base - slope(k) for k in range(size)]) / _STRETCH_STEP
    objective.close()
    values, vectors = np.linalg.eigh(0.5 * (curvature + curvature.T))
    values = np.abs(values) * whole.packed.n_trials / len(part)
    return replace(scaling, stretches=(vectors / np.sqrt(np.maximum(values, 1.0))) @ vectors.T)


def find_maximum(
    trials: Trials,
    setup: Setup,
    account: Account,
    drift: bool,
    start: Values | None,
    tolerance: float,
    max_iterations: int,
) -> Maximum:
    """Maximise the objective for an account.

    A cold search first climbs on a part of the trials, which costs a fraction and ends near enough.

    Parameters
    ----------
    drift : bool
        Whether the drift coefficients are free.
    start : dict of arrays, optional
        Parameters of any account on the same setup; projected on what is free, and opened where a
        covariance is free but zero.
    tolerance : float
        In nats.
    """
    freedom = free_parameters(account, setup, drift)
    if start is None:
        params = project(start_values(trials, setup), freedom)
        if len(trials) >= 2 * _PART_TRIALS:
            part = Objective(pack(_part(trials, _PART_TRIALS), setup), setup)
            params = ascend(part, _scale(part, params, setup, freedom), 1.0, max_iterations).params
            part.close()
    else:
        params = project(start, freedom)
    packed = pack(trials, setup)
    objective = Objective(packed, setup)
    params = _open_covariances(objective, params, setup, freedom)
    scaling = _scale(objective, params, setup, freedom)
    ascent = ascend(objective, scaling, max(tolerance, _NEAR), max_iterations)
    trace = ascent.trace
    if tolerance < _NEAR and len(trace) <= max_iterations:
        scaling = _scale(objective, ascent.params, setup, freedom)
        scaling = _add_stretches(scaling, _part(trials, _PART_TRIALS), objective)
        ascent = ascend(objective, scaling, tolerance, max_iterations + 1 - len(trace))
        trace = (*trace, *ascent.trace[1:])
    objective.close()
    status = "unconverged paths" if objective.n_unconverged else ascent.status
    return Maximum(ascent.params, ascent.value, trace, status, packed, objective.paths)
