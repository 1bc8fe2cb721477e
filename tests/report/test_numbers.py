"""The numbers that the report computes itself, against values worked out by hand."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr

from portfire.report._accounts import compare_scores
from portfire.report._folder import read_run_folder
from portfire.report._pushes import center_within
from portfire.report._rates import average_bins, check_rates
from portfire.report._style import COLOURS, assign_looks, clean, shorten, spread_evenly
from portfire.report._words import join_words, round_trials, write_number, write_p


def test_scores_are_paired_over_trials(tmp_path: Path) -> None:
    result = {"portfire": "0.1.0", "chosen": {"model": "linear"}}
    (tmp_path / "result.json").write_text(json.dumps(result), encoding="utf-8")
    full, none = "interval=both,trial=both", "interval=none,trial=both"
    rows = [("1", full, -10.0), ("2", full, -20.0), ("3", full, -30.0)]
    rows += [("1", none, -11.0), ("2", none, -20.0), ("3", none, -35.0)]
    table = pd.DataFrame(rows, columns=["trial", "account", "loglik"]).assign(model="linear")
    table.to_parquet(tmp_path / "scores.parquet")
    compared = compare_scores(read_run_folder(tmp_path))
    assert compared is not None
    assert compared["account"].tolist() == [full, none]
    assert compared["difference"].tolist() == [0.0, -2.0]
    assert compared["se"].iloc[1] == pytest.approx(np.sqrt(7 / 3))  # differences -1, 0, -5: variance 7


def test_rates_misfit_is_in_units_of_counting_noise() -> None:
    # Two bins of 0.1 s, ten trials: at 10 spikes/s the rate has a variance of 10 / (10 × 0.1) = 10.
    recorded = np.array([[[10.0, 4.0], [10.0, 8.0]]])
    model = np.array([[[12.0, 6.0], [8.0, 6.0]]])
    rates = xr.Dataset(
        {
            "recorded": (("condition", "time", "unit"), recorded),
            "model": (("condition", "time", "unit"), model),
            "n_running": (("condition", "time"), np.full((1, 2), 10)),
        },
        coords={"time": [0.0, 0.1]},
    )
    check = check_rates(rates)
    assert check is not None
    np.testing.assert_allclose(check.by_unit, [(4 / 12 + 4 / 8) / 2, (4 / 6 + 4 / 6) / 2])
    assert check.excess == pytest.approx(np.mean([4 / 12, 4 / 8, 4 / 6, 4 / 6]))
    assert check.share == pytest.approx(1 - 16 / 8)
    assert check.worst.tolist() == [1, 0]
    assert check_rates(rates.where(rates["recorded"] > 100)) is None


def test_rates_of_a_right_model_differ_by_counting_noise_alone() -> None:
    rng = np.random.default_rng(1)
    model = rng.uniform(5, 40, (4, 50, 30))
    running = np.full((4, 50), 20)
    recorded = rng.poisson(model * 0.02 * 20) / (0.02 * 20)
    dims = ("condition", "time", "unit")
    rates = xr.Dataset(
        {
            "recorded": (dims, recorded),
            "model": (dims, model),
            "n_running": (dims[:2], running),
        },
        coords={"time": np.arange(50) * 0.02},
    )
    check = check_rates(rates)
    assert check is not None
    assert check.excess == pytest.approx(1.0, abs=5 * np.sqrt(2 / model.size))


def test_pushes_are_centred_within_conditions() -> None:
    table = pd.DataFrame(
        {"condition": [0, 0, 0, 1, 1, 1, 1], "produced_s": [1.0, np.e, np.e**2, 1, 1, np.nan, 2]}
    )
    push = np.arange(7.0)[:, None]
    centred = center_within(table, {"initial": push})
    np.testing.assert_allclose(centred["produced"][:3], [-1.0, 0.0, 1.0])
    np.testing.assert_allclose(centred["initial"][:3, 0], [-1.0, 0.0, 1.0])
    assert np.isnan(centred["produced"][5])
    assert np.nanmean(centred["initial"][3:, 0]) == pytest.approx(0.0, abs=1e-12)


def test_bins_are_pooled_with_their_weights() -> None:
    values, weight = np.array([1.0, 3.0, np.nan, 5.0, np.nan]), np.array([1.0, 3.0, 9.0, 2.0, 1.0])
    np.testing.assert_allclose(average_bins(values, weight, 2), [2.5, 5.0, np.nan])


def test_numbers_in_words() -> None:
    assert write_number(-0.004) == "0.00"
    assert write_number(-1.5) == "−1.50"
    assert write_number(None) == "not given"
    assert write_p(0.0004) == "p\u00a0<\u00a00.001"
    assert write_p(0.25) == "p\u00a0=\u00a00.25"
    assert [round_trials(n) for n in (87, 101, 1367, 100_000)] == ["87", "110", "1,400", "100,000"]
    assert join_words(["a", "b", "c"]) == "a, b and c"


def test_names_are_cleaned_and_shortened() -> None:
    assert clean("a\x00b\u202ec\nd") == "a\ufffdbc d"
    assert shorten("x" * 100) == "x" * 14 + "…" + "x" * 7
    assert len(shorten("x" * 100)) == 22


def test_jitter_is_always_the_same_and_within_bounds() -> None:
    offsets = spread_evenly(60, 0.1)
    assert np.array_equal(offsets, spread_evenly(60, 0.1))
    assert np.abs(offsets).max() <= 0.1
    assert len(np.unique(offsets)) == 60


def test_members_differ_by_more_than_colour() -> None:
    looks = assign_looks([str(k) for k in range(42)])
    assert len({(look.colour, look.marker) for look in looks.values()}) == 42
    first = [looks[str(k)] for k in range(5)]
    assert len({look.marker for look in first}) == len({str(look.line) for look in first}) == 5


# Machado, Oliveira and Fernandes 2009, IEEE TVCG 15:1291, severity 1 (from memory).
DICHROMACY = {
    "usual": np.eye(3),
    "protan": [
        [0.152286, 1.052583, -0.204868],
        [0.114503, 0.786281, 0.099216],
        [-0.003882, -0.048116, 1.051998],
    ],
    "deutan": [
        [0.367322, 0.860646, -0.227968],
        [0.280085, 0.672501, 0.047413],
        [-0.01182, 0.04294, 0.968881],
    ],
    "tritan": [
        [1.255528, -0.076749, -0.178779],
        [-0.078411, 0.930809, 0.147602],
        [0.004733, 0.691367, 0.3039],
    ],
}
TO_XYZ = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])


def to_lab(linear: np.ndarray) -> np.ndarray:
    scaled = linear @ TO_XYZ.T / [0.9505, 1.0, 1.089]
    root = np.where(scaled > 0.008856, np.cbrt(scaled), 7.787 * scaled + 16 / 116)
    x, y, z = root.T
    return np.stack([116 * y - 16, 500 * (x - y), 200 * (y - z)], axis=1)


@pytest.mark.parametrize("sight", DICHROMACY)
def test_colours_are_told_apart_by_every_sight(sight: str) -> None:
    rgb = np.array([[int(c[i : i + 2], 16) / 255 for i in (1, 3, 5)] for c in COLOURS])
    linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
    seen = to_lab(np.clip(linear @ np.array(DICHROMACY[sight]).T, 0, 1))
    distance = np.linalg.norm(seen[:, None] - seen[None], axis=-1)
    assert distance[np.triu_indices(len(COLOURS), 1)].min() > 30
    contrast = 1.05 / (linear @ TO_XYZ[1] + 0.05)
    assert contrast.min() > 3


def test_folder_knows_its_contexts_and_samples(small: Callable[..., Path]) -> None:
    run = read_run_folder(small(contexts=("b", "a"), samples=(0.9, 0.5)))
    assert run.contexts == ("a", "b")
    assert run.samples == (0.5, 0.9)
    assert run.has_responses
