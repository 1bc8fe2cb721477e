"""Held-out scores beside those of the true parameters, and p values where there is nothing to find."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest
from scipy import stats

from portfire.accounts import Account
from portfire.comparison import fold_of, gain, likelihood_ratio_p, training_rows
from portfire.estimation import Fit, count_route
from portfire.session import Session, Trials
from portfire.simulate import Scenario, draw_session, true_parameters

from ..estimation._world import (
    ALL_BOTH,
    BIN_S,
    LATENT_DIM,
    MODEL,
    N_TIME,
    N_UNITS,
    draw_world,
    fit_small,
    make_truth,
)
from ._light import climb_small

TRUTH = "interval=sustained,context=initial,trial=initial"


def count_free(fitted: Fit) -> int:
    """All free parameters; turns of the latent space and the scale of its noise change nothing."""
    setup, d = fitted.setup, fitted.latent_dim
    loads = setup.n_units * (d + 1) + d * d + d + d * setup.model.n_bumps - d * (d - 1) // 2
    routes = [
        count_route(fitted.account, source, h, setup) for source in setup.sources for h in (0.0, np.inf)
    ]
    return loads + sum(routes)


def draw_fixed_windows(seed: int, n_trials: int) -> tuple[Trials, Fit]:
    """A simulated session, observed for the same time in every trial, and its truth as a fit."""
    scenario = Scenario(
        model=MODEL,
        account=Account.parse(TRUTH),
        n_trials=n_trials,
        n_units=N_UNITS,
        latent_dim=LATENT_DIM,
        sample_s=(0.6, 0.9),
        contexts=("high", "low"),
        extra_s=(0.2, 0.0),
        mean_rate_hz=40.0,
        rate_spread=0.3,
        side_gain=0.9,
        ramp=1.5,
        drift_sd=0.0,
        share_aborted=0.0,
        share_missed=0.0,
        bin_s=BIN_S,
    )
    _, drawn = draw_session(scenario, seed)
    table = drawn.trials[["trial", "set_s", "sample_s", "context"]].copy()
    # The response of a simulated session hangs on the path; a fixed window does not.
    table["response_s"] = np.nan
    table["end_s"] = table["set_s"] + N_TIME * BIN_S
    trials = Session.from_arrays(drawn.spike_times, table).bin(BIN_S, min_rate_hz=0.0)
    truth = make_truth(trials, TRUTH, seed)
    return trials, replace(truth, params=true_parameters(drawn, truth.setup, trials))


@pytest.mark.parametrize("seed", [0, 1, 2])
def test_scores_come_near_those_of_the_truth(seed):
    """Held out, k estimated parameters cost about k/2n nats a trial; half as much again is allowed."""
    trials, truth = draw_fixed_windows(seed, 240)
    assert trials.mask.all()
    train = training_rows(trials.index, 240, 2, {0})
    test = np.flatnonzero(fold_of(trials.index, 240, 2) == 0)
    fitted = fit_small(trials[train], ALL_BOTH)
    difference = (truth.score(trials[test])["loglik"] - fitted.score(trials[test])["loglik"]).to_numpy()
    k, n = count_free(fitted), len(train)
    assert k == 16 * 3 + 4 + 2 + 4 - 1 + 8 + 6
    assert difference.mean() < 1.5 * k / (2 * n)
    # The truth is no worse than the fit on new trials, up to chance.
    assert difference.mean() > -3 * difference.std(ddof=1) / np.sqrt(len(test))


@dataclass(frozen=True)
class Empty:
    """p values and gains of a source that does not push."""

    p: np.ndarray
    gains: np.ndarray


@pytest.fixture(scope="module")
def empty() -> Empty:
    """Twelve sessions in which the context pushes by no route."""
    accounts = [Account.parse(text) for text in (ALL_BOTH, "interval=both,context=none,trial=both")]
    full, smaller = (str(account) for account in accounts)
    p, gains = [], []
    for seed in range(12):
        trials, _ = draw_world("interval=initial,trial=initial", 1000 + seed, 128)
        whole = climb_small(trials, accounts)
        statistic = 2 * (whole.fits[full].value - whole.fits[smaller].value)
        p.append(likelihood_ratio_p(statistic, 2 * LATENT_DIM))
        difference, n_train = np.empty(128), []
        fold = fold_of(trials.index, 128, 3)
        for j in range(3):
            train = training_rows(trials.index, 128, 3, {j})
            fits = climb_small(trials[train], accounts, whole.fits[full], 0.3).fits
            scores = [fits[name].score(trials[fold == j])["loglik"].to_numpy() for name in (full, smaller)]
            difference[fold == j] = scores[0] - scores[1]
            n_train.append(len(train))
        gains.append(gain(difference, 2 * LATENT_DIM, float(np.mean(n_train)), 3).nats_per_trial)
    return Empty(np.array(p), np.array(gains))


def test_p_is_uniform_where_nothing_pushes(empty):
    assert stats.kstest(empty.p, "uniform").pvalue > 0.001
    assert (empty.p < 0.01).sum() <= 2


def test_gains_are_centred_where_nothing_pushes(empty):
    """Well below the least gain worth having; without its correction each would be lower by 0.03."""
    assert abs(empty.gains.mean()) < 0.03
    assert (np.abs(empty.gains) < 0.05).mean() > 0.6
