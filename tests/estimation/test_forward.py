"""Running a fit forward: rates, responses and the hazard, against sums and draws written out."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from scipy.special import expit

from portfire.accounts import make_design
from portfire.estimation import (
    Hazard,
    draw_ends,
    draw_paths,
    fit_hazard,
    predict_rates,
    with_hazard,
)

from ._world import BIN_S, N_TIME, blank_trials, draw_counts, make_truth


def test_paths_have_the_moments_of_the_prior():
    trials = blank_trials(4, seed=7)
    truth = make_truth(trials, "interval=both,context=both,trial=both", 7)
    p, setup = truth.params, truth.setup
    row = make_design(trials).rows[:1]
    path = draw_paths(truth, np.repeat(row, 40_000, axis=0), N_TIME, np.random.default_rng(0))
    kernels, border, cue = setup.kernels(N_TIME), setup.border_kernel(N_TIME), setup.cue_basis(N_TIME)
    cov = np.zeros((2, 2))
    for _ in range(setup.initial_bins):
        cov = p["transition"] @ cov @ p["transition"].T + 0.01 * np.eye(2)
    assert setup.initial_bins == 10
    # The state with the trial's own push beside it: one linear system with four noise inputs.
    mean = p["push"] @ (kernels[:, 0] * row[0])
    joint = np.zeros((4, 4))
    joint[2:, 2:] = np.eye(2)
    joint[:2, :2] = cov + p["initial_factor"] @ p["initial_factor"].T
    enter = np.eye(4)
    enter[:2, 2:] = border[0] * p["sustained_factor"]
    joint = enter @ joint @ enter.T
    for t in range(N_TIME):
        if t > 0:
            mean = p["transition"] @ mean + p["offset"] + p["cue"] @ cue[:, t]
            mean = mean + p["push"] @ (kernels[:, t] * row[0])
            step = np.eye(4)
            step[:2, :2], step[:2, 2:] = p["transition"], border[t] * p["sustained_factor"]
            joint = step @ joint @ step.T
            joint[:2, :2] += 0.01 * np.eye(2)
        spread = np.sqrt(np.diag(joint)[:2])
        assert np.abs(path[:, t].mean(axis=0) - mean).max() < 5 * spread.max() / 200
        np.testing.assert_allclose(np.cov(path[:, t].T), joint[:2, :2], atol=0.05 * spread.max() ** 2)


def test_predicted_rates_are_log_normal_means():
    """Without a hazard: the mean of exp(Cx + d) over a Gaussian state, for trials that last as recorded."""
    trials = blank_trials(8, seed=8)
    truth = make_truth(trials, "interval=both,context=both,trial=initial", 8)
    small = {**truth.params, "readout": 0.5 * truth.params["readout"]}
    truth = replace(truth, params=small)
    rates, running = predict_rates(truth, trials, 4000, seed=1)
    assert rates.shape == (4, N_TIME, 16)
    p, setup = truth.params, truth.setup
    rows = make_design(trials).rows
    kernels, cue = setup.kernels(N_TIME), setup.cue_basis(N_TIME)
    for condition in range(4):
        mine = np.flatnonzero(trials.condition == condition)
        np.testing.assert_allclose(running[condition], trials.mask[mine].mean(axis=0))
        mean, cov = p["push"] @ (kernels[:, 0] * rows[mine[0]]), np.zeros((2, 2))
        for _ in range(setup.initial_bins):
            cov = p["transition"] @ cov @ p["transition"].T + 0.01 * np.eye(2)
        cov = cov + p["initial_factor"] @ p["initial_factor"].T
        for t in range(N_TIME):
            if t > 0:
                mean = p["transition"] @ mean + p["offset"] + p["cue"] @ cue[:, t]
                mean = mean + p["push"] @ (kernels[:, t] * rows[mine[0]])
                cov = p["transition"] @ cov @ p["transition"].T + 0.01 * np.eye(2)
            if not trials.mask[mine, t].any():
                assert np.isnan(rates[condition, t]).all()
                continue
            spread = np.einsum("nd,de,ne->n", p["readout"], cov, p["readout"])
            wanted = np.exp(p["readout"] @ mean + p["log_rate"] + 0.5 * spread)
            np.testing.assert_allclose(rates[condition, t], wanted, rtol=0.06)


def test_a_flat_hazard_ends_trials_geometrically():
    trials = blank_trials(4, seed=8)
    level = np.log(0.1 / 0.9)
    truth = with_hazard(make_truth(trials, "trial=initial", 8), Hazard(level, np.zeros(2)))
    _, running = predict_rates(truth, trials, 5000, seed=2)
    # The bin of the response is the last one that still runs.
    np.testing.assert_allclose(running.mean(axis=0), 0.9 ** np.arange(N_TIME), atol=0.015)


def test_hazard_of_simulated_responses_is_recovered():
    """Responses drawn from a hazard on the path; learned from spikes through posterior draws."""
    blank = blank_trials(400, seed=9)
    mask = np.ones_like(blank.mask)
    truth = make_truth(blank, "interval=initial,context=initial,trial=initial", 9)
    loud = {**truth.params, "log_rate": truth.params["log_rate"] + 1.0}
    true_hazard = Hazard(-4.0, np.array([1.5, -1.0]))
    truth = with_hazard(replace(truth, params=loud), true_hazard)
    trials, path = draw_counts(truth, replace(blank, mask=mask), 9)
    n_bins = draw_ends(truth, path, np.random.default_rng(5))
    responded = expit(true_hazard.level + path @ true_hazard.weights).max(axis=1) > 0
    responded &= n_bins < N_TIME
    mask = np.arange(N_TIME) < n_bins[:, None]
    mask[0] = True
    responded[0] = False
    produced = np.where(responded, BIN_S * (n_bins + 0.5), np.nan)
    trials = replace(
        trials, mask=mask, counts=trials.counts * mask[:, :, None].astype(np.uint16), produced_s=produced
    )
    assert 0.2 < responded.mean() < 0.95
    found = fit_hazard(truth, trials)
    assert found is not None
    # Compared where the paths are; a flat hazard of the same mean would be off by more than 0.8.
    seen = path[mask]
    true_log_odds = true_hazard.level + seen @ true_hazard.weights
    log_odds = found.level + seen @ found.weights
    assert true_log_odds.std() > 0.8
    assert np.sqrt(np.mean((log_odds - true_log_odds) ** 2)) < 0.4
    cosine = found.weights @ true_hazard.weights
    assert cosine > 0.95 * np.linalg.norm(found.weights) * np.linalg.norm(true_hazard.weights)
    assert fit_hazard(truth, replace(trials, produced_s=np.full(len(trials), np.nan))) is None


def test_drawn_ends_follow_the_hazard():
    trials = blank_trials(4, seed=8)
    truth = with_hazard(make_truth(trials, "trial=initial", 8), Hazard(0.0, np.array([50.0, 0.0])))
    path = np.full((3, N_TIME, 2), -1.0)
    path[1, 5:, 0] = 1.0
    path[2, 0, 0] = 1e9
    ends = draw_ends(truth, path, np.random.default_rng(0))
    # Number of bins of each trial, that of the response included; all of them where none comes.
    assert ends.tolist() == [N_TIME, 6, 1]
