"""Rivals: each is found where it is the truth, and none where pushes are."""

from __future__ import annotations

from dataclasses import replace

import jax.numpy as jnp
import numpy as np
import pytest

from portfire.accounts import Account, make_design
from portfire.comparison import list_rivals, name_winner, score_rival
from portfire.estimation import GroupedObjective, Objective, count_route, split_groups
from portfire.inference import pack

from ..estimation._world import SOURCES, blank_trials, draw_counts, fit_small, make_truth

FULL = Account.full(SOURCES)


def rival_of(setup, name, source="context"):
    return next(r for r in list_rivals(setup) if r.name == name and r.source == source)


def draw_bent(name, account, extra, push_of_cue=1.0):
    """A session in which a rival is the truth: every condition has parameters of its own."""
    blank = blank_trials(160, 3)
    truth = make_truth(blank, account, 3)
    truth = replace(truth, params={**truth.params, "offset": push_of_cue * truth.params["offset"]})
    if name is None:
        return draw_counts(truth, blank, 3)[0]
    bend = rival_of(truth.setup, name).bend
    rows, counts = make_design(blank).rows, np.zeros_like(blank.counts)
    for group in split_groups(blank):
        common = {k: jnp.asarray(v) for k, v in truth.params.items()} | {"extra": jnp.asarray(extra)}
        bent = {k: np.asarray(v) for k, v in bend(common, jnp.asarray(rows[group[0]])).items()}
        counts[group] = draw_counts(replace(truth, params=bent), blank, 3)[0].counts[group]
    return replace(blank, counts=counts)


def score_all(trials, names, source="context"):
    full = fit_small(trials, tolerance=0.1)
    fits = {"both": full}
    for route in ("none", "initial", "sustained"):
        fits[route] = fit_small(trials, str(FULL.replace(source, route)), start=full, tolerance=0.1)
    k = count_route(FULL, source, 0.0, full.setup)
    n_params = {"none": 0, "initial": k, "sustained": k, "both": 2 * k}
    wanted = [rival_of(full.setup, name, source) for name in names]
    return {rival.name: score_rival(rival, fits, trials, n_params) for rival in wanted}


SPEED, DYNAMICS, CUE = "a change of speed", "a change of the dynamics", "a change of the cue response"
TOGETHER = "pushes that depend on interval and context together"
TONIC = "a tonic input from before the set cue"


def test_no_rival_beats_pushes_that_are_the_truth():
    trials = draw_bent(None, "interval=sustained,context=initial,trial=initial", None)
    scores = score_all(trials, (SPEED, CUE, TONIC))
    assert not any(score.beats("initial") for score in scores.values())
    assert name_winner(list(scores.values()), "initial") is None
    for score in scores.values():
        assert score.margin("initial") < -5
        assert score.p is None or score.p > 0.01
        assert score.margin("undetermined") is None


def test_a_change_of_speed_is_found():
    scores = score_all(draw_bent(SPEED, "interval=none,context=none,trial=initial", [0.5], 3.0), (SPEED, CUE))
    assert scores[SPEED].beats("sustained")
    assert scores[SPEED].p < 1e-4
    assert not scores[CUE].beats("sustained")
    assert name_winner(list(scores.values()), "sustained") == SPEED


def test_a_change_of_the_dynamics_is_found():
    truth = [-0.03, 0.05, -0.05, 0.02]
    scores = score_all(draw_bent(DYNAMICS, "interval=none,context=none,trial=initial", truth), (DYNAMICS,))
    assert scores[DYNAMICS].beats("sustained")
    assert scores[DYNAMICS].margin("both") > 20


def test_a_tonic_input_costs_less_than_two_pushes():
    scores = score_all(draw_bent(TONIC, "interval=none,context=sustained,trial=initial", []), (TONIC,))
    assert scores[TONIC].beats("both")
    assert scores[TONIC].beside_nats is None
    assert scores[TONIC].margin("sustained") > 20
    assert scores[TONIC].margin("initial") > 20


@pytest.mark.parametrize("name", [SPEED, DYNAMICS, CUE, TOGETHER, TONIC])
def test_gradient_through_the_bend(name):
    """By the common and the extra parameters against central differences; at zero nothing bends."""
    blank = blank_trials(40, 2)
    truth = make_truth(blank, "interval=both,context=both,trial=both", 2)
    trials = draw_counts(truth, blank, 2)[0]
    rival = rival_of(truth.setup, name)
    rng = np.random.default_rng(0)
    grouped = GroupedObjective(trials, truth.setup, rival.bend)
    if name != TONIC:
        plain = Objective(pack(trials, truth.setup), truth.setup)
        at_zero = grouped({**truth.params, "extra": np.zeros(rival.n_extra)})[0]
        assert at_zero == pytest.approx(plain(truth.params)[0], abs=1e-4)
        plain.close()
    params = {**truth.params, "extra": 0.02 * rng.standard_normal(rival.n_extra)}
    gradient = grouped(params)[1]
    for key in ("extra", "transition", "push"):
        value = np.asarray(params[key])
        for at in list(np.ndindex(value.shape))[:2]:
            ends = []
            for sign in (1, -1):
                moved = value.copy()
                moved[at] += sign * 1e-3
                ends.append(grouped({**params, key: moved})[0])
            slope = (ends[0] - ends[1]) / 2e-3
            assert gradient[key][at] == pytest.approx(slope, rel=2e-2, abs=0.2), (key, at)
    grouped.close()
