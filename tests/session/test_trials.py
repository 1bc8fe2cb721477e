"""Selecting trials."""

from __future__ import annotations

from dataclasses import FrozenInstanceError

import numpy as np
import pandas as pd
import pytest

from portfire.session import Session, Trials


@pytest.fixture
def batch(tables: tuple[pd.DataFrame, pd.DataFrame]) -> Trials:
    spikes, trials = tables
    return Session.from_arrays({unit: rows["time_s"] for unit, rows in spikes.groupby("unit")}, trials).bin()


@pytest.mark.parametrize(
    ("rows", "expected"),
    [
        ([3, 1, 1], [3, 1, 1]),
        (np.arange(24) % 5 == 2, [2, 7, 12, 17, 22]),
        (slice(2, 9, 3), [2, 5, 8]),
        (-1, [23]),
        ([], []),
        (np.zeros(24, dtype=bool), []),
    ],
)
def test_rows_are_selected_together(batch: Trials, rows: object, expected: list[int]) -> None:
    part = batch[rows]
    assert len(part) == len(expected)
    assert part.trial == tuple(batch.trial[row] for row in expected)
    for name in ("counts", "mask", "set_s", "produced_s", "sample_s", "condition", "index", "n_bins"):
        np.testing.assert_array_equal(getattr(part, name), getattr(batch, name)[expected])
    assert part.context == tuple(batch.context[row] for row in expected)


def test_what_describes_the_session_survives(batch: Trials) -> None:
    part = batch[batch.condition == 0][:2]
    for name in (
        "conditions",
        "contexts",
        "sample_center",
        "sample_scale",
        "n_session",
        "session_span",
        "unit",
    ):
        assert getattr(part, name) == getattr(batch, name)
    assert part.index.tolist() == np.flatnonzero(batch.condition == 0)[:2].tolist()


@pytest.mark.parametrize("rows", [[24], [True, False], np.ones(25, dtype=bool)])
def test_rows_that_do_not_exist_are_refused(batch: Trials, rows: object) -> None:
    with pytest.raises(IndexError):
        batch[rows]


def test_trials_cannot_be_changed(batch: Trials) -> None:
    with pytest.raises(FrozenInstanceError):
        batch.bin_s = 0.1  # type: ignore[misc]
    for part in (batch, batch[:3]):
        for array in (part.counts, part.mask, part.set_s, part.produced_s, part.sample_s, part.condition):
            with pytest.raises(ValueError, match="read-only"):
                array[0] = 0
