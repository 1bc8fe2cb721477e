"""Starting values: smoothed log rates, their leading components, and regressions over them."""

from __future__ import annotations

import numpy as np
from scipy.ndimage import gaussian_filter1d

from portfire.accounts import make_design
from portfire.dynamics import READOUTS, Setup, parameter_shapes
from portfire.session import Trials

SMOOTHING_S = 0.05


def smooth_log_rates(trials: Trials, bin_s: float) -> tuple[np.ndarray, np.ndarray]:
    """Log rates smoothed within trials (Gaussian, SD 50 ms), and the mean rate of every unit.

    Returns
    -------
    log_rate : array, shape (trial, time, unit), log spikes/s
    mean : array, shape (unit,), spikes/s
    """
    mask = trials.mask.astype(float)
    counts = trials.counts.astype(float) * mask[:, :, None]
    mean = (counts.sum(axis=(0, 1)) + 0.5) / (mask.sum() * bin_s)
    width = SMOOTHING_S / bin_s
    seen = gaussian_filter1d(mask, width, axis=1, mode="constant")
    rate = gaussian_filter1d(counts, width, axis=1, mode="constant") / bin_s
    # One expected spike at the unit's mean rate over about the kernel's width keeps the log finite.
    weight = 0.15
    return np.log((rate + weight * mean) / (seen[:, :, None] + weight)), mean


def _ridge(design: np.ndarray, target: np.ndarray, penalty: float) -> np.ndarray:
    gram = design.T @ design
    gram[np.diag_indices_from(gram)] += penalty * np.trace(gram) / len(gram) + 1e-12
    return np.linalg.solve(gram, design.T @ target)


def _symmetric_power(matrix: np.ndarray, power: float) -> np.ndarray:
    values, vectors = np.linalg.eigh(matrix)
    return (vectors * np.maximum(values, 1e-10 * values.max() + 1e-300) ** power) @ vectors.T


def start_values(trials: Trials, setup: Setup) -> dict[str, np.ndarray]:
    """Starting values of linear dynamics from data alone; deterministic.

    Parameters
    ----------
    trials : Trials
    setup : Setup

    Returns
    -------
    dict of arrays, as `parameter_shapes` names them
    """
    d, before = setup.latent_dim, setup.n_before
    log_rate, mean = smooth_log_rates(trials, setup.bin_s)
    gaussian = setup.model.readout == "gaussian"
    if gaussian:
        width = SMOOTHING_S / setup.bin_s
        seen = gaussian_filter1d(trials.mask.astype(float), width, axis=1, mode="constant")
        values = np.sqrt(trials.counts) * trials.mask[:, :, None]
        log_rate = (
            gaussian_filter1d(values, width, axis=1, mode="constant") / np.maximum(seen, 1e-9)[:, :, None]
        )
        mean = np.ones(setup.n_units)
    observed = log_rate[trials.mask]
    centre = observed.mean(axis=0)
    scale = np.sqrt(mean)
    _, _, axes = np.linalg.svd((observed - centre) * scale, full_matrices=False)
    readout = axes[:d].T / scale[:, None]
    pull = axes[:d].T * scale[:, None]
    x = (log_rate - centre) @ pull
    n_after = trials.mask.shape[1] - before
    rows = make_design(trials).rows
    after, live = x[:, before:], trials.mask[:, before:]
    lasting = [k for k, column in enumerate(setup.columns) if column.persistence_s > 0]
    prompt = [k for k, column in enumerate(setup.columns) if column.persistence_s == 0]
    kernels, cue = setup.kernels(n_after), setup.cue_basis(n_after)
    both = live[:, 1:] & live[:, :-1]
    trial, time = np.nonzero(both)
    pushes = rows[trial][:, lasting] * kernels[lasting][:, time + 1].T
    regressors = np.concatenate(
        [after[trial, time], np.ones((len(trial), 1)), cue[:, time + 1].T, pushes], axis=1
    )
    change = after[trial, time + 1] - after[trial, time]
    beta = (
        _ridge(regressors / (norm := np.linalg.norm(regressors, axis=0) + 1e-12), change, 1e-6)
        / norm[:, None]
    )
    residual = change - regressors @ beta
    noise_cov = np.atleast_2d(np.cov(residual.T)) + 1e-9 * np.eye(d)
    whiten = _symmetric_power(noise_cov, -0.5)
    spread = np.atleast_2d(np.cov((x[trials.mask] @ whiten).T))
    noise = float(d / np.trace(spread))
    forward = whiten * np.sqrt(noise)
    back = np.linalg.inv(forward)
    n_cue = len(cue)
    transition = forward @ (np.eye(d) + beta[:d].T) @ back
    radius = np.abs(np.linalg.eigvals(transition)).max()
    transition = transition / max(1.0, radius / 1.02)
    at_cue = after[:, 0]
    prompt_rows = np.concatenate([np.ones((len(at_cue), 1)), rows[:, prompt]], axis=1)
    first = _ridge(prompt_rows, at_cue, 1e-6)
    left = at_cue - prompt_rows @ first
    initial_cov = np.atleast_2d(np.cov(left.T)) if len(left) > 1 else noise_cov
    origin = forward @ first[0]
    push = np.zeros((d, len(setup.columns)))
    push[:, prompt] = forward @ first[1:].T
    push[:, lasting] = forward @ beta[d + 1 + n_cue :].T
    values = {
        "readout": readout @ back,
        "log_rate": centre + readout @ first[0],
        "drift": np.zeros((setup.n_units, setup.n_drift)),
        "transition": transition,
        "offset": forward @ beta[d] + transition @ origin - origin,
        "cue": forward @ beta[d + 1 : d + 1 + n_cue].T,
        "push": push,
        "initial_factor": 0.5 * _symmetric_power(forward @ initial_cov @ forward.T, 0.5),
        "sustained_factor": np.sqrt(0.3 * setup.n_reference * noise) * np.eye(d),
        "noise": np.array(noise),
        "log_run_up_noise": np.array(np.log(noise)),
        **READOUTS[setup.model.readout].start(trials.counts[trials.mask].astype(float)),
    }
    return {name: np.asarray(values[name], dtype=float) for name in parameter_shapes(setup)}
