"""Slow drift of the rates: it interpolates held-out blocks, and reverts to the mean outside its data."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from portfire.comparison import fold_of, training_rows
from portfire.dynamics import ModelFile, make_setup

from ._world import LATENT_DIM, N_REFERENCE, blank_trials

DRIFTING = ModelFile(name="drifting", drift="on", n_bumps=2, cue_duration_s=0.15)


def basis_of(trials):
    return make_setup(trials, DRIFTING, LATENT_DIM, True, N_REFERENCE).drift_basis(trials)


def test_prior_is_a_smooth_process_of_the_model_files_size():
    trials = blank_trials(200)
    basis = basis_of(trials)
    time = (trials.set_s - trials.set_s[0]) / np.ptp(trials.set_s)
    wanted = 0.3**2 * np.exp(-0.5 * ((time[:, None] - time) / 0.2) ** 2)
    # A few functions stand for the whole process: a few per cent of its variance are lost between them.
    assert np.abs(basis @ basis.T - wanted).max() < 0.1 * 0.3**2
    assert basis.shape[1] < 10


def test_drift_reverts_to_the_mean_far_outside_the_session():
    trials = blank_trials(100)
    away = replace(trials, set_s=trials.set_s + 2.0 * np.ptp(trials.set_s))
    assert np.abs(basis_of(away)).max() < 1e-3
    assert np.abs(basis_of(trials)).max() > 0.2


def test_selected_trials_keep_the_clock_of_their_session():
    trials = blank_trials(100)
    rows = np.arange(60, 80)
    np.testing.assert_array_equal(basis_of(trials)[rows], basis_of(trials[rows]))


def test_held_out_blocks_are_interpolated():
    """Coefficients from the training trials predict the drift in held-out blocks, the first and last too."""
    trials = blank_trials(300)
    basis = basis_of(trials)
    rng = np.random.default_rng(0)
    time = (trials.set_s - trials.set_s[0]) / np.ptp(trials.set_s)
    cov = 0.3**2 * np.exp(-0.5 * ((time[:, None] - time) / 0.2) ** 2) + 1e-9 * np.eye(300)
    drift = np.linalg.cholesky(cov) @ rng.standard_normal((300, 50))
    noisy = drift + 0.15 * rng.standard_normal(drift.shape)
    fold = fold_of(trials.index, 300, 5)
    predicted = np.empty_like(drift)
    for j in range(5):
        train = training_rows(trials.index, 300, 5, {j})
        inside = basis[train]
        gram = inside.T @ inside / 0.15**2 + np.eye(basis.shape[1])
        weights = np.linalg.solve(gram, inside.T @ noisy[train] / 0.15**2)
        predicted[fold == j] = basis[fold == j] @ weights
    left = (drift - predicted).var(axis=1) / drift.var()
    assert left.mean() < 0.1
    assert left[:25].mean() < 0.3
    assert left[-25:].mean() < 0.3
    assert np.abs(predicted).max() < 3 * 0.3 * 1.5
