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
from portfire.report._paths import find_end
from portfire.report._predicted import average_groups, choose_row
from portfire.report._pushes import center_within, share_of_first
from portfire.report._rates import average_bins, check_rates
from portfire.report._style import COLOURS, assign_looks, clean, shorten, spread_evenly
from portfire.report._words import (
    join_words,
    round_trials,
    state_dims,
    state_evidence,
    write_number,
    write_p,
)


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
    assert check.excess == pytest.approx(1.0, abs=5 * check.spread)
    assert check.spread == pytest.approx(np.sqrt(2 / model.size), rel=0.1)


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


def test_misfit_of_a_right_model_has_the_spread_that_is_drawn() -> None:
    rng = np.random.default_rng(2)
    n_running, bin_s = 5, 0.02
    model = rng.uniform(2, 30, (3, 40, 2000))
    recorded = rng.poisson(model * bin_s * n_running) / (bin_s * n_running)
    dims = ("condition", "time", "unit")
    rates = xr.Dataset(
        {
            "recorded": (dims, recorded),
            "model": (dims, model),
            "n_running": (dims[:2], np.full((3, 40), n_running)),
        },
        coords={"time": np.arange(40) * bin_s},
    )
    check = check_rates(rates)
    assert check is not None
    assert check.spread_by_unit is not None
    assert check.spread_by_time is not None
    scores = (check.by_unit - 1) / check.spread_by_unit
    assert scores.std() == pytest.approx(1, abs=0.08)  # five standard errors of an SD over 2,000 units
    assert np.abs((check.by_time - 1) / check.spread_by_time).max() < 4
    assert check.by_time.shape == (20,)


def test_predictions_are_averaged_in_groups_of_like_size() -> None:
    x = np.arange(12.0)[::-1]
    centres, means, errors = average_groups(x, 2 * x + 1)
    np.testing.assert_allclose(centres, [2.5, 8.5])
    np.testing.assert_allclose(means, [6.0, 18.0])
    np.testing.assert_allclose(errors, 2 * np.sqrt(3.5 / 6))  # 0 … 5 has a variance of 3.5


def test_best_features_at_the_middle_cutoff(result_only: Callable[[], Path]) -> None:
    row = choose_row(read_run_folder(result_only()))
    assert row is not None
    assert (row["cutoff_s"], row["features"], row["variant"]) == (0.1, "state", "all")


def test_time_axis_ends_where_few_trials_are_left() -> None:
    time, produced = np.arange(100) * 0.02, np.linspace(0.5, 1.5, 101)
    mean = np.where(time[:, None] < 0.9, 1.0, np.nan)
    assert find_end(time, produced, [("a", 0.8, mean)]) == pytest.approx(1.45)
    assert find_end(time, produced, [("a", 0.8, np.ones((100, 1)))]) == pytest.approx(2.01)
    assert find_end(time, np.full(3, np.nan), [("a", np.nan, mean)]) == pytest.approx(1.98)


def test_direction_of_single_trials() -> None:
    along = np.outer(np.arange(-3.0, 4.0), [3.0, 4.0])
    assert share_of_first(along) == pytest.approx(1.0)
    assert share_of_first(np.array([[1.0, 0], [-1, 0], [0, 1], [0, -1]])) == pytest.approx(0.5)
    assert share_of_first(np.zeros((4, 2))) is None


def test_why_a_verdict_stands() -> None:
    contrast = {"verdict": "initial", "at_dims": {"2": "both", "4": "initial"}}
    assert state_dims(contrast, 3) == (
        "With 4 latent dimensions the verdict is the same, with 2 it is both. "
        "It stands, because it holds with 4; fewer are reported and do not overrule."
    )
    contrast = {"verdict": "initial", "at_dims": {"2": "initial", "4": "undetermined"}}
    ends = {"ends_nats": {"2": -37.0, "3": -176.0, "4": -124.8}}
    assert state_dims(contrast | ends, 3) == (
        "With 2 latent dimensions the verdict is the same, with 4 it is undetermined. It stands, because at "
        "3 and at 4 the account with the initial push alone is ahead of the one with the sustained push "
        "alone, by 176 and 125 nats on all trials."
    )
    assert str(state_dims(contrast, 3)).endswith("The result does not say why it stands.")
    assert state_dims({"verdict": "both", "at_dims": {"2": "both"}}, 3) == (
        "With 2 latent dimensions the verdict is the same. It was not checked with 4 latent dimensions."
    )
    undetermined = {"verdict": "undetermined", "at_dims": {"2": "both", "4": "initial"}}
    assert (
        state_dims(undetermined, 3) == "With 2 latent dimensions the verdict is both, with 4 it is initial."
    )
    assert state_dims({"verdict": "both"}, 3) is None


def test_evidence_names_the_bound_of_the_route_that_is_not_needed() -> None:
    def entry(value: float, low: float, high: float, p: float) -> dict[str, object]:
        return {"nats_per_trial": value, "ci95": [low, high], "p": p}

    contrast = {
        "verdict": "sustained",
        "initial_unique": entry(-0.0101, -0.0253, 0.005, 1.0),
        "sustained_unique": entry(1.272, 1.127, 1.417, 1e-9),
    }
    text = str(state_evidence(contrast, 0.05)).replace("\u00a0", " ")
    assert text == (
        "Held out, a trial loses 1.27 nats without the sustained route (95 % CI 1.13 to 1.42; p < 0.001) and "
        "−0.010 nats without the initial route (95 % CI −0.025 to 0.005; p = 1.00). The initial route is not "
        "needed beside it: it adds at most 0.005 nats a trial, less than 0.05."
    )


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
    assert run.contexts == ("b", "a")  # by mean produced interval
    assert run.samples == (0.5, 0.9)
    assert run.has_responses
