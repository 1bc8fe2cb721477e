"""Bins, masks and who is left out."""

from __future__ import annotations

import time
from fractions import Fraction

import numpy as np
import pandas as pd
import pytest

from portfire.errors import InputError
from portfire.session import Session


def make_session(spikes: dict[str, list[float]], **trials: object) -> Session:
    return Session.from_arrays(spikes, pd.DataFrame(trials))


def test_counts_of_a_trial_by_hand() -> None:
    session = make_session(
        {"a": [0.95, 1.0, 1.05, 1.1, 1.19, 1.2, 1.34, 1.41], "b": [1.25]}, set_s=[1.0], response_s=[1.35]
    )
    batch = session.bin(bin_s=0.1, before_set_s=0.1)
    assert batch.n_before == 1
    np.testing.assert_array_equal(batch.counts[0, :, 0], [1, 2, 2, 1])
    np.testing.assert_array_equal(batch.counts[0, :, 1], [0, 0, 0, 1])
    assert batch.counts.dtype == np.uint16
    assert batch.mask.tolist() == [[True] * 4]
    assert batch.n_bins.tolist() == [3]
    np.testing.assert_allclose(batch.time_s, [-0.1, 0.0, 0.1, 0.2])


@pytest.mark.parametrize("offset", [0.0, 0.1, 0.7, 3.3, 1234.1, 98765.4, 1.7e9])
@pytest.mark.parametrize("bin_s", [0.01, 0.02, 0.025, 0.1, 0.3])
def test_a_spike_on_an_edge_belongs_to_the_later_bin(offset: float, bin_s: float) -> None:
    # Sums in floating point fall to either side of the edge that they stand for.
    edges = np.array([offset + k * bin_s for k in range(20)])
    summed = np.array([float(Fraction(str(offset)) + k * Fraction(str(bin_s))) for k in range(20)])
    spikes = {"summed": edges, "exact": summed}
    session = Session.from_arrays(spikes, {"set_s": [offset], "response_s": [offset + 20 * bin_s]})
    batch = session.bin(bin_s=bin_s)
    np.testing.assert_array_equal(batch.counts, np.ones((1, 20, 2)))


def test_tenths_that_do_not_add_up() -> None:
    assert 0.1 + 0.2 > 0.3
    session = make_session({"a": [0.3]}, set_s=[0.1], response_s=[0.1 + 0.2 + 0.1])
    assert session.bin(bin_s=0.1).counts[0, :, 0].tolist() == [0, 0, 1]
    session = make_session({"a": [0.1 + 0.2]}, set_s=[0.1], response_s=[0.4])
    assert session.bin(bin_s=0.1).counts[0, :, 0].tolist() == [0, 0, 1]


def test_a_spike_clearly_before_an_edge_stays_in_the_earlier_bin() -> None:
    session = make_session({"a": [1.1 - 1e-6, 1.1 + 1e-6]}, set_s=[1.0], response_s=[1.2])
    assert session.bin(bin_s=0.1).counts[0, :, 0].tolist() == [1, 1]


def test_the_last_bin_is_the_last_whole_one() -> None:
    session = make_session({"a": [1.01, 3.01, 5.01]}, set_s=[1, 3, 5], response_s=[1.3, 3.2999, 5.3001])
    batch = session.bin(bin_s=0.1)
    assert batch.n_bins.tolist() == [3, 2, 3]
    assert batch.mask.tolist() == [[True] * 3, [True, True, False], [True] * 3]


def test_nothing_is_counted_outside_the_mask() -> None:
    rng = np.random.default_rng(1)
    start = np.arange(50) * 2.0
    session = Session.from_arrays(
        {"a": rng.uniform(0, 100, 5000)}, {"set_s": start, "response_s": start + rng.uniform(0.3, 0.8, 50)}
    )
    batch = session.bin(bin_s=0.05, before_set_s=0.2)
    assert batch.counts[~batch.mask].sum() == 0
    assert np.all(batch.mask[:, :4])


def test_counts_agree_with_a_histogram() -> None:
    rng = np.random.default_rng(2)
    start = np.cumsum(rng.uniform(1.5, 2.5, 40))
    stop = start + rng.uniform(0.4, 1.2, 40)
    spikes = {f"u{unit}": rng.uniform(0, 100, 3000) for unit in range(3)}
    batch = Session.from_arrays(spikes, {"set_s": start, "response_s": stop}).bin(
        bin_s=0.03, before_set_s=0.09
    )
    for row in range(40):
        edges = start[row] + 0.03 * np.arange(-3, batch.n_bins[row] + 1)
        assert edges[-1] <= stop[row] < edges[-1] + 0.03
        for unit in range(3):
            expected, _ = np.histogram(spikes[f"u{unit}"], edges)
            np.testing.assert_array_equal(batch.counts[row, : len(expected), unit], expected)


def test_a_run_up_may_reach_into_the_trial_before() -> None:
    session = make_session({"a": [1.15]}, set_s=[1.0, 1.25], response_s=[1.2, 1.45])
    batch = session.bin(bin_s=0.1, before_set_s=0.2, min_rate_hz=0)
    assert batch.counts[:, :, 0].tolist() == [[0, 0, 0, 1], [0, 1, 0, 0]]


def test_observation_ends_stand_in_for_responses() -> None:
    session = make_session(
        {"a": [1.05, 3.05, 5.05]}, set_s=[1, 3, 5], response_s=[1.4, np.nan, np.nan], end_s=[2.0, 3.3, np.nan]
    )
    batch = session.bin(bin_s=0.1)
    assert batch.trial == ("1", "2")
    assert batch.n_bins.tolist() == [4, 3]
    np.testing.assert_array_equal(batch.responded, [True, False])
    np.testing.assert_allclose(batch.produced_s, [0.4, np.nan])
    assert batch.trials_left_out == {"3": "no response and no end_s"}


def test_lapses_are_left_out_by_condition() -> None:
    set_s = 4.0 * np.arange(12)
    produced = np.where(np.arange(12) % 2, 0.9, 0.3)
    produced[2] = 0.91  # above three times 0.3
    produced[3] = 2.69  # below three times 0.9
    session = make_session(
        {"a": list(set_s + 0.01)},
        set_s=set_s,
        response_s=set_s + produced,
        sample_s=np.where(np.arange(12) % 2, 1, 0.5),
    )
    batch = session.bin()
    assert list(batch.trials_left_out) == ["3"]
    assert (
        batch.trials_left_out["3"] == "lapse: 0.91 s, more than three times its condition's median of 0.3 s"
    )


def test_a_long_wait_without_response_is_a_lapse() -> None:
    set_s = 4.0 * np.arange(5)
    response = set_s + 0.5
    response[4] = np.nan
    session = make_session({"a": list(set_s + 0.01)}, set_s=set_s, response_s=response, end_s=set_s + 2)
    assert session.bin().trials_left_out["5"].startswith("lapse: 2 s")


def test_a_trial_shorter_than_a_bin_is_left_out() -> None:
    session = make_session({"a": [1.05, 3.0]}, set_s=[1, 3], response_s=[1.2, 3.09])
    assert session.bin(bin_s=0.1).trials_left_out == {"2": "0.09 s, shorter than one bin of 0.1 s"}


def test_slow_units_are_left_out_by_their_rate_in_the_scored_windows() -> None:
    # Two scored seconds; the run-up and the time between trials do not count.
    spikes = {"quick": [1.1, 3.1], "slow": [1.1, 2.95, 3.5, 4.5], "silent": [2.5]}
    session = make_session(spikes, set_s=[1, 3], response_s=[2.05, 4.05])
    batch = session.bin(bin_s=0.1, before_set_s=0.1, min_rate_hz=1.0)
    assert batch.unit == ("quick", "slow")
    assert batch.units_left_out == {"silent": "no spike in the scored windows"}
    batch = make_session({**spikes, "slow": [1.1, 2.95, 4.5]}, set_s=[1, 3], response_s=[2.05, 4.05]).bin(
        bin_s=0.1, before_set_s=0.1, min_rate_hz=1.0
    )
    assert batch.unit == ("quick",)
    assert batch.units_left_out["slow"] == "0.5 spikes/s, below 1"


def test_the_session_is_described_over_its_used_trials() -> None:
    session = make_session(
        {"a": list(np.arange(0, 12, 0.1))},
        set_s=[1, 3, 5, 7],
        response_s=[1.5, 3.5, 5.5, 7.5],
        sample_s=[0.5, 0.7, 0.9, 5.0],
        context=["b", "a", "b", "c"],
        target_s=[0.5, np.nan, 0.6, 0.7],
        include=[1, 1, 1, 0],
    )
    batch = session.bin()
    assert batch.contexts == ("a", "b")
    assert batch.conditions == (("a", 0.7), ("b", 0.5), ("b", 0.9))
    assert batch.condition.tolist() == [1, 0, 2]
    assert batch.sample_center == pytest.approx(0.7)
    assert batch.sample_scale == pytest.approx(np.std([0.5, 0.7, 0.9]))
    assert batch.session_span == (1.0, 5.0)
    assert batch.n_session == 3
    assert batch.index.tolist() == [0, 1, 2]
    assert batch.digest == session.digest
    np.testing.assert_array_equal(batch.target_s, [0.5, np.nan, 0.6])


def test_a_session_without_covariates() -> None:
    batch = make_session({"a": [1.1, 3.1]}, set_s=[1, 3], response_s=[1.5, 3.5]).bin()
    assert batch.sample_s is batch.context is batch.target_s is None
    assert batch.contexts == ()
    assert batch.conditions == ((None, None),)
    assert (batch.sample_center, batch.sample_scale) == (0.0, 1.0)


def test_one_sample_interval_has_scale_one() -> None:
    batch = make_session(
        {"a": [1.1]}, set_s=[1, 3, 5], response_s=[1.5, 3.5, 5.5], sample_s=[0.1, 0.1, 0.1]
    ).bin()
    assert batch.sample_scale == 1.0
    assert batch.conditions == ((None, 0.1),)


def test_intervals_that_differ_by_rounding_are_one_condition() -> None:
    batch = make_session({"a": [1.1]}, set_s=[1, 3], response_s=[1.5, 3.5], sample_s=[0.3, 0.1 + 0.2]).bin()
    assert batch.conditions == ((None, 0.3),)


@pytest.mark.parametrize(
    ("settings", "expected"),
    [
        ({"bin_s": 0}, "bin_s = 0 is no width"),
        ({"bin_s": -0.02}, "bin_s = -0.02 is no width"),
        ({"bin_s": 1e-9}, "bin_s = 1e-09 is no width"),
        ({"bin_s": np.nan}, "bin_s = nan is no finite number"),
        ({"bin_s": np.inf}, "bin_s = inf is no finite number"),
        ({"bin_s": "20ms"}, "bin_s = '20ms' is no finite number"),
        ({"bin_s": True}, "bin_s = True is no finite number"),
        ({"bin_s": 20}, "no usable trial with bins of 20 s: 2 × shorter than one bin of 20 s"),
        ({"before_set_s": -0.1}, "before_set_s = -0.1 is no run-up"),
        ({"before_set_s": 300}, "before_set_s = 300 is no run-up"),
        ({"before_set_s": 0.005}, "before_set_s = 0.005 is below half a bin"),
        ({"min_rate_hz": -1}, "min_rate_hz = -1 is no rate"),
        ({"min_rate_hz": 100}, "no usable unit: none of 1 fires 100 spikes/s"),
    ],
)
def test_senseless_settings_are_refused(settings: dict, expected: str) -> None:
    session = make_session({"a": [1.1, 3.1]}, set_s=[1, 3], response_s=[1.5, 3.5])
    with pytest.raises(InputError, match=expected.replace("(", r"\(")):
        session.bin(**settings)


def test_more_cells_than_memory_holds_are_refused() -> None:
    set_s = 30.0 * np.arange(400)
    spikes = {f"u{unit}": np.repeat(set_s, 20) + 0.5 for unit in range(40)}
    session = Session.from_arrays(spikes, {"set_s": set_s, "response_s": set_s + 20})
    with pytest.raises(InputError, match=r"bin_s = 0.0001 gives 400 trials × 200000 bins × 40 units"):
        session.bin(bin_s=0.0001)


def test_more_spikes_than_a_count_holds_are_refused() -> None:
    session = make_session({"a": [1.1] * 70_000}, set_s=[1], response_s=[1.5])
    with pytest.raises(InputError, match="unit 'a': 70000 spikes in one bin"):
        session.bin()


def test_binning_is_quick() -> None:
    rng = np.random.default_rng(0)
    set_s = 3.0 * np.arange(600) + 1
    spikes = {f"u{unit}": rng.uniform(0, 1800, 18_000) for unit in range(80)}
    session = Session.from_arrays(spikes, {"set_s": set_s, "response_s": set_s + rng.uniform(0.5, 1.5, 600)})
    best = np.inf
    for _ in range(3):
        started = time.perf_counter()
        session.bin()
        best = min(best, time.perf_counter() - started)
    assert best < 0.5
