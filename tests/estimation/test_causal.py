"""Causal posteriors: no spike after the cutoff, and no end of the trial either."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from portfire.errors import InputError
from portfire.estimation import causal_mask, causal_states

from ._world import BIN_S, N_TIME


@pytest.mark.parametrize("until_s", [0.03, 0.15, 0.3])
def test_no_spike_after_the_cutoff_counts(world, full, until_s):
    trials, _ = world
    last = round(until_s / BIN_S)
    rng = np.random.default_rng(0)
    counts = trials.counts.copy()
    counts[:, last:] = rng.poisson(5.0, counts[:, last:].shape) * trials.mask[:, last:, None]
    other = replace(trials, counts=counts)
    one, two = full.infer(trials, until_s), full.infer(other, until_s)
    for name in one:
        np.testing.assert_array_equal(two[name], one[name], err_msg=str(name))
    assert np.isnan(one["state"].values[:, last:]).all()
    assert np.isfinite(one["state"].values[:, :last]).all()
    changed = full.infer(other, until_s + BIN_S)
    assert not np.array_equal(changed["initial"], full.infer(trials, until_s + BIN_S)["initial"])


def test_the_end_of_a_trial_after_the_cutoff_does_not_count(world, full):
    """Trials of other lengths lie in other lanes; the numbers stay."""
    trials, _ = world
    shorter = trials.mask.copy()
    shorter[::3, 10:] = False
    cut = replace(trials, mask=shorter, counts=trials.counts * shorter[:, :, None])
    one, two = full.infer(trials, 0.3), full.infer(cut, 0.3)
    for name in one:
        np.testing.assert_allclose(two[name], one[name], rtol=1e-8, atol=1e-10, err_msg=str(name))


def test_causal_states_are_those_of_every_cutoff(world, full):
    trials = world[0][:12]
    states = causal_states(full, trials)
    assert states.shape == (12, N_TIME, 2)
    for k in range(N_TIME):
        by_cutoff = full.infer(trials, (k + 1) * BIN_S)["state"].values[:, k]
        running = trials.mask[:, k]
        np.testing.assert_allclose(states[running, k], by_cutoff[running], atol=1e-3)
        assert np.isnan(states[~running, k]).all()


def test_later_spikes_narrow_the_initial_state(world, full):
    trials, _ = world
    spread = [
        np.linalg.det(full.infer(trials, until_s)["initial_cov"].values).mean()
        for until_s in (0.03, 0.12, 0.3)
    ]
    assert spread[0] > spread[1] > spread[2] > 0


def test_pushes_of_the_truth_are_found(world):
    """With the true parameters the posterior means of the initial state follow the truth's own spread."""
    trials, truth = world
    posterior = truth.infer(trials)
    total = truth.params["push"][:, :2]
    assert posterior["initial"].shape == (len(trials), 2)
    assert np.isfinite(posterior["initial_cov"].values).all()
    # No trial-to-trial sustained push in this truth: what is left is the push of the condition, exactly.
    from portfire.accounts import make_design

    wanted = make_design(trials).rows[:, 2:] @ truth.params["push"][:, 2:].T
    np.testing.assert_allclose(posterior["sustained"].values, wanted, atol=1e-12)
    np.testing.assert_allclose(posterior["sustained_cov"].values, 0.0, atol=1e-12)
    shift = make_design(trials).rows[:, :2] @ total.T
    for axis in range(2):
        if np.ptp(shift[:, axis]) > 0.3:
            assert np.corrcoef(posterior["initial"].values[:, axis], shift[:, axis])[0, 1] > 0.2


def test_cutoffs_are_whole_bins_halves_up(world):
    trials, _ = world
    assert causal_mask(trials, None) is trials.mask
    for until_s, bins in ((0.03, 1), (0.044, 1), (0.045, 2), (0.075, 3), (0.3, 10)):
        assert causal_mask(trials, until_s).any(axis=0).sum() == bins, until_s
    with pytest.raises(InputError, match="leaves no bin"):
        causal_mask(trials, 0.0)
    with pytest.raises(InputError, match="leaves no bin"):
        causal_mask(trials, 0.01)
