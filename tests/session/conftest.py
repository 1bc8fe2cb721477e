"""A small recording, whole and spoiled at one place."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

N_TRIALS = 24


def make_tables(seed: int = 0) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Spikes and trials of 24 trials and 3 units, every time a multiple of a millisecond."""
    rng = np.random.default_rng(seed)
    set_s = np.round(1 + 3 * np.arange(N_TRIALS) + rng.uniform(0, 1, N_TRIALS), 3)
    sample_s = np.array([0.5, 0.7, 0.9])[np.arange(N_TRIALS) % 3]
    trials = pd.DataFrame(
        {
            "trial": [f"t{row}" for row in range(N_TRIALS)],
            "set_s": set_s,
            "response_s": np.round(set_s + sample_s + rng.normal(0, 0.05, N_TRIALS), 3),
            "sample_s": sample_s,
            "context": np.array(["low", "high"])[np.arange(N_TRIALS) // 2 % 2],
        }
    )
    times = np.sort(np.round(rng.uniform(0, 3 * N_TRIALS + 2, 2000), 3))
    spikes = pd.DataFrame({"unit": rng.choice(["n1", "n2", "n10"], 2000), "time_s": times})
    return spikes, trials


@pytest.fixture
def tables() -> tuple[pd.DataFrame, pd.DataFrame]:
    return make_tables()


@pytest.fixture
def folder(tmp_path: Path, tables: tuple[pd.DataFrame, pd.DataFrame]) -> Path:
    spikes, trials = tables
    spikes.to_csv(tmp_path / "spikes.csv", index=False)
    trials.to_csv(tmp_path / "trials.csv", index=False)
    return tmp_path


@pytest.fixture
def spoil(folder: Path) -> Callable[..., Path]:
    """Write one cell of a table anew, as text; `row` counts from 0."""

    def write(stem: str, row: int, column: str, text: str) -> Path:
        path = folder / f"{stem}.csv"
        table = pd.read_csv(path, dtype=str, keep_default_na=False)
        if column not in table:
            table[column] = "1"
        table.loc[row, column] = text
        table.to_csv(path, index=False)
        return folder

    return write
