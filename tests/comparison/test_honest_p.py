"""Bootstrap, block-wise and randomisation p on small sessions whose truth is known."""

from __future__ import annotations

import numpy as np
import pytest

from portfire.accounts import Account, make_design
from portfire.comparison import (
    block_of,
    bootstrap_score,
    bound_covariances,
    deal_labels,
    push_scores,
    randomise_source,
    robust_p,
    score_statistic,
)
from portfire.errors import InputError, PortfireError
from portfire.estimation import draw_trials, make_efficient, push_directions, score_each

from ..estimation._world import SOURCES, draw_world, fit_small

FULL = Account.full(SOURCES)
TRUTH = "interval=sustained,context=none,trial=initial"


@pytest.fixture(scope="module")
def session():
    trials = draw_world(TRUTH, 5, 120)[0]
    return trials, fit_small(trials, tolerance=0.02)


def restrict(session, source, route):
    """The restricted fit, its efficient scores, and the likelihood ratio of refits."""
    trials, full = session
    smaller = FULL.replace(source, route)
    fitted = fit_small(trials, str(smaller), start=full, tolerance=0.02)
    directions = push_directions(FULL, smaller, fitted.params, fitted.setup, make_design(trials).rows)
    efficient = make_efficient(fitted, trials, directions, np.random.default_rng(1))
    top = max(full.value, fit_small(trials, start=fitted, tolerance=0.02).value)
    return efficient, 2 * (top - fitted.value)


@pytest.mark.parametrize("route", ["none", "initial", "sustained"])
def test_score_statistic_is_the_likelihood_ratio_where_there_is_nothing_to_find(session, route):
    efficient, ratio = restrict(session, "context", route)
    stat = score_statistic(efficient.score(session[0]), efficient.information)
    assert stat == pytest.approx(ratio, rel=0.15)


def test_score_of_a_covariance_sees_what_the_likelihood_ratio_sees(session):
    efficient, ratio = restrict(session, "trial", "none")
    assert efficient.directions.cones == (2, 2)
    stat = score_statistic(efficient.score(session[0]), efficient.information, (2, 2))
    assert stat == pytest.approx(ratio, rel=0.4)
    assert ratio > 60
    each = efficient.score_trials(session[0])
    offset = efficient.information @ efficient.directions.offset
    total = efficient.score(session[0])
    np.testing.assert_allclose(each.sum(axis=0) + offset, total, atol=1e-6 * np.abs(total).max())


def test_draws_follow_the_law_that_the_information_says(session):
    """Under the restricted account the statistic has the mean of χ² with its degrees of freedom."""
    trials = session[0]
    efficient, _ = restrict(session, "context", "none")
    rng = np.random.default_rng(3)
    stats = [
        score_statistic(efficient.score(draw_trials(efficient.fitted, trials, rng)), efficient.information)
        for _ in range(60)
    ]
    assert np.mean(stats) == pytest.approx(4, abs=3.5 * np.sqrt(8 / 60))


def test_p_values_where_there_is_nothing_and_where_there_is_much(session):
    trials = session[0]
    block = block_of(trials.index, trials.n_session, 5)
    absent, ratio = restrict(session, "context", "none")
    found = bootstrap_score(absent, trials, seed=0, max_draws=59, stop_at=10)
    assert found.drawn.p > 0.1
    assert found.drawn.n_draws < 59
    assert robust_p(absent, trials, block).p > 0.05
    assert randomise_source(absent.fitted, trials, "context", draws=199).p > 0.05
    present, ratio = restrict(session, "interval", "none")
    assert ratio > 100
    found = bootstrap_score(present, trials, seed=0, max_draws=39, stop_at=10)
    assert found.drawn.p == 1 / 40
    assert robust_p(present, trials, block, draws=199).p < 0.02
    assert randomise_source(present.fitted, trials, "interval", draws=199).p == 1 / 200


def test_refits_check_a_share_of_the_draws(session):
    trials = session[0]
    efficient, _ = restrict(session, "context", "none")

    def refit(drawn):
        start = fit_small(drawn, str(efficient.fitted.account), start=efficient.fitted, tolerance=0.02)
        return 2 * (fit_small(drawn, start=start, tolerance=0.02).value - start.value)

    found = bootstrap_score(efficient, trials, seed=1, max_draws=41, stop_at=41, refit=refit)
    assert len(found.checks) == 3
    stat, ratio = found.checks.T
    assert stat == pytest.approx(ratio, rel=0.6, abs=0.5)
    assert stat.mean() == pytest.approx(ratio.mean(), rel=0.25)


def test_singular_covariances_are_drawn_at_their_bound_too():
    trials, _ = draw_world("interval=sustained,context=none,trial=none", 8, 96)
    fitted = fit_small(trials, "interval=both,context=none,trial=both")
    bound = bound_covariances(fitted, trials)
    assert bound is not None
    for name in ("initial_factor", "sustained_factor"):
        before, after = (f.params[name] @ f.params[name].T for f in (fitted, bound))
        assert np.linalg.eigvalsh(after - before).min() > -1e-9
    grown = sum(np.trace(bound.params[n] @ bound.params[n].T) for n in ("initial_factor", "sustained_factor"))
    assert grown > 0.01
    held = fit_small(trials, "interval=both,context=none,trial=none")
    assert bound_covariances(held, trials) is None


def test_labels_are_dealt_as_the_task_did():
    rng = np.random.default_rng(0)
    labels = np.array([0, 0, 1, 1, 1, 0, 0, 2, 2, 2, 2, 1])
    strata = np.arange(12) % 2
    dealt = deal_labels(labels, "free", rng, strata)
    for s in (0, 1):
        assert sorted(dealt[strata == s]) == sorted(labels[strata == s])
    blocked = deal_labels(labels, "blocked", rng)
    edges = np.flatnonzero(np.diff(labels)) + 1
    assert all(len(set(run)) == 1 for run in np.split(blocked, edges))
    seen = {tuple(deal_labels(labels, "sequence", rng)) for _ in range(300)}
    assert seen == {tuple(np.roll(labels, k)) for k in range(12)}
    with pytest.raises(InputError, match="'random'"):
        deal_labels(labels, "random", rng)


def test_push_scores_add_up_to_the_gradient(session):
    """Weighted by the labels' rows they are the score of the push itself."""
    trials = session[0]
    efficient, _ = restrict(session, "context", "none")
    scores = push_scores(efficient.fitted, trials, "context")
    rows = make_design(trials).rows
    setup = efficient.fitted.setup
    column = next(k for k, c in enumerate(setup.columns) if c.source == "context")

    raw = score_each(efficient.fitted.params, setup, trials)["push"][:, column]
    np.testing.assert_allclose(raw.T, rows[:, [column]] * scores[:, :2], atol=1e-8)
    with pytest.raises(PortfireError, match="interval"):
        push_scores(efficient.fitted, trials, "interval")
    with pytest.raises(PortfireError, match="trial"):
        randomise_source(efficient.fitted, trials, "trial")
