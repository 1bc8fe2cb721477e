"""Efficient scores: what directions beyond an account gain, with every estimated parameter allowed for."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from portfire.accounts import Account
from portfire.dynamics import Setup
from portfire.estimation._directions import Covariances, Directions
from portfire.estimation._draws import draw_trials
from portfire.estimation._fit import Fit
from portfire.estimation._freedom import free_parameters
from portfire.estimation._objective import Objective, Values, settle, to_device
from portfire.estimation._scaling import Scaling, make_scaling
from portfire.inference import bound_scores, pack, start_guess
from portfire.session import Trials

Array = NDArray[np.float64]
_NUISANCE_STEP = 0.1
# In units of complete information; a free direction has a share of it, one of the gauge none.
_RIDGE = 0.005
_MAX_STEPS = 40


@dataclass(frozen=True)
class Efficient:
    """A restricted fit with directions beyond it, and the curvature that ties the two.

    The efficient score of the directions is U_p − Wᵀ U_n, with U_n the score by the free parameters of
    the account and W = H_nn⁻¹ H_np: to first order it is the score after a refit of those parameters
    (Neyman 1959; Bera and Bilias 2001, J. Stat. Plan. Inference 97:9, both from memory).

    Parameters
    ----------
    fitted : Fit
        Of the restricted account.
    directions : Directions
    scaling : Scaling
        Coordinates of the free parameters.
    weights : array, shape (free, direction)
        W.
    information : array, shape (direction, direction)
        Efficient information that the fit expects of these trials: the sum over drawn trials of the outer
        products of their efficient scores. Positive, also where the account is wrong.
    """

    fitted: Fit
    directions: Directions
    scaling: Scaling
    weights: Array
    information: Array

    @property
    def params(self) -> Values:
        """Parameters at which scores are taken."""
        return self.directions.apply(self.scaling.centre, np.zeros(self.directions.size))

    def project(self, gradient: Values) -> Array:
        """Efficient score from a gradient by the parameters, shape (direction,)."""
        raw = self.directions.pull(gradient, self.params)
        score = raw - self.weights.T @ self.scaling.pull_back(gradient)
        if isinstance(self.directions, Covariances):
            # Back from where it was taken to zero.
            score = score + self.information @ self.directions.offset
        return score

    def score(self, trials: Trials) -> Array:
        """Efficient score of these trials at the restricted fit, shape (direction,)."""
        objective = Objective(pack(trials, self.fitted.setup), self.fitted.setup)
        _, gradient = objective(self.params)
        objective.close()
        return self.project(gradient)

    def score_trials(self, trials: Trials) -> Array:
        """Efficient scores of single trials, shape (trial, direction).

        They sum to `score`, up to the drift's prior and what the covariances' offset adds.
        """
        gradients = score_each(self.params, self.fitted.setup, trials)
        raw = self.directions.pull(gradients, self.params)
        free = np.empty((self.scaling.size, len(trials)))
        for i in range(len(trials)):
            free[:, i] = self.scaling.pull_back({name: g[..., i] for name, g in gradients.items()})
        return (raw - self.weights.T @ free).T


def score_each(
    params: Values, setup: Setup, trials: Trials, rows: Mapping[int, float] | None = None
) -> Values:
    """Gradient of each trial's bound on its log marginal likelihood, each parameter's shape plus (trial,).

    Parameters
    ----------
    rows : mapping of int to float, optional
        Design columns that have this value on every trial instead of their own.
    """
    packed, device = pack(trials, setup), to_device(params)
    parts = []
    for chunk in packed.chunks:
        for column, value in (rows or {}).items():
            chunk = chunk._replace(rows=chunk.rows.at[column].set(value))
        bound = settle(device, setup, chunk, start_guess(setup, chunk))
        parts.append(bound_scores(device, setup, chunk, bound))
    return {
        name: np.moveaxis(packed.gather([np.asarray(part[name]) for part in parts]), 0, -1) for name in params
    }


def make_efficient(
    fitted: Fit,
    trials: Trials,
    directions: Directions,
    rng: np.random.Generator,
    n_curvature: int = 400,
    n_pilot: int = 3,
    tolerance: float = 0.01,
    free: Account | None = None,
) -> Efficient:
    """Measure the curvature that ties directions to the free parameters of a fit.

    Products of the Hessian with vectors are central differences of the exact gradient; H_nn W = H_np is
    solved by conjugate directions, shared between the columns, with a ridge that keeps out the gauge.

    Parameters
    ----------
    fitted : Fit
        Of the restricted account, to ``trials``.
    trials : Trials
    directions : Directions
    n_curvature : int, default 400
        Trials, spread evenly over the session, from which the curvature is taken.
    n_pilot : int, default 3
        Sessions drawn for the information.
    tolerance : float, default 0.01
        Share of a column's right-hand side that may be left.
    free : Account, optional
        What counts as estimated beside the directions; by default all that the fit's account frees.
    """
    setup = fitted.setup
    part = trials
    if len(trials) > n_curvature:
        part = trials[np.round(np.linspace(0, len(trials) - 1, n_curvature)).astype(int)]
    share = len(part) / len(trials)
    packed = pack(part, setup)
    objective = Objective(packed, setup)
    freedom = free_parameters(free or fitted.account, setup, fitted.drift)
    base = fitted.params
    objective(base)
    scaling = make_scaling(base, setup, freedom, packed, objective.last)
    k = directions.size
    still, nowhere = np.zeros(scaling.size), np.zeros(k)

    def slope(flat: Array, amount: Array) -> Array:
        return scaling.pull_back(objective(directions.apply(scaling.parameters(flat), amount))[1])

    def bend(flat: Array, amount: Array) -> Array:
        """Minus the Hessian times a vector, for all trials, in its free rows."""
        return -0.5 * (slope(flat, amount) - slope(-flat, -amount)) / share

    right = np.stack(
        [bend(still, step * row) / step for step, row in zip(directions.steps, np.eye(k), strict=True)], 1
    )

    def product(v: Array) -> Array:
        length = _NUISANCE_STEP / max(float(np.linalg.norm(v)), 1e-300)
        return bend(length * v, nowhere) / length + _RIDGE * v

    weights = _solve(product, right, tolerance)
    objective.close()
    pilot = Efficient(fitted, directions, scaling, weights, np.zeros((k, k)))
    each = np.concatenate([pilot.score_trials(draw_trials(fitted, trials, rng)) for _ in range(n_pilot)])
    return replace(pilot, information=each.T @ each / n_pilot)


def _solve(product: Callable[[Array], Array], right: Array, tolerance: float) -> Array:
    """Solve H W = right column by column by conjugate directions that all columns share.

    Directions along which H does not curve upwards (those of the gauge among them) are left out.
    """
    out = np.zeros_like(right)
    known: list[tuple[Array, Array]] = []
    for j in range(right.shape[1]):
        left = right[:, j].copy()
        for v, hv in known:
            share = (v @ left) / (v @ hv)
            out[:, j] += share * v
            left = left - share * hv
        goal = tolerance * np.linalg.norm(right[:, j])
        for _ in range(_MAX_STEPS):
            if np.linalg.norm(left) <= goal:
                break
            v = left.copy()
            for w, hw in known:
                v -= w * (hw @ v) / (w @ hw)
            hv = product(v)
            if not v @ hv > 1e-6 * (v @ v):
                break
            known.append((v, hv))
            share = (v @ left) / (v @ hv)
            out[:, j] += share * v
            left = left - share * hv
    return out
