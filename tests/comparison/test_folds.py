"""Folds: the blocks of the interface, and what training leaves out."""

import numpy as np
import pytest

from portfire.comparison import block_of, block_size, count_fewest, fold_of, inner_sets, training_rows
from portfire.errors import InputError


def test_blocks_follow_the_interface():
    # size = min(25, max(1, n // 2J)), written out by hand
    assert block_size(600, 5) == 25
    assert block_size(200, 5) == 20
    assert block_size(9, 4) == 1
    assert block_of([0, 19, 20, 199], 200, 5).tolist() == [0, 0, 1, 9]
    assert fold_of([0, 20, 99, 100, 119, 120], 200, 5).tolist() == [0, 1, 4, 0, 0, 1]


def test_last_block_may_be_short():
    assert np.bincount(block_of(np.arange(610), 610, 5)).tolist() == [25] * 24 + [10]


@pytest.mark.parametrize("n", [10, 47, 200, 613])
def test_every_trial_is_held_out_once(n):
    fold = fold_of(np.arange(n), n, 5)
    assert np.bincount(fold, minlength=5).min() > 0


def test_training_keeps_two_trials_away_from_every_held_out_block():
    n, index = 200, np.arange(200)
    rows = training_rows(index, n, 5, {0})
    held = np.flatnonzero(fold_of(index, n, 5) == 0)
    assert np.abs(rows[:, None] - held).min() == 3
    # two blocks of 20; the first touches the start of the session and so has one edge
    assert len(rows) == 200 - 40 - 2 - 4


def test_training_measures_edges_on_the_session_not_on_the_selection():
    index = np.array([150, 3, 22, 21, 23, 80])
    # block 0 (0-19) and block 5 (100-119) are held out: 20, 21, 98, 99, 120, 121 are edges
    assert training_rows(index, 200, 5, {0}).tolist() == [0, 2, 4, 5]


def test_inner_split_holds_out_two_folds():
    index = np.arange(200)
    both = training_rows(index, 200, 5, {0, 3})
    assert set(both) == set(training_rows(index, 200, 5, {0})) & set(training_rows(index, 200, 5, {3}))
    assert len(training_rows(index, 200, 5, ())) == 200


def test_wrong_folds_are_named():
    with pytest.raises(InputError, match="9 trials are too few for 5 folds"):
        fold_of(np.arange(9), 9, 5)
    with pytest.raises(InputError, match="number of folds is 1"):
        fold_of(np.arange(9), 9, 1)
    with pytest.raises(InputError, match="fold 7 does not exist"):
        training_rows(np.arange(50), 50, 5, {7})
    with pytest.raises(InputError, match="0 to 200; a session of 200"):
        fold_of([0, 200], 200, 5)


def test_inner_sets_split_every_training_set_twice():
    assert inner_sets(60, 3) == [((0, 1), None), ((1, 2), None), ((0, 2), None)]
    assert inner_sets(60, 2) == [((0,), 0), ((0,), 1), ((1,), 0), ((1,), 1)]
    for n_folds in (3, 4, 5, 10):
        sets = inner_sets(200, n_folds)
        for fold in range(n_folds):
            others = {other for held, _ in sets if fold in held for other in held} - {fold}
            assert len(others) == 2 or n_folds == 2


def test_the_smallest_training_set_is_counted():
    # Three folds of 30 trials: blocks of five in turn; with two folds held out, each block left loses four.
    assert count_fewest(30, 3) == 2
    assert count_fewest(100, 5) == min(
        len(training_rows(np.arange(100), 100, 5, {j, (j + 1) % 5})) for j in range(5)
    )
    # Two folds: what is left of a half of 24 trials is too little to be cut again.
    assert count_fewest(24, 2) == 0
    assert count_fewest(8, 2) == 0
