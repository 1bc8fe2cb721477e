"""Predictive checks: quiet on sessions of the model, and each wakes for the flaw it is meant for."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from portfire.comparison import check_predictions, cut_windows, say_failed, summarise_activity
from portfire.errors import PortfireError
from portfire.estimation import draw_trials

from ..estimation._world import blank_trials, draw_counts, make_truth

N_DRAWS = 99


@pytest.fixture(scope="module")
def truth_and_trials():
    blank = blank_trials(200, 6)
    truth = make_truth(blank, "interval=sustained,context=initial,trial=initial", 6)
    # Rates that swing less than in other tests, as those of most recorded units.
    truth = replace(truth, params={**truth.params, "readout": 0.35 * truth.params["readout"]})
    return truth, draw_counts(truth, blank, 6)[0]


def check(truth, trials, seed=0):
    windows = cut_windows(trials)
    rng = np.random.default_rng(seed)
    drawn = [summarise_activity(draw_trials(truth, trials, rng), windows) for _ in range(N_DRAWS)]
    return {c.name: c for c in check_predictions(summarise_activity(trials, windows), drawn)}


def scale_counts(trials, gain, seed=1):
    """The same trials with counts thinned or repeated by a gain of shape (trial, time, unit)."""
    rng = np.random.default_rng(seed)
    return replace(trials, counts=rng.poisson(trials.counts * gain).astype(trials.counts.dtype))


def test_sessions_of_the_model_pass(truth_and_trials):
    found = check(*truth_and_trials)
    assert not any(c.failed for c in found.values())
    assert say_failed(list(found.values())) is None
    assert found["Fano factors"].recorded == pytest.approx(found["Fano factors"].drawn, abs=0.1)


def test_p_is_right_on_sessions_of_the_model(truth_and_trials):
    """Each of many sessions set among the same draws: unadjusted ranks are near uniform."""
    from portfire.comparison._checks import MATTERS, _rank

    truth, trials = truth_and_trials
    windows, rng = cut_windows(trials), np.random.default_rng(9)
    everyone = [summarise_activity(draw_trials(truth, trials, rng), windows) for _ in range(80)]
    for name in MATTERS:
        values = np.stack([one[name] for one in everyone])
        p = [_rank(np.concatenate([values[[k]], np.delete(values, k, axis=0)])) for k in range(80)]
        # Ranks of the same set are a permutation of 1/80 … 1.
        assert np.sort(p) == pytest.approx(np.arange(1, 81) / 80)


def test_overdispersed_counts_fail_the_fano_factors(truth_and_trials):
    truth, trials = truth_and_trials
    gain = np.random.default_rng(2).gamma(5, 1 / 5, (len(trials), 1, trials.counts.shape[2]))
    found = check(truth, scale_counts(trials, gain))
    assert found["Fano factors"].failed
    assert found["Fano factors"].recorded > found["Fano factors"].drawn
    assert "Fano factors" in say_failed(list(found.values()))


def test_a_gain_that_units_share_fails_the_noise_correlations(truth_and_trials):
    truth, trials = truth_and_trials
    gain = np.random.default_rng(3).gamma(4, 1 / 4, (len(trials), 1, 1))
    assert check(truth, scale_counts(trials, gain))["noise correlations"].failed


def test_rates_of_a_wrong_model_fail(truth_and_trials):
    truth, trials = truth_and_trials
    readout = truth.params["readout"].copy()
    readout[::2] *= -1
    wrong = replace(
        truth, params={**truth.params, "readout": readout, "log_rate": truth.params["log_rate"] + 0.3}
    )
    found = check(wrong, trials)
    assert found["rates"].failed
    assert found["rates"].difference > 0.15


def test_slow_private_gain_fails_the_autocorrelation(truth_and_trials):
    truth, trials = truth_and_trials
    gain = np.random.default_rng(4).gamma(5, 1 / 5, (len(trials), 1, trials.counts.shape[2]))
    assert check(truth, scale_counts(trials, gain))["single-trial autocorrelation"].failed


def test_too_few_draws_or_trials_are_refused(truth_and_trials):
    _, trials = truth_and_trials
    windows = cut_windows(trials)
    one = summarise_activity(trials, windows)
    with pytest.raises(PortfireError, match="got 9"):
        check_predictions(one, [one] * 9)
    with pytest.raises(PortfireError, match="8 trials"):
        summarise_activity(trials[:6], windows)
