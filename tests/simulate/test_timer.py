"""First passages, and pushes that bring intervals to their aims by whichever route."""

from __future__ import annotations

import numpy as np
import pytest

from portfire.accounts import Account
from portfire.simulate import Scenario
from portfire.simulate._session import draw_scenario
from portfire.simulate._timer import TimerTask, first_passage, solve_timer


def test_first_passage_of_a_straight_line():
    bin_s, speed = 0.02, 3.0
    # A bin stands for its centre.
    line = speed * (np.arange(50) + 0.5) * bin_s
    for threshold in (0.3, 1.0, 2.01):
        assert first_passage(line, threshold, bin_s) == pytest.approx(threshold / speed)


def test_first_passage_counts_the_first_and_may_not_come():
    paths = np.array([[0.0, 2.0, 0.0, 2.0], [0.0, 0.5, 0.6, 0.7], [5.0, 6.0, 7.0, 8.0]]).T
    passed = first_passage(paths, 1.0, 0.1)
    np.testing.assert_allclose(passed, [0.1, np.nan, 0.05])


def test_first_passage_of_noise_with_drift_agrees_with_the_inverse_gaussian():
    # Mean a/v and variance a s²/v³: Folks and Chhikara 1978, J. R. Stat. Soc. B 40:263 (from memory).
    rng = np.random.default_rng(4)
    bin_s, speed, spread, boundary = 0.001, 1.2, 0.2, 0.9
    steps = speed * bin_s + spread * np.sqrt(bin_s) * rng.standard_normal((2000, 4000))
    passed = first_passage(np.cumsum(steps, axis=0), boundary, bin_s)
    assert np.isfinite(passed).all()
    assert passed.mean() == pytest.approx(boundary / speed, rel=0.015)
    assert passed.var() == pytest.approx(boundary * spread**2 / speed**3, rel=0.1)


@pytest.mark.parametrize("interval", ["initial", "sustained", "both"])
@pytest.mark.parametrize("context", ["initial", "sustained", "both"])
@pytest.mark.parametrize("trial", ["initial", "sustained"])
def test_pushes_bring_the_means_near_their_aims(interval, context, trial):
    account = Account(interval, context, trial)
    task = TimerTask(account, (0.5, 0.7, 0.9), (0.0, 0.15, 0.3), 0.11, 0.15, 4.0, 0.02, 42, 15)
    timer = solve_timer(task)
    assert np.abs(timer.mean_s - task.aims).max() < 0.09
    assert abs((timer.mean_s - task.aims).mean()) < 0.01
    assert (np.diff(timer.mean_s, axis=0) > 0.05).all()
    assert (np.diff(timer.mean_s, axis=1) > 0.05).all()
    assert timer.cv.mean() == pytest.approx(0.11, abs=0.005)
    assert timer.cv.min() > 0.06
    assert timer.cv.max() < 0.19


@pytest.mark.parametrize("source", ["interval", "context"])
def test_a_source_without_a_route_does_not_change_the_interval(source):
    account = Account.parse("interval=sustained,context=initial,trial=initial").replace(source, "none")
    drawn = draw_scenario(Scenario(account=account, n_trials=900, n_units=4, share_missed=0.0), 2)
    table = drawn.trials.assign(produced=drawn.trials["response_s"] - drawn.trials["set_s"])
    name, other = ("sample_s", "context") if source == "interval" else ("context", "sample_s")
    rest = table["produced"] - table.groupby(other)["produced"].transform("mean")
    by_level = rest.groupby(table[name]).agg(["mean", "sem"])
    assert (by_level["mean"].abs() < 3.5 * by_level["sem"]).all()
    assert np.ptp(table.groupby(other)["produced"].mean()) > 0.2


def test_the_pull_is_a_slope_below_one():
    task = TimerTask(
        Account("sustained", "initial", "initial"), (0.5, 0.9), (0.0,), 0.1, 0.25, 4.0, 0.02, 35, 15
    )
    assert np.ptp(task.aims) == pytest.approx(0.75 * 0.4)
    assert np.ptp(solve_timer(task).mean_s) == pytest.approx(0.75 * 0.4, abs=0.01)
