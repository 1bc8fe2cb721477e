"""What an inspection sees."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from portfire.errors import InputError
from portfire.session import Session, explain_by_time, format_inspection, inspect_session, read_session
from portfire.session._inspect import rank_correlate


def make_session(n_trials: int = 120, drift: float = 0.0, seed: int = 0, **columns: object) -> Session:
    """Eight units of 20 spikes/s, whose rate grows by `drift` over the session."""
    rng = np.random.default_rng(seed)
    start = 2.0 * np.arange(n_trials) + 0.5
    sample = rng.choice([0.5, 0.7, 0.9], n_trials)
    trials = {
        "set_s": start,
        "response_s": start + sample * np.exp(0.1 * rng.standard_normal(n_trials)),
        "sample_s": sample,
        "context": rng.choice(["low", "high"], n_trials),
        **columns,
    }
    end = 2.0 * n_trials
    spikes = {}
    for unit in range(8):
        times = rng.uniform(0, end, rng.poisson(20 * (1 + drift) * end))
        spikes[f"u{unit}"] = times[rng.uniform(size=len(times)) < (1 + drift * times / end) / (1 + drift)]
    return Session.from_arrays(spikes, {name: cells for name, cells in trials.items() if cells is not None})


def inspect(session: Session, **settings: float) -> dict:
    found = inspect_session(session, **settings)
    assert json.loads(json.dumps(found, allow_nan=False)) == found
    text = format_inspection(found)
    assert all(warning in text for warning in found["warnings"])
    return found


def test_a_clean_session_has_no_warnings() -> None:
    found = inspect(make_session())
    assert found["warnings"] == []
    assert found["use"]["units_used"] == 8
    assert found["use"]["trials_used"] == 120
    assert [row["rate_hz"] for row in found["rates"]] == pytest.approx([20] * 8, rel=0.1)
    assert sum(row["n"] for row in found["behaviour"]["conditions"]) == 120
    assert found["confounding"]["separable"]
    assert found["interval_slope"]["slope"] == pytest.approx(1, abs=4 * found["interval_slope"]["se"])
    assert found["interval_drift"]["p"] > 0.01


def test_slow_drift_is_seen() -> None:
    found = inspect(make_session(drift=2.0))
    assert found["drift"]["n_units"] == 8
    assert all(row["drift_rho"] > 0.3 for row in found["rates"])
    assert any("8 of 8 units change their rate" in text for text in found["warnings"])


def test_drift_of_steady_units_stays_near_its_level() -> None:
    share = np.mean([inspect(make_session(n_trials=60, seed=seed))["drift"]["share"] for seed in range(12)])
    assert share < 0.05


def test_context_in_two_halves_is_confounded_with_time() -> None:
    found = inspect(make_session(context=np.repeat(["low", "high"], 60)))
    assert found["confounding"]["context_r2"] > 0.5
    assert any("Trial time predicts the context (R²" in text for text in found["warnings"])


def test_context_by_trial_is_not_confounded() -> None:
    assert inspect(make_session(context=np.tile(["low", "high"], 60)))["confounding"]["context_r2"] < 0.05


def test_context_that_goes_with_the_interval_cannot_be_separated() -> None:
    sample = np.tile([0.5, 0.9], 60)
    start = 2.0 * np.arange(120) + 0.5
    context = np.where(sample > 0.6, "long", "short")
    found = inspect(make_session(sample_s=sample, response_s=start + sample, context=context))
    assert found["confounding"]["separable"] is False
    assert any("cannot be told apart" in text for text in found["warnings"])


def test_drifting_intervals_are_seen() -> None:
    start = 2.0 * np.arange(120) + 0.5
    found = inspect(make_session(response_s=start + np.linspace(0.5, 1.0, 120), sample_s=None, context=None))
    assert found["interval_drift"]["rho"] == pytest.approx(1)
    assert found["interval_drift"]["last_third_over_first"] == pytest.approx(0.6, abs=0.05)
    assert any("Produced intervals drift" in text for text in found["warnings"])


def test_a_session_without_covariates_or_responses() -> None:
    start = 2.0 * np.arange(120) + 0.5
    columns = {"sample_s": None, "context": None, "response_s": np.full(120, np.nan), "end_s": start + 0.8}
    found = inspect(make_session(**columns))
    (row,) = found["behaviour"]["conditions"]
    assert row == {"context": None, "sample_s": None, "n": 0, "mean_s": None, "sd_s": None, "cv": None}
    assert found["behaviour"]["weber_fraction"] is found["interval_drift"] is found["interval_slope"] is None
    assert found["confounding"] == {"context_r2": None, "sample_r2": None, "separable": None}
    assert any("No used trial has a response" in text for text in found["warnings"])


def test_one_sample_interval() -> None:
    start = 2.0 * np.arange(120) + 0.5
    found = inspect(make_session(sample_s=np.full(120, 0.8), context=None, response_s=start + 0.5))
    assert found["use"]["conditions"] == 1
    assert found["behaviour"]["weber_fraction"] is None
    assert found["interval_drift"] == {
        "rho": None,
        "p": None,
        "last_third_over_first": pytest.approx(0, abs=1e-9),
    }


def test_very_few_trials() -> None:
    found = inspect(make_session(n_trials=2))
    assert found["interval_drift"] is None
    assert all(row["drift_p"] is None for row in found["rates"])


def test_what_is_left_out_is_named() -> None:
    session = make_session()
    trials = session.trials.copy()
    trials.loc[3, "response_s"] = np.nan
    trials.loc[7, "include"] = False
    trials.loc[9, "response_s"] = trials.loc[9, "set_s"] + 1.999
    trials.loc[9, "sample_s"] = 0.5
    spikes = {**dict(zip(session.units, session.spikes, strict=True)), "quiet": [1.0], "rare": [0.6]}
    found = inspect(Session.from_arrays(spikes, trials))
    assert found["trials_left_out"]["4"] == "no response and no end_s"
    assert found["trials_left_out"]["8"] == "include is 0"
    assert found["lapses"] == ["10"]
    assert set(found["units_left_out"]) == {"quiet", "rare"}
    text = format_inspection(found)
    assert "10: lapse" in text
    assert "quiet: " in text


@pytest.mark.parametrize(
    ("columns", "settings", "expected"),
    [
        ({"sample_s": np.linspace(0.5, 0.9, 120)}, {}, "sample_s has 120 different values"),
        ({"sample_s": np.tile([500.0, 700.0, 900.0], 40)}, {}, "is sample_s in seconds?"),
        ({"context": np.array(["low", "Low"] * 60)}, {}, "differ only in upper and lower case"),
        ({}, {"before_set_s": 1.5}, "reaches into the trial before"),
        ({}, {"bin_s": 0.3}, "shorter bins show more of the path"),
    ],
)
def test_warnings(columns: dict, settings: dict, expected: str) -> None:
    found = inspect(make_session(**columns), **settings)
    assert any(expected in text for text in found["warnings"])


def test_a_gap_in_the_recording_is_seen() -> None:
    session = make_session()
    spikes = {
        unit: train[(train < 100) | (train > 120)]
        for unit, train in zip(session.units, session.spikes, strict=True)
    }
    found = inspect(Session.from_arrays(spikes, session.trials))
    assert any("No unit fires in 10 trials (51, 52, " in text for text in found["warnings"])


def test_spikes_listed_twice_are_seen() -> None:
    session = make_session()
    spikes = dict(zip(session.units, session.spikes, strict=True))
    spikes["u3"] = np.repeat(spikes["u3"], 2)
    found = inspect(Session.from_arrays(spikes, session.trials))
    assert any("1 units (u3)" in text for text in found["warnings"])


def test_senseless_settings_are_refused() -> None:
    with pytest.raises(InputError, match="bin_s = -1"):
        inspect_session(make_session(), bin_s=-1)


def test_explained_share_of_a_smooth_and_of_noise() -> None:
    time_s = np.linspace(0, 1000, 200)
    assert explain_by_time(np.sin(time_s / 300), time_s) > 0.99
    assert explain_by_time(3 * time_s + 1, time_s) == pytest.approx(1)
    rng = np.random.default_rng(0)
    assert np.mean([explain_by_time(rng.standard_normal(200), time_s) for _ in range(50)]) < 0.02
    assert explain_by_time(["a"] * 200, time_s) is None
    assert explain_by_time(["a", "b"], time_s[:2]) is None


def test_rank_correlation_agrees_with_scipy() -> None:
    from scipy.stats import spearmanr

    rng = np.random.default_rng(0)
    values, time_s = rng.poisson(3, (40, 5)).astype(float), np.arange(40.0)
    rho, p = rank_correlate(values, time_s)
    for column in range(5):
        expected = spearmanr(values[:, column], time_s)
        assert rho[column] == pytest.approx(expected.statistic)
        assert p[column] == pytest.approx(expected.pvalue)


@pytest.mark.parametrize(("name", "n_drifting"), [("foreperiod-a", 1), ("foreperiod-b", 0)])
def test_recorded_sessions(recordings: Path, name: str, n_drifting: int) -> None:
    found = inspect(read_session(recordings / name), before_set_s=0.3)
    assert found["drift"]["n_units"] == n_drifting
    assert found["trials_left_out"] == found["units_left_out"] == {}
    assert len(found["behaviour"]["conditions"]) == 4
    assert found["confounding"]["context_r2"] is None
    assert len(found["warnings"]) == 1


def test_a_table_from_memory_may_be_a_frame() -> None:
    session = make_session()
    again = Session.from_arrays(
        dict(zip(session.units, session.spikes, strict=True)), pd.DataFrame(session.trials)
    )
    assert inspect(again)["session"]["digest"] == session.digest
