"""Scores after a run-up: the counts after the set cue given those before, against dense Gaussians."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import multivariate_normal

from portfire.accounts import make_design
from portfire.dynamics import ModelFile

from ._world import N_TIME, blank_trials, make_truth

GAUSSIAN = ModelFile(name="roots", readout="gaussian", drift="off", n_bumps=2, cue_duration_s=0.15)
N_BEFORE = 4


@pytest.fixture(scope="module")
def roots():
    """Truth with square-root counts and a run-up; trials of any counts will do."""
    trials = blank_trials(12, seed=3, n_before=N_BEFORE, n_units=3)
    truth = make_truth(trials, "interval=both,context=both,trial=both", 3, GAUSSIAN)
    log_variance = np.log([0.3, 0.5, 0.2])
    truth = replace(truth, params={**truth.params, "log_variance": log_variance})
    counts = np.random.default_rng(4).poisson(2.0, trials.counts.shape) * trials.mask[:, :, None]
    return replace(trials, counts=counts.astype(np.uint16)), truth


def dense_moments(truth, trials, row):
    """Mean and covariance of all states of a trial (time, D), written out bin by bin."""
    setup, p = truth.setup, truth.params
    d, q, a = 2, float(p["noise"]), p["transition"]
    n_after = N_TIME
    z = make_design(trials).rows[row]
    start = np.zeros((d, d))
    for _ in range(setup.initial_bins):
        start = a @ start @ a.T + q * np.eye(d)
    start = start + p["initial_factor"] @ p["initial_factor"].T
    # Independent noises: the initial state's, each step's, the run-up's steps, the trial's own push.
    root = np.linalg.cholesky(start)
    n_noise = d * (1 + (n_after - 1) + N_BEFORE + 1)
    own = slice(n_noise - d, n_noise)
    mean = np.zeros((N_BEFORE + n_after, d))
    loads = np.zeros((N_BEFORE + n_after, d, n_noise))
    kernels, border = setup.kernels(n_after), setup.border_kernel(n_after)
    cue = setup.cue_basis(n_after)
    x, load = p["push"] @ (kernels[:, 0] * z), np.zeros((d, n_noise))
    load[:, :d] = root
    load[:, own] = border[0] * p["sustained_factor"]
    for t in range(n_after):
        if t > 0:
            x = a @ x + p["offset"] + p["cue"] @ cue[:, t] + p["push"] @ (kernels[:, t] * z)
            load = a @ load
            load[:, d * t : d * (t + 1)] += np.sqrt(q) * np.eye(d)
            load[:, own] += border[t] * p["sustained_factor"]
        mean[N_BEFORE + t], loads[N_BEFORE + t] = x, load
    back = loads[N_BEFORE].copy()
    for k in range(1, N_BEFORE + 1):
        place = d * (n_after + k - 1)
        back[:, place : place + d] += np.exp(0.5 * p["log_run_up_noise"]) * np.eye(d)
        mean[N_BEFORE - k], loads[N_BEFORE - k] = mean[N_BEFORE], back
    return mean, loads


def test_scores_are_of_what_follows_given_what_came_before(roots):
    trials, truth = roots
    table = truth.score(trials)
    p = truth.params
    for row in (0, 5, 11):
        mean, loads = dense_moments(truth, trials, row)
        seen = np.flatnonzero(trials.mask[row])
        level = (mean[seen] @ p["readout"].T + p["log_rate"]).ravel()
        load = np.einsum("nd,tdk->tnk", p["readout"], loads[seen]).reshape(len(level), -1)
        cov = load @ load.T + np.diag(np.tile(np.exp(p["log_variance"]), len(seen)))
        y = np.sqrt(trials.counts[row, seen].astype(float)).ravel()
        n_known = 3 * N_BEFORE
        before = slice(0, n_known)
        joint = multivariate_normal(level, cov).logpdf(y)
        known = multivariate_normal(level[before], cov[before, before]).logpdf(y[before])
        assert table["loglik"][row] == pytest.approx(joint - known, abs=1e-6)
        assert table["n_bins"][row] == len(seen) - N_BEFORE
        assert table["n_spikes"][row] == trials.counts[row, N_BEFORE:].sum()
    assert (table["loglik_se"] < 1e-6).all()


def test_causal_posterior_at_the_cue_is_of_the_run_up_alone(roots):
    trials, truth = roots
    found = truth.infer(trials, until_s=0.0)
    p = truth.params
    for row in (2, 7):
        mean, loads = dense_moments(truth, trials, row)
        before = slice(0, N_BEFORE)
        load = np.einsum("nd,tdk->tnk", p["readout"], loads[before]).reshape(3 * N_BEFORE, -1)
        cov = load @ load.T + np.diag(np.tile(np.exp(p["log_variance"]), N_BEFORE))
        y = np.sqrt(trials.counts[row, before].astype(float)).ravel()
        error = y - (mean[before] @ p["readout"].T + p["log_rate"]).ravel()
        gain = loads[N_BEFORE] @ load.T @ np.linalg.inv(cov)
        np.testing.assert_allclose(found["initial"].values[row], mean[N_BEFORE] + gain @ error, atol=1e-6)
        left = loads[N_BEFORE] @ loads[N_BEFORE].T - gain @ load @ loads[N_BEFORE].T
        np.testing.assert_allclose(found["initial_cov"].values[row], left, atol=1e-6)
    assert found["time"].values[N_BEFORE] == 0.0
