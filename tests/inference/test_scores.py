"""Scores of single trials add up to the gradient, and are those of each trial alone."""

from __future__ import annotations

import numpy as np
import pytest

from portfire.inference import bound_gradient, bound_scores, fit_bound, start_guess

from ._cases import rich_case


@pytest.mark.parametrize("n_before", [0, 3])
@pytest.mark.parametrize("readout", ["poisson", "gaussian"])
def test_scores_are_the_gradient_trial_by_trial(readout, n_before):
    case = rich_case(readout, n_before, seed=5)
    n_lanes = case.chunk.weight.shape[0]
    case = case.with_chunk(weight=np.array([1.0] * (n_lanes - 1) + [0.0]))
    bound = fit_bound(case.params, case.setup, case.chunk, start_guess(case.setup, case.chunk))
    scores = bound_scores(case.params, case.setup, case.chunk, bound)
    gradient = bound_gradient(case.params, case.setup, case.chunk, bound)
    assert set(scores) == set(gradient)
    for name, total in gradient.items():
        found = np.asarray(scores[name])
        assert found.shape == (*np.shape(total), n_lanes), name
        np.testing.assert_allclose(found.sum(axis=-1), np.asarray(total), rtol=1e-9, atol=1e-9, err_msg=name)
        assert not np.any(found[..., -1]), name
    only = case.with_chunk(weight=np.eye(n_lanes)[1])
    alone = bound_gradient(case.params, case.setup, only.chunk, bound)
    for name, value in alone.items():
        np.testing.assert_allclose(
            np.asarray(scores[name])[..., 1], np.asarray(value), rtol=1e-9, atol=1e-9, err_msg=name
        )
