"""The demo session looks like a recording of interval production."""

from __future__ import annotations

import numpy as np
from scipy.ndimage import gaussian_filter1d

from portfire.session import inspect_session
from portfire.simulate import demo_scenario


def condition_means(trials, produced):
    """Mean produced interval, (context, sample) with contexts sorted."""
    means = [produced[trials.condition == c].mean() for c in range(len(trials.conditions))]
    return np.reshape(means, (len(trials.contexts), -1))


def test_produced_intervals_rise_with_the_sample_and_with_the_extra(demo):
    session, _ = demo
    trials = session.bin()
    trials = trials[trials.responded]
    assert trials.contexts == ("high hum", "low hum", "mid hum")
    means = condition_means(trials, trials.produced_s)[[1, 2, 0]]
    assert (np.diff(means, axis=1) > 0.08).all()
    assert (np.diff(means, axis=0) > 0.06).all()
    assert 0.65 < inspect_session(session)["interval_slope"]["slope"] < 1.0


def test_spread_within_conditions_is_that_of_timing(demo):
    session, _ = demo
    rows = inspect_session(session)["behaviour"]["conditions"]
    assert len(rows) == 9
    assert 0.085 < np.mean([row["cv"] for row in rows]) < 0.13
    assert all(0.05 < row["cv"] < 0.18 for row in rows)


def test_context_and_interval_are_not_confounded_with_time(demo):
    found = inspect_session(demo[0])
    assert found["confounding"]["context_r2"] < 0.05
    assert found["confounding"]["sample_r2"] < 0.05
    assert found["confounding"]["separable"] is True


def test_silent_units_and_lapses_are_left_out(demo):
    session, drawn = demo
    trials = session.bin()
    assert len(trials.unit) == demo_scenario().n_units
    assert len(trials.units_left_out) == demo_scenario().n_silent == 3
    assert all("below 0.5" in reason for reason in trials.units_left_out.values())
    kinds = dict(zip(drawn.trials["trial"], drawn.kind, strict=True))
    left_out = {kinds[label] for label in trials.trials_left_out}
    assert left_out == {"missed", "late"}
    assert all(reason.startswith("lapse") for reason in trials.trials_left_out.values())
    assert (~trials.responded).sum() == (drawn.kind == "aborted").sum() > 0


def test_ten_components_hold_nine_tenths_of_trial_averaged_rates(demo):
    # Common practice with rates smoothed lightly; 25 ms here.
    trials = demo[0].bin()
    means = []
    for condition in range(len(trials.conditions)):
        rows = trials.condition == condition
        running = trials.mask[rows].sum(axis=0)
        keep = running >= 5
        mean = trials.counts[rows].sum(axis=0)[keep] / running[keep, None] / trials.bin_s
        means.append(gaussian_filter1d(mean, 0.025 / trials.bin_s, axis=0))
    pooled = np.concatenate(means)
    square = np.linalg.svd(pooled - pooled.mean(axis=0), compute_uv=False) ** 2
    assert square[:10].sum() / square.sum() > 0.88
    assert square[:1].sum() / square.sum() < 0.7


def test_there_are_spikes_in_the_run_up_and_after_the_response(demo):
    session, _ = demo
    trials = session.bin(before_set_s=0.5)
    before = trials.counts[:, : trials.n_before].sum(axis=(0, 2)) / len(trials)
    after = trials.counts[:, trials.n_before].sum() / len(trials)
    assert (np.abs(before / before.mean() - 1) < 0.15).all()
    assert abs(before.mean() / after - 1) < 0.2
    pooled = np.sort(np.concatenate(session.spikes))
    response = session.trials["response_s"].dropna().to_numpy()
    late = np.searchsorted(pooled, response + 0.2) - np.searchsorted(pooled, response)
    assert late.min() > 0
