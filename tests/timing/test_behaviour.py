"""Produced intervals by condition and the Weber fraction."""

from __future__ import annotations

import json

import numpy as np
import pytest

from portfire.session import Session, Trials
from portfire.timing import summarise_behaviour


def make_trials(produced: np.ndarray, **columns: object) -> Trials:
    start = 10.0 * np.arange(len(produced))
    trials = {"set_s": start, "response_s": start + produced, **columns}
    return Session.from_arrays({"a": start + 0.1}, trials).bin(min_rate_hz=0)


def draw_weber(n: int, slope: float, seed: int) -> Trials:
    rng = np.random.default_rng(seed)
    mean = np.tile([0.5, 0.8, 1.1, 1.4], n)
    return make_trials(mean * (1 + slope * rng.standard_normal(4 * n)), sample_s=mean)


def test_conditions_by_hand() -> None:
    produced = np.array([0.4, 0.6, 0.9, 1.1, 1.0])
    behaviour = summarise_behaviour(
        make_trials(
            produced,
            sample_s=[0.5, 0.5, 1.0, 1.0, 1.0],
            context=["b", "b", "a", "a", "b"],
            target_s=[0.6, 0.6, 0.9, np.nan, 1.2],
        )
    )
    rows = behaviour.to_dict()["conditions"]
    assert [(row["context"], row["sample_s"], row["n"]) for row in rows] == [
        ("a", 1.0, 2),
        ("b", 0.5, 2),
        ("b", 1.0, 1),
    ]
    assert [row["mean_s"] for row in rows] == pytest.approx([1.0, 0.5, 1.0])
    assert rows[0]["sd_s"] == pytest.approx(0.2 / np.sqrt(2))
    assert rows[0]["cv"] == pytest.approx(0.2 / np.sqrt(2))
    assert rows[1]["cv"] == pytest.approx(0.4 / np.sqrt(2))
    assert rows[2]["sd_s"] is rows[2]["cv"] is None
    assert [row["bias_s"] for row in rows] == pytest.approx([0.0, -0.1, -0.2])
    assert [row["target_s"] for row in rows] == pytest.approx([0.9, 0.6, 1.2])
    # Two conditions of equal spread ratio: SD grows by 0 while the mean grows by 0.5.
    assert behaviour.weber_fraction == pytest.approx(0, abs=1e-12)


def test_weber_fraction_of_three_conditions_by_hand() -> None:
    produced = np.array([0.9, 1.1, 1.7, 2.3, 2.6, 3.4])
    behaviour = summarise_behaviour(make_trials(produced, sample_s=[1, 1, 2, 2, 3, 3]))
    spread = np.array([0.2, 0.6, 0.8]) / np.sqrt(2)
    assert behaviour.weber_fraction == pytest.approx(np.polyfit([1, 2, 3], spread, 1)[0])


def test_weber_fraction_is_found_and_its_interval_covers() -> None:
    found = [summarise_behaviour(draw_weber(40, 0.12, seed), draws=300) for seed in range(60)]
    assert np.mean([one.weber_fraction for one in found]) == pytest.approx(0.12, abs=0.01)
    covered = np.mean([one.weber_ci95[0] <= 0.12 <= one.weber_ci95[1] for one in found])
    assert covered >= 0.85


def test_the_interval_hangs_on_the_seed_only() -> None:
    trials = draw_weber(20, 0.1, 0)
    assert summarise_behaviour(trials, seed=3).weber_ci95 == summarise_behaviour(trials, seed=3).weber_ci95
    assert summarise_behaviour(trials, seed=3).weber_ci95 != summarise_behaviour(trials, seed=4).weber_ci95


def test_fewer_than_two_conditions_have_no_weber_fraction() -> None:
    one = summarise_behaviour(make_trials(np.array([0.5, 0.6, 0.7])))
    assert one.weber_fraction is one.weber_ci95 is None
    single = summarise_behaviour(make_trials(np.array([0.5, 0.6, 1.0]), sample_s=[0.5, 0.5, 1.0]))
    assert single.weber_fraction is None
    same = summarise_behaviour(make_trials(np.array([0.5, 0.6, 0.5, 0.6]), sample_s=[0.5, 0.5, 1.0, 1.0]))
    assert same.weber_fraction is None


def test_trials_without_a_response_do_not_count() -> None:
    produced = np.array([0.5, np.nan, 0.7, np.nan])
    start = 10.0 * np.arange(4)
    trials = make_trials(produced, end_s=start + 0.8, sample_s=[0.5, 0.5, 0.5, 1.0])
    rows = summarise_behaviour(trials).to_dict()["conditions"]
    assert [row["n"] for row in rows] == [2, 0]
    assert rows[0]["mean_s"] == pytest.approx(0.6)
    assert rows[1]["mean_s"] is None


def test_selection_keeps_the_conditions_of_the_session() -> None:
    trials = draw_weber(5, 0.1, 0)
    rows = summarise_behaviour(trials[trials.condition == 1]).to_dict()["conditions"]
    assert [row["n"] for row in rows] == [0, 5, 0, 0]


def test_the_summary_is_plain() -> None:
    summary = summarise_behaviour(draw_weber(5, 0.1, 0)).to_dict()
    assert json.loads(json.dumps(summary, allow_nan=False)) == summary
