"""Numbers that a result adds up by itself: the null, bits per spike, shares of components."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import poisson

from portfire.comparison import fold_of, training_rows
from portfire.job._assemble import component_shares, null_loglik

from ..estimation._world import blank_trials


@pytest.fixture(scope="module")
def trials():
    """Trials of unequal lengths with a run-up; units have rates of their own, one is silent at times."""
    blank = blank_trials(60, seed=1, n_before=2, n_units=4)
    rng = np.random.default_rng(0)
    counts = rng.poisson([0.2, 1.0, 3.0, 0.5], blank.counts.shape) * blank.mask[:, :, None]
    # The last unit is heard in the blocks of the first fold alone, and so never in that fold's training.
    counts[fold_of(blank.index, 60, 3) != 0, :, 3] = 0
    return replace(blank, counts=counts.astype(np.uint16))


def test_null_is_a_poisson_of_the_training_rates(trials):
    found = null_loglik(trials, 3)
    assert np.isfinite(found).all()
    fold = fold_of(trials.index, 60, 3)
    for row in (0, 17, 31, 59):
        train = training_rows(trials.index, 60, 3, {int(fold[row])})
        spikes = trials.counts[train, 2:].sum(axis=(0, 1))
        bins = trials.mask[train, 2:].sum()
        seen = trials.mask[row, 2:]
        # Half a spike is added, for units that are silent in training.
        wanted = poisson.logpmf(trials.counts[row, 2:][seen], (spikes + 0.5) / bins).sum()
        assert found[row] == pytest.approx(wanted, abs=1e-9)
    assert trials.counts[training_rows(trials.index, 60, 3, {0}), :, 3].sum() == 0


def test_run_up_and_what_is_past_the_end_do_not_enter_the_null(trials):
    counts = trials.counts.copy()
    counts[:, :2] += 5
    np.testing.assert_array_equal(null_loglik(replace(trials, counts=counts), 3), null_loglik(trials, 3))


def test_held_out_trials_do_not_touch_their_own_null(trials):
    counts = trials.counts.copy()
    held = np.flatnonzero(fold_of(trials.index, 60, 3) == 1)
    counts[held[3]] *= 3
    changed, before = null_loglik(replace(trials, counts=counts), 3), null_loglik(trials, 3)
    others = np.setdiff1d(held, held[3])
    np.testing.assert_array_equal(changed[others], before[others])
    assert changed[held[3]] != before[held[3]]


def test_shares_of_components_are_those_of_the_singular_values():
    """Rates made of three orthogonal courses of known size, too slow for the smoothing to touch."""
    rng = np.random.default_rng(0)
    time = np.linspace(0, 1, 200)
    courses = np.stack([np.cos(np.pi * k * time) for k in (1, 2, 3)])
    units = np.linalg.qr(rng.standard_normal((30, 3)))[0]
    sizes = np.array([5.0, 3.0, 1.0])
    rates = 20 + np.einsum("k,kt,nk->tn", sizes, courses, units)[None]
    shares = component_shares(rates, 0.005)
    assert shares.shape == (10,)
    np.testing.assert_allclose(shares[:3], sizes**2 / (sizes**2).sum(), atol=0.005)
    assert shares[3:].max() < 1e-3
    assert shares.sum() == pytest.approx(1.0)


def test_conditions_are_taken_where_they_run():
    """Rates past the end of a condition are unknown, and weigh nothing."""
    rng = np.random.default_rng(1)
    rates = np.full((2, 80, 12), np.nan)
    rates[0] = rng.normal(size=(80, 12))
    rates[1, :50] = rng.normal(size=(50, 12))
    shares = component_shares(rates, 0.02)
    assert shares.sum() <= 1 + 1e-12
    assert (np.diff(shares) <= 1e-12).all()
    assert component_shares(np.full((1, 5, 3), np.nan), 0.02).tolist() == [0.0] * 10
    assert component_shares(np.ones((1, 5, 3)), 0.02).sum() == 0.0
