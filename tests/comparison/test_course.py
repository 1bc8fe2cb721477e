"""The time course of a push: a straight line, an impulse, and one that dies away, each as it was drawn."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest

from portfire.comparison import cut_time, find_course
from portfire.dynamics import decay_of
from portfire.errors import PortfireError

from ..estimation._world import BIN_S, N_REFERENCE, blank_trials, draw_counts, fit_small, make_truth


def drawn(account, context_lasts_s=None):
    blank = blank_trials(160, 3)
    truth = make_truth(blank, account, 3)
    if context_lasts_s is not None:
        decay = [
            decay_of(context_lasts_s if c.source == "context" and c[2] > 0 else c[2], BIN_S)
            for c in truth.setup.columns
        ]
        truth = replace(truth, params={**truth.params, "decay": np.array([*decay, 1.0])})
    return draw_counts(truth, blank, 3)[0], truth


def true_push(truth, source, lasting):
    """Length of a push in log rate, over all units."""
    k = next(k for k, c in enumerate(truth.setup.columns) if c.source == source and (c[2] > 0) == lasting)
    return float(np.linalg.norm(truth.params["readout"] @ truth.params["push"][:, k]))


def test_initial_and_sustained_pushes_have_their_shapes():
    trials, truth = drawn("interval=sustained,context=initial,trial=initial")
    fitted = fit_small(trials, tolerance=0.1)
    context = find_course(fitted, trials, "context")
    assert abs(context.at_cue[0]) == pytest.approx(
        true_push(truth, "context", False), abs=3 * context.at_cue_se[0]
    )
    assert abs(context.at_cue[0]) > 4 * context.at_cue_se[0]
    assert np.all(np.abs(context.rate) < 3 * context.rate_se)
    interval = find_course(fitted, trials, "interval")
    size = true_push(truth, "interval", True) / (N_REFERENCE * BIN_S)
    assert np.all(np.abs(np.abs(interval.rate) - size) < 3 * interval.rate_se)
    assert np.all(np.abs(interval.rate) > 5 * interval.rate_se)
    assert abs(interval.at_cue[0]) < 0.5 * abs(context.at_cue[0])
    low, high = interval.band()
    assert np.all(high - low == pytest.approx(2 * 1.96 * interval.rate_se, rel=1e-3))


def test_a_push_that_dies_away_is_drawn_so():
    trials, truth = drawn("interval=none,context=sustained,trial=initial", 0.15)
    start = fit_small(trials, tolerance=0.5)
    decay = truth.params["decay"]
    fitted = fit_small(
        trials,
        "interval=both,context=sustained,trial=both",
        start=replace(start, params={**start.params, "decay": decay}),
        tolerance=0.1,
    )
    found = find_course(fitted, trials, "context")
    kernel = decay[-2] ** np.arange(16) / np.sum(decay[-2] ** np.arange(N_REFERENCE))
    size = true_push(truth, "context", True) * kernel / BIN_S
    edges = np.round(found.edges_s / BIN_S).astype(int)
    expected = np.array([size[a:b].mean() for a, b in pairwise(edges)])
    assert np.all(np.abs(np.abs(found.rate[0]) - expected) < 3.5 * found.rate_se[0])
    assert abs(found.rate[0, 0]) > 3 * abs(found.rate[0, -1])


def test_segments_widen_and_end_where_few_trials_run():
    n_bins = np.r_[np.full(95, 40), np.full(5, 80)]
    edges = cut_time(n_bins, 0.02, 80)
    assert edges[0] == 1
    assert edges[-1] == 40
    assert np.all(np.diff(edges) > 0)
    with pytest.raises(PortfireError, match="3 bins"):
        cut_time(np.full(20, 3), 0.02, 3)


def test_a_source_that_does_not_push_has_no_course():
    trials, _ = drawn("interval=none,context=initial,trial=initial")
    fitted = fit_small(trials, "interval=none,context=initial,trial=initial", max_iterations=3)
    for source in ("interval", "trial"):
        with pytest.raises(PortfireError, match=source):
            find_course(fitted, trials, source)
