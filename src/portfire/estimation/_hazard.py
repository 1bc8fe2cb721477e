"""The response hazard: how the state, as the spikes leave it uncertain, comes before a response."""

from __future__ import annotations

import numpy as np
from scipy.special import expit

from portfire.estimation._fit import Fit, Hazard
from portfire.estimation._kinds import kind_of
from portfire.inference import pack
from portfire.session import Trials

N_DRAWS = 8


def fit_hazard(fitted: Fit, trials: Trials) -> Hazard | None:
    """Learn sigmoid(level + weights·x_t) over posterior draws of the path (not over smoothed means).

    The event belongs to the last whole bin before the response; trials without a response are
    censored. None where no trial has a response.
    """
    setup, before = fitted.setup, fitted.setup.n_before
    if not np.isfinite(trials.produced_s).any():
        return None
    packed = pack(trials, setup)
    draws = kind_of(setup).draw_posterior(fitted.params, setup, packed, N_DRAWS, fitted.seed + 1)
    designs, events = [], []
    for chunk, members, paths in zip(packed.chunks, packed.members, draws, strict=True):
        mask = np.asarray(chunk.mask)
        for lane, row in enumerate(members):
            last = before + int(mask[before:, lane].sum())
            event = np.zeros(last - before)
            if np.isfinite(trials.produced_s[row]):
                event[-1] = 1.0
            designs.append(paths[before:last, :, :, lane].transpose(2, 0, 1).reshape(-1, setup.latent_dim))
            events.append(np.tile(event, N_DRAWS))
    x = np.concatenate(designs)
    y = np.concatenate(events)
    return _logistic(x, y)


def _logistic(x: np.ndarray, y: np.ndarray) -> Hazard:
    centre, scale = x.mean(axis=0), x.std(axis=0) + 1e-9
    design = np.concatenate([np.ones((len(x), 1)), (x - centre) / scale], axis=1)
    beta = np.zeros(design.shape[1])
    beta[0] = np.log(y.mean() / (1 - y.mean()))
    # A unit-variance prior on standardised weights, worth one trial, keeps separable data finite.
    penalty = np.diag([0.0] + [float(N_DRAWS)] * x.shape[1])
    for _ in range(50):
        p = expit(design @ beta)
        gradient = design.T @ (y - p) - penalty @ beta
        step = np.linalg.solve((design * (p * (1 - p))[:, None]).T @ design + penalty, gradient)
        beta = beta + step
        if np.abs(step).max() < 1e-8:
            break
    weights = beta[1:] / scale
    return Hazard(float(beta[0] - weights @ centre), weights)
