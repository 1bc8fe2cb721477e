"""Gains, their standard errors, the corrected resampled t and Holm's adjustment."""

import numpy as np
import pytest
from scipy import stats

from portfire.comparison import corrected_resampled_t, gain, holm, paired_difference
from portfire.errors import PortfireError


def test_corrected_resampled_t_reference():
    # Table of ten splits, 90/10; t and one-sided p computed with numpy and scipy. [C]
    d = [0.02, 0.05, -0.01, 0.03, 0.04, 0.0, 0.06, 0.01, 0.02, 0.03]
    result = corrected_resampled_t(d, n_train=90, n_test=10)
    assert result.t == pytest.approx(2.5038669784, abs=1e-9)
    assert result.p == pytest.approx(0.0168238285, abs=1e-9)
    assert result.df == 9


def test_corrected_resampled_t_is_one_sided():
    d = -np.array([0.02, 0.05, -0.01, 0.03])
    assert corrected_resampled_t(d, 90, 10).p > 0.5


def test_corrected_resampled_t_refuses_what_does_not_vary():
    with pytest.raises(PortfireError, match="vary"):
        corrected_resampled_t([0.1, 0.1, 0.1], 90, 10)
    with pytest.raises(PortfireError, match="got 1"):
        corrected_resampled_t([0.1], 90, 10)


def test_holm_reference():
    # statsmodels multipletests(method="holm") and R p.adjust agree. [C]
    assert holm([0.01, 0.04, 0.03, 0.005]) == pytest.approx([0.03, 0.06, 0.06, 0.02], abs=1e-12)


def test_holm_against_statsmodels():
    multitest = pytest.importorskip("statsmodels.stats.multitest")
    p = np.random.default_rng(0).uniform(size=9) ** 3
    p[3] = p[5]
    assert holm(p) == pytest.approx(multitest.multipletests(p, method="holm")[1], abs=1e-12)


def test_holm_edges():
    assert holm([0.2]).tolist() == [0.2]
    assert holm([]).size == 0
    assert holm([0.9, 0.8]).tolist() == [1.0, 1.0]
    for bad in (np.nan, -0.1, 1.1):
        with pytest.raises(PortfireError, match=str(bad)):
            holm([0.1, bad])


def test_gain_adds_the_cost_of_its_parameters_and_widens_the_error():
    diff = np.random.default_rng(1).normal(0.2, 1.0, 500)
    result = gain(diff, n_params=4, n_train=380, n_folds=5)
    assert result.nats_per_trial == pytest.approx(diff.mean() + 4 / 760)
    assert result.se == pytest.approx(diff.std(ddof=1) * np.sqrt((1 + 5 / 4) / 500))
    half = stats.t.ppf(0.975, 499) * result.se
    assert result.ci95 == pytest.approx((result.nats_per_trial - half, result.nats_per_trial + half))


def test_standard_error_is_the_resampled_one_written_per_trial():
    """With J equal folds, the variance of fold means stands for s² J / n, and n_test / n_train is 1/(J-1)."""
    n_folds, per_fold = 5, 4000
    diff = np.random.default_rng(2).normal(0.5, 1.0, (n_folds, per_fold))
    s2_fold = diff.var(ddof=1) / per_fold
    original = np.sqrt(s2_fold * (1 / n_folds + 1 / (n_folds - 1)))
    assert gain(diff.ravel(), 0, 1, n_folds).se == pytest.approx(original, rel=1e-9)


def test_useless_parameters_have_a_gain_centred_on_zero():
    """Fitting k useless means costs k / (2 n_train) on held-out trials; the correction takes that back."""
    rng = np.random.default_rng(3)
    k, n, n_folds, reps = 5, 100, 5, 600
    gains = []
    for _ in range(reps):
        y = rng.normal(size=(n, k))
        fold = np.arange(n) // (n // n_folds)
        diff = np.empty(n)
        for j in range(n_folds):
            held = fold == j
            diff[held] = 0.5 * (y[held] ** 2 - (y[held] - y[~held].mean(0)) ** 2).sum(1)
        gains.append(gain(diff, k, 0.8 * n, n_folds).nats_per_trial)
    assert abs(np.mean(gains)) < 3.5 * np.std(gains) / np.sqrt(reps)
    assert np.mean(gains) - k / (2 * 0.8 * n) < -5 * np.std(gains) / np.sqrt(reps)


def test_gain_refuses_what_it_cannot_use():
    with pytest.raises(PortfireError, match="row 1 is nan"):
        gain([0.1, np.nan, 0.2], 1, 10, 5)
    with pytest.raises(PortfireError, match=r"got shape \(1,\)"):
        gain([0.1], 1, 10, 5)
    with pytest.raises(PortfireError, match="got 1, 10, 2"):
        gain([0.1, 0.2], 2, 10, 1)


def test_unequal_data_are_refused():
    score, spikes, labels = [1.0, 2.0], [5, 6], ["a", "b"]
    assert paired_difference(score, [0.5, 2.5], labels, labels, spikes, spikes).tolist() == [0.5, -0.5]
    with pytest.raises(PortfireError, match="'b' in one and 'c' in the other"):
        paired_difference(score, score, labels, ["a", "c"], spikes, spikes)
    with pytest.raises(PortfireError, match="trial 'b' was scored on 6 spikes by one account and on 7"):
        paired_difference(score, score, labels, labels, spikes, [5, 7])
    with pytest.raises(PortfireError, match="2 and 3 trials"):
        paired_difference(score, [1.0, 2.0, 3.0], labels, labels, spikes, spikes)
    with pytest.raises(PortfireError, match="trial 'b' is inf"):
        paired_difference([1.0, np.inf], score, labels, labels, spikes, spikes)
