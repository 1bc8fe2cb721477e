"""Yardsticks and unseen conditions, against dense computations and sessions of known truth."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import poisson

from portfire.accounts import Account
from portfire.comparison import (
    compare_unseen,
    condition_rate_by_unit,
    deal_units,
    fold_of,
    keep_units,
    leave_out,
    null_by_unit,
    separable_conditions,
    training_rows,
    unseen_units,
)
from portfire.errors import PortfireError

from ..estimation._world import SOURCES, draw_world, fit_small

TRUTH = "interval=sustained,context=initial,trial=initial"


@pytest.fixture(scope="module")
def session():
    trials, truth = draw_world(TRUTH, 1, 120)
    return trials, truth, fit_small(trials, tolerance=0.1)


def test_null_is_a_poisson_law_with_the_training_rate(session):
    trials = session[0]
    found = null_by_unit(trials, 3)
    fold = fold_of(trials.index, trials.n_session, 3)
    i = int(np.flatnonzero(fold == 1)[0])
    train = training_rows(trials.index, trials.n_session, 3, {1})
    rate = (trials.counts[train].sum(axis=(0, 1)) + 0.5) / trials.mask[train].sum()
    expected = poisson.logpmf(trials.counts[i][trials.mask[i]], rate).sum(axis=0)
    np.testing.assert_allclose(found[i], expected, rtol=1e-10)


def test_order_of_the_yardsticks(session):
    """A constant rate is worst; the condition's mean rate is better, the model of single trials best."""
    trials, _, fitted = session
    null, rate = null_by_unit(trials, 3), condition_rate_by_unit(trials, 3)
    model = fitted.score(trials)["loglik"].to_numpy()
    assert rate.sum() > null.sum() + 100
    assert model.sum() > rate.sum() + 100


def test_unseen_units_are_a_conditional_likelihood(session):
    """Groups predicted one after another add up to the likelihood of all units (chain rule)."""
    trials, _, fitted = session
    part = trials[:16]
    first, second = np.arange(8), np.arange(8, 16)
    given = unseen_units(fitted, part, [second])[:, 0]
    alone = keep_units(fitted, part, first)
    before = alone[0].score(alone[1])["loglik"].to_numpy()
    total = fitted.score(part)["loglik"].to_numpy()
    np.testing.assert_allclose(before + given, total, atol=0.2)
    # What the other units say of the trial helps.
    null = null_by_unit(trials, 3)[:16][:, second].sum(axis=1)
    assert given.mean() > null.mean() + 1.0


def test_units_are_dealt_once():
    groups = deal_units(11, 4, seed=3)
    assert sorted(np.concatenate(groups)) == list(range(11))
    assert max(map(len, groups)) - min(map(len, groups)) <= 1
    with pytest.raises(PortfireError, match="has 1"):
        deal_units(1, 4, 0)


def test_an_account_that_is_true_speaks_for_conditions_that_it_never_saw(session):
    trials, _, fitted = session
    assert separable_conditions(trials) == [0, 1, 2, 3]
    full = Account.full(SOURCES)
    accounts = [full, full.replace("interval", "none"), full.replace("interval", "sustained")]

    def refit(account, train):
        return fit_small(train, str(account), start=fitted, tolerance=0.3)

    found = [leave_out(trials, c, accounts, refit) for c in (0, 3)]
    rows = {row["account"]: row for row in compare_unseen(found, str(full))}
    assert rows[str(full)]["less_full"] == 0.0
    assert rows[str(accounts[1])]["less_full"] < -0.5
    assert rows[str(accounts[2])]["less_full"] > -0.2
    assert rows[str(full)]["n_trials"] == sum(len(one.rows) for one in found)


def test_a_condition_that_alone_holds_a_level_cannot_be_left_out(session):
    trials = session[0]
    first_context = np.array(trials.context) == trials.contexts[0]
    rows = np.flatnonzero(~first_context | (trials.condition == trials.condition[np.argmax(first_context)]))
    part = trials[rows]
    only = int(trials.condition[np.argmax(first_context)])
    assert only not in separable_conditions(part)
