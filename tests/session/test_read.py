"""What a well-formed folder is read as, whatever its format."""

from __future__ import annotations

from dataclasses import FrozenInstanceError
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from portfire.errors import InputError, nearest
from portfire.session import Session, read_session

Tables = tuple[pd.DataFrame, pd.DataFrame]


def test_csv_gives_what_was_written(folder: Path, tables: Tables) -> None:
    spikes, trials = tables
    session = read_session(folder)
    assert session.units == ("n1", "n2", "n10")
    for unit, train in zip(session.units, session.spikes, strict=True):
        np.testing.assert_array_equal(train, np.sort(spikes["time_s"][spikes["unit"] == unit]))
    for column in ("set_s", "response_s", "sample_s"):
        np.testing.assert_array_equal(session.trials[column], trials[column])
    assert list(session.trials["trial"]) == list(trials["trial"])
    assert session.source == str(folder)


def test_every_way_in_gives_the_same_digest(folder: Path, tmp_path: Path, tables: Tables) -> None:
    spikes, trials = tables
    other = tmp_path / "parquet"
    other.mkdir()
    spikes.sample(frac=1, random_state=0).to_parquet(other / "spikes.parquet")
    trials.sample(frac=1, random_state=0).to_parquet(other / "trials.parquet")
    memory = Session.from_arrays({u: g["time_s"].to_numpy() for u, g in spikes.groupby("unit")}, trials)
    assert read_session(folder).digest == read_session(other).digest == memory.digest
    changed = trials.assign(response_s=trials["response_s"] + 0.001)
    assert (
        Session.from_arrays(dict(zip(memory.units, memory.spikes, strict=True)), changed).digest
        != memory.digest
    )


def test_labels_written_as_numbers_are_text(folder: Path) -> None:
    spikes = pd.read_csv(folder / "spikes.csv")
    spikes["unit"] = spikes["unit"].map({"n1": 1, "n2": 2, "n10": 10})
    spikes.to_csv(folder / "spikes.csv", index=False)
    from_csv = read_session(folder)
    (folder / "spikes.csv").unlink()
    spikes.astype({"unit": float}).to_parquet(folder / "spikes.parquet")
    assert from_csv.units == read_session(folder).units == ("1", "2", "10")


def test_a_byte_order_mark_blank_lines_and_crlf_do_no_harm(folder: Path) -> None:
    expected = read_session(folder).digest
    for name in ("spikes.csv", "trials.csv"):
        text = (folder / name).read_text()
        (folder / name).write_bytes(b"\xef\xbb\xbf" + text.replace("\n", "\r\n").encode() + b"\r\n\r\n")
    assert read_session(folder).digest == expected


def test_trials_come_in_the_order_of_their_set_cues(folder: Path, tables: Tables) -> None:
    tables[1][::-1].to_csv(folder / "trials.csv", index=False)
    session = read_session(folder)
    assert np.all(np.diff(session.trials["set_s"]) > 0)
    assert list(session.trials["trial"]) == list(tables[1]["trial"])


def test_trials_without_labels_are_numbered_by_row(folder: Path, tables: Tables) -> None:
    tables[1].drop(columns="trial").to_csv(folder / "trials.csv", index=False)
    assert list(read_session(folder).trials["trial"][:3]) == ["1", "2", "3"]


def test_extra_columns_are_kept_and_do_not_count(folder: Path, tables: Tables) -> None:
    expected = read_session(folder).digest
    tables[1].assign(reward=1.5, note="fine").to_csv(folder / "trials.csv", index=False)
    session = read_session(folder)
    assert session.trials["reward"].tolist() == [1.5] * len(session.trials)
    assert session.trials["note"].tolist() == ["fine"] * len(session.trials)
    assert session.digest == expected


def test_columns_under_other_names(folder: Path, tables: Tables) -> None:
    expected = read_session(folder).digest
    tables[0].rename(columns={"time_s": "t"}).to_csv(folder / "spikes.csv", index=False)
    tables[1].rename(columns={"set_s": "cue2_time"}).assign(set_s="x").to_csv(
        folder / "trials.csv", index=False
    )
    assert read_session(folder, columns={"set_s": "cue2_time", "time_s": "t"}).digest == expected


def test_optional_columns_that_are_blank_are_absent(folder: Path, tables: Tables) -> None:
    tables[1].assign(context="", sample_s=np.nan, end_s="").to_csv(folder / "trials.csv", index=False)
    columns = set(read_session(folder).trials.columns)
    assert columns == {"trial", "set_s", "response_s", "include"}


def test_excluded_trials_may_be_incomplete(folder: Path, tables: Tables) -> None:
    trials = tables[1].assign(include=1)
    trials.loc[[0, 5], "include"] = 0
    trials.loc[5, ["set_s", "sample_s", "context"]] = [np.nan, np.nan, None]
    trials.loc[0, "response_s"] = trials.loc[0, "set_s"] - 1
    trials.to_csv(folder / "trials.csv", index=False)
    batch = read_session(folder).bin()
    assert batch.trials_left_out == {"t0": "include is 0", "t5": "include is 0"}


def test_a_session_cannot_be_changed(folder: Path) -> None:
    session = read_session(folder)
    with pytest.raises(FrozenInstanceError):
        session.source = "elsewhere"  # type: ignore[misc]
    with pytest.raises(ValueError, match="read-only"):
        session.spikes[0][0] = 0.0


def test_from_arrays_leaves_its_input_alone(tables: Tables) -> None:
    spikes, trials = tables
    given = {unit: group["time_s"].to_numpy()[::-1].copy() for unit, group in spikes.groupby("unit")}
    before = {unit: times.copy() for unit, times in given.items()}
    session = Session.from_arrays({**given, "silent": []}, trials.to_dict("list"))
    for unit, times in given.items():
        np.testing.assert_array_equal(times, before[unit])
        times[0] = 0.0
    assert session.units == ("n1", "n2", "n10", "silent")
    assert session.bin().units_left_out == {"silent": "no spike in the scored windows"}


@pytest.mark.parametrize(
    ("spikes", "trials", "expected"),
    [
        ({}, {}, "spike_times: a mapping"),
        ({"a": ["x"]}, {}, "unit 'a': the times are not all numbers"),
        ({"a": [[1.0]]}, {}, "2-d array"),
        ({"a": [1.0, np.nan]}, {}, "unit 'a', row 2: nan"),
        ({"a": [1.0]}, {"set_s": [1.0, 2.0], "response_s": [1.5]}, "trials: the columns are no table"),
        ({"a": [1.0]}, {"set": [1.0], "response_s": [1.5]}, "trials: no column 'set_s'"),
        ({"a": [1.0]}, {"set_s": [1.0], "response_s": [0.5]}, "trials, row 1, column 'response_s'"),
        ({"a": []}, {"set_s": [1.0], "response_s": [1.5]}, "there is no spike"),
    ],
)
def test_from_arrays_refuses(spikes: dict, trials: dict, expected: str) -> None:
    with pytest.raises(InputError, match=expected):
        Session.from_arrays(spikes, trials)


@pytest.mark.parametrize("name", ["foreperiod-a", "foreperiod-b"])
def test_recorded_sessions(recordings: Path, name: str) -> None:
    batch = read_session(recordings / name).bin(before_set_s=0.3)
    assert len(batch) == 128
    assert len(batch.unit) == {"foreperiod-a": 2, "foreperiod-b": 3}[name]
    assert batch.conditions == ((None, 0.6), (None, 0.9), (None, 1.2), (None, 1.5))
    assert batch.n_before == 15


def test_nearest_word() -> None:
    assert nearest("Set_S", ["set_s", "end_s"]) == "set_s"
    assert nearest("contxt", ["set_s", "context"]) == "context"
    assert nearest("zzz", ["set_s", "context"]) is None
