"""Running a fit forward: paths, rates and responses drawn from the model itself."""

from __future__ import annotations

import numpy as np
from scipy.special import expit

from portfire.accounts import make_design
from portfire.estimation._fit import Fit
from portfire.estimation._kinds import kind_of
from portfire.session import Trials


def draw_paths(fitted: Fit, rows: np.ndarray, n_time: int, rng: np.random.Generator) -> np.ndarray:
    """Latent paths after the set cue from the prior of the model, shape (trial, time, D).

    Parameters
    ----------
    rows : array, shape (trial, column)
        Design rows.
    n_time : int
        Bins after the set cue.
    """
    return kind_of(fitted.setup).draw_forward(fitted.params, fitted.setup, rows, n_time, rng).path


def draw_ends(fitted: Fit, path: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """Last whole bin before each response by the hazard, shape (trial,); the length where none comes."""
    assert fitted.hazard is not None
    # A runaway path has a certain response, whatever the exponent.
    risk = expit(np.clip(fitted.hazard.level + path @ fitted.hazard.weights, -60, 60))
    fired = rng.random(risk.shape) < risk
    return np.where(fired.any(axis=1), fired.argmax(axis=1) + 1, path.shape[1])


def predict_rates(fitted: Fit, trials: Trials, n_draws: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Mean rates per condition that the model predicts, over trials still running by its own hazard.

    Returns
    -------
    rates : array, shape (condition, time, unit), spikes/s, NaN where nothing runs
    running : array, shape (condition, time)
        Share of the drawn trials still running.
    """
    rng = np.random.default_rng(seed)
    setup, p = fitted.setup, fitted.params
    n_time = trials.mask.shape[1] - setup.n_before
    rows = np.repeat(make_design(trials).rows, n_draws, axis=0)
    drift = np.repeat(setup.drift_basis(trials) @ p["drift"].T, n_draws, axis=0)
    condition = np.repeat(trials.condition, n_draws)
    path = draw_paths(fitted, rows, n_time, rng)
    if fitted.hazard is None:
        ends = np.repeat(trials.n_bins, n_draws)
    else:
        ends = draw_ends(fitted, path, rng)
    alive = np.arange(n_time) < ends[:, None]
    n_conditions = len(trials.conditions)
    rates = np.full((n_conditions, n_time, setup.n_units), np.nan)
    running = np.zeros((n_conditions, n_time))
    for c in range(n_conditions):
        mine = condition == c
        if not mine.any():
            continue
        running[c] = alive[mine].mean(axis=0)
        offset = np.exp(p["log_rate"] + drift[mine])
        for t in np.flatnonzero(alive[mine].any(axis=0)):
            live = alive[mine][:, t]
            eta = path[mine][live, t] @ p["readout"].T
            if setup.model.readout == "gaussian":
                level = eta + np.log(offset[live])
                rates[c, t] = (level**2 + np.exp(p["log_variance"])).mean(axis=0) / setup.bin_s
            else:
                rates[c, t] = (np.exp(np.minimum(eta, 20.0)) * offset[live]).mean(axis=0)
    return rates, running
