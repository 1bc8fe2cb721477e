"""From values and held-out scores to entries: which difference, how many parameters, which p."""

import numpy as np
import pytest
from scipy.stats import chi2

from portfire.accounts import Account
from portfire.comparison import Scored, contrast_accounts, contrast_sources, holm, likelihood_ratio_p

from ..estimation._world import SOURCES, blank_trials, make_truth

N = 200
FULL = "interval=both,context=both,trial=both"


@pytest.fixture(scope="module")
def setup():
    return make_truth(blank_trials(8), FULL, 0).setup


def scored(setup, losses, **options):
    """Accounts that lose these nats a trial against the full one, held out and in the objective alike."""
    rng = np.random.default_rng(0)
    base = -300 + 20 * rng.standard_normal(N)
    loglik, values = {}, {}
    for k, account in enumerate(contrast_accounts(SOURCES, SOURCES)):
        loss = losses.get(str(account), 0.0)
        noise = np.random.default_rng(k).standard_normal(N)
        noise = 0.1 * (noise - noise.mean()) if k else np.zeros(N)
        loglik[str(account)] = base - loss + noise
        values[str(account)] = base.sum() - N * loss
    return Scored(setup, values, loglik, 150.0, 5, **options)


LOSSES = {
    "interval=initial,context=both,trial=both": 1.0,
    "interval=none,context=both,trial=both": 1.5,
    "interval=both,context=both,trial=sustained": 0.8,
    "interval=both,context=both,trial=none": 0.8,
}


def test_entries_take_the_right_route_away(setup):
    by_source = {c.source: c for c in contrast_sources(scored(setup, LOSSES), SOURCES, 0.05, 0.05)}
    interval = by_source["interval"]
    # Two dimensions by one column: two parameters a route, four in all, each worth 1/(2·150).
    assert interval.entries["sustained_unique"].evidence.gain.nats_per_trial == pytest.approx(1 + 2 / 300)
    assert interval.entries["initial_unique"].evidence.gain.nats_per_trial == pytest.approx(2 / 300)
    assert interval.entries["total"].evidence.gain.nats_per_trial == pytest.approx(1.5 + 4 / 300)
    assert interval.entries["sustained_unique"].statistic == pytest.approx(2 * N * 1.0)
    assert interval.entries["total"].p_raw == pytest.approx(chi2.sf(2 * N * 1.5, 4))
    assert interval.verdict.label == "sustained"
    assert interval.end_difference == pytest.approx(N * 1.0)
    assert interval.scores["both"] - interval.scores["none"] == pytest.approx(1.5)
    assert by_source["context"].verdict.label == "neither"
    assert by_source["context"].end_difference == 0.0
    trial = by_source["trial"]
    assert trial.verdict.label == "initial"
    assert trial.entries["total"].cov_dims == (2, 2)
    assert trial.entries["initial_unique"].cov_dims == (2,)
    assert trial.entries["initial_unique"].n_fixed == 0
    assert trial.entries["initial_unique"].p_raw == likelihood_ratio_p(2 * N * 0.8, 0, (2,))
    # Three entries of a covariance, which at its boundary cost half.
    assert trial.entries["sustained_unique"].n_params == 3
    assert trial.entries["sustained_unique"].evidence.gain.nats_per_trial == pytest.approx(1.5 / 300)
    assert trial.entries["total"].cost == pytest.approx(3.0)
    assert trial.end_difference == pytest.approx(-N * 0.8)


def test_p_is_adjusted_over_all_entries(setup):
    losses = {account: 0.01 + 0.003 * k for k, account in enumerate(LOSSES)}
    found = contrast_sources(scored(setup, losses), SOURCES, 0.05, 0.05)
    raw = [entry.p_raw for contrast in found for entry in contrast.entries.values()]
    assert len(raw) == 9
    adjusted = [entry.evidence.p for contrast in found for entry in contrast.entries.values()]
    assert adjusted == pytest.approx(holm(raw).tolist())
    alone = contrast_sources(scored(setup, losses), ("trial",), 0.05, 0.05)[0]
    assert alone.entries["total"].evidence.p <= found[2].entries["total"].evidence.p


def test_a_smaller_account_that_stands_higher_is_no_evidence(setup):
    found = contrast_sources(
        scored(setup, {"interval=none,context=both,trial=both": -0.001}), SOURCES, 0.05, 0.05
    )
    total = found[0].entries["total"]
    assert (total.statistic, total.p_raw) == (0.0, 1.0)


def test_training_scores_are_lowered_by_their_parameters(setup):
    """Twice over: once for what the fit took from these trials, once for what it would lose on others."""
    held = contrast_sources(scored(setup, LOSSES), ("interval",), 0.05, 0.05)[0]
    inside = contrast_sources(scored(setup, LOSSES, in_sample=True), ("interval",), 0.05, 0.05)[0]
    for name, k in (("initial_unique", 2), ("sustained_unique", 2), ("total", 4)):
        gap = [c.entries[name].evidence.gain.nats_per_trial for c in (held, inside)]
        assert gap[0] - gap[1] == pytest.approx(k / 150)


def test_contrasts_of_sources_that_a_session_lacks_do_not_arise():
    accounts = [str(account) for account in contrast_accounts(("trial",), ("trial",))]
    assert accounts == ["trial=both", "trial=none", "trial=initial", "trial=sustained"]
    assert Account.parse(accounts[1]).route("context") == "none"
