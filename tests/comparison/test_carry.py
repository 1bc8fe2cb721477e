"""The mode that carries an initial push to the end of a trial."""

from dataclasses import replace

import numpy as np
import pytest

from portfire.comparison import carrying_time_constant, describe_mimic

from ..estimation._world import BIN_S, blank_trials, make_truth


@pytest.fixture(scope="module")
def truth():
    """Dimensions with decays of 0.985 (2 s) and 0.9 (0.285 s) a bin, turned at random."""
    return make_truth(blank_trials(8), "interval=both,context=both,trial=both", 4)


def with_push(truth, source, direction):
    """The push of a source along one natural dimension only."""
    values, vectors = np.linalg.eig(truth.params["transition"])
    axis = vectors[:, np.argsort(-values)[direction]]
    push = truth.params["push"].copy()
    for k, column in enumerate(truth.setup.columns):
        if column.source == source and column.persistence_s == 0:
            push[:, k] = axis
    factor = np.outer(axis, [1.0, 0.0]) if source == "trial" else truth.params["initial_factor"]
    return replace(truth, params={**truth.params, "push": push, "initial_factor": factor})


@pytest.mark.parametrize("source", ["interval", "context", "trial"])
def test_a_push_along_one_mode_is_carried_by_it(truth, source):
    slow, fast = (carrying_time_constant(with_push(truth, source, k), source) for k in (0, 1))
    assert slow == pytest.approx(-BIN_S / np.log(0.985))
    assert fast == pytest.approx(-BIN_S / np.log(0.9))


def test_what_is_left_at_the_end_counts_not_what_came_in(truth):
    """Three times as much into the fast mode; after 14 bins most of the push is in the slow one."""
    values, vectors = np.linalg.eig(truth.params["transition"])
    order = np.argsort(-values)
    push = truth.params["push"].copy()
    push[:, 0] = vectors[:, order[0]] + 3 * vectors[:, order[1]]
    even = np.linalg.qr(np.random.default_rng(0).standard_normal((16, 2)))[0]
    mixed = replace(truth, params={**truth.params, "push": push, "readout": even})
    assert carrying_time_constant(mixed, "interval") == pytest.approx(-BIN_S / np.log(0.985))


def test_a_rotation_is_one_mode(truth):
    turn = 0.9 * np.array([[np.cos(0.4), -np.sin(0.4)], [np.sin(0.4), np.cos(0.4)]])
    turning = replace(truth, params={**truth.params, "transition": turn})
    assert carrying_time_constant(turning, "context") == pytest.approx(-BIN_S / np.log(0.9))


def test_a_mode_that_does_not_decay_is_a_mimic(truth):
    lasting = replace(truth, params={**truth.params, "transition": np.diag([1.001, 0.5])})
    constant = carrying_time_constant(lasting, "interval")
    assert np.isinf(constant)
    assert "sustained input under another name" in (describe_mimic("interval", constant, 0.4) or "")
    assert describe_mimic("interval", 0.3, 0.4) is None


def test_no_push_is_carried_by_nothing(truth):
    still = replace(truth, params={**truth.params, "push": np.zeros_like(truth.params["push"])})
    assert carrying_time_constant(still, "interval") == BIN_S
