"""NWB files, written with pynwb itself."""

from __future__ import annotations

import sys
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from portfire.errors import InputError
from portfire.session import Session, read_session

pynwb = pytest.importorskip("pynwb", reason="the extra `nwb` is not installed")

Tables = tuple[pd.DataFrame, pd.DataFrame]


def write_nwb(
    path: Path,
    spikes: dict[str, np.ndarray] | None,
    trials: pd.DataFrame | None,
    unit_column: str | None = "unit",
    labels: list[str] | None = None,
) -> Path:
    content = pynwb.NWBFile("timed acts", "one", datetime(2024, 1, 1, tzinfo=UTC))
    if spikes is not None:
        if unit_column is not None:
            content.add_unit_column(unit_column, "label")
        for place, (label, times) in enumerate(zip(labels or spikes, spikes.values(), strict=True)):
            extra = {} if unit_column is None else {unit_column: label}
            content.add_unit(spike_times=times, id=place, **extra)
    if trials is not None:
        for column in trials.columns:
            if column not in ("start_time", "stop_time"):
                content.add_trial_column(column, "a column")
        for row in trials.to_dict("records"):
            content.add_trial(**row)
    with pynwb.NWBHDF5IO(str(path), "w") as io:
        io.write(content)
    return path


@pytest.fixture
def spikes(tables: Tables) -> dict[str, np.ndarray]:
    return {str(unit): rows["time_s"].to_numpy() for unit, rows in tables[0].groupby("unit")}


@pytest.fixture
def trials(tables: Tables) -> pd.DataFrame:
    trials = tables[1]
    return trials.assign(
        start_time=trials["set_s"] - trials["sample_s"], stop_time=trials["response_s"] + 0.2
    )


def test_the_same_session_as_from_memory(tmp_path: Path, spikes: dict, trials: pd.DataFrame) -> None:
    session = read_session(write_nwb(tmp_path / "one.nwb", spikes, trials))
    memory = Session.from_arrays(spikes, trials.assign(end_s=trials["stop_time"]))
    assert session.digest == memory.digest
    pd.testing.assert_frame_equal(
        session.trials[["trial", "set_s", "response_s", "end_s", "sample_s", "context"]],
        memory.trials[["trial", "set_s", "response_s", "end_s", "sample_s", "context"]],
    )


def test_mapped_columns_and_labels_from_ids(tmp_path: Path, spikes: dict, trials: pd.DataFrame) -> None:
    renamed = trials.drop(columns="trial").rename(columns={"set_s": "cue2_time"})
    path = write_nwb(tmp_path / "one.nwb", spikes, renamed, unit_column=None)
    session = read_session(path, columns={"set_s": "cue2_time"})
    assert session.units == ("0", "1", "2")
    assert list(session.trials["trial"][:3]) == ["0", "1", "2"]
    np.testing.assert_array_equal(session.trials["set_s"], trials["set_s"])
    named = write_nwb(tmp_path / "two.nwb", spikes, renamed, unit_column="unit_name")
    assert read_session(named, columns={"set_s": "cue2_time", "unit": "unit_name"}).units == (
        "n1",
        "n2",
        "n10",
    )


def test_stop_time_stands_in_for_the_end(tmp_path: Path, spikes: dict, trials: pd.DataFrame) -> None:
    trials.loc[2, "response_s"] = np.nan
    trials.loc[2, "stop_time"] = trials.loc[2, "set_s"] + 0.4
    batch = read_session(write_nwb(tmp_path / "one.nwb", spikes, trials)).bin()
    assert batch.n_bins[2] == 20
    assert not batch.responded[2]
    own = trials.assign(end_s=trials["response_s"].fillna(trials["set_s"] + 0.3))
    assert read_session(write_nwb(tmp_path / "two.nwb", spikes, own)).bin().n_bins[2] == 15


def test_errors_name_the_table_the_row_and_the_column_of_the_file(
    tmp_path: Path, spikes: dict, trials: pd.DataFrame
) -> None:
    trials.loc[4, "set_s"] = np.nan
    path = write_nwb(tmp_path / "one.nwb", spikes, trials.rename(columns={"set_s": "cue2_time"}))
    with pytest.raises(
        InputError, match=r"one\.nwb, trials table, row 5, column 'cue2_time': the cell is empty"
    ):
        read_session(path, columns={"set_s": "cue2_time"})
    with pytest.raises(InputError, match=r"trials table: no column 'set_s'"):
        read_session(path)
    with pytest.raises(
        InputError, match="no column 'cue_time' to stand for 'set_s'; the nearest is 'cue2_time'"
    ):
        read_session(path, columns={"set_s": "cue_time"})
    with pytest.raises(InputError, match="units table: no column 'nme' to stand for 'unit'"):
        read_session(path, columns={"set_s": "cue2_time", "unit": "nme"})
    with pytest.raises(InputError, match=r"units table: no column 'spiketimes'.*nearest is 'spike_times'"):
        read_session(path, columns={"set_s": "cue2_time", "time_s": "spiketimes"})


def test_missing_tables(tmp_path: Path, spikes: dict, trials: pd.DataFrame) -> None:
    with pytest.raises(InputError, match=r"a\.nwb: no units table"):
        read_session(write_nwb(tmp_path / "a.nwb", None, trials))
    with pytest.raises(InputError, match=r"b\.nwb: no trials table"):
        read_session(write_nwb(tmp_path / "b.nwb", spikes, None))


@pytest.mark.parametrize(
    ("second", "problem"), [("n1", "unit 'n1' is there twice"), ("", "the label is empty")]
)
def test_unit_labels_must_tell_units_apart(
    tmp_path: Path, spikes: dict, trials: pd.DataFrame, second: str, problem: str
) -> None:
    path = write_nwb(tmp_path / "one.nwb", spikes, trials, labels=["n1", second, "n3"])
    with pytest.raises(InputError, match=rf"units table, row 2, column 'unit': {problem}"):
        read_session(path)


def test_spike_times_must_be_a_list_a_unit(tmp_path: Path, spikes: dict, trials: pd.DataFrame) -> None:
    path = write_nwb(tmp_path / "one.nwb", spikes, trials)
    with pytest.raises(InputError, match="one value stands for each unit"):
        read_session(path, columns={"time_s": "unit"})


@pytest.mark.parametrize("time_s", [np.nan, np.inf, 1e15])
def test_a_wrong_spike_is_named(tmp_path: Path, spikes: dict, trials: pd.DataFrame, time_s: float) -> None:
    spikes["n2"] = np.concatenate([spikes["n2"][:4], [time_s], spikes["n2"][4:]])
    path = write_nwb(tmp_path / "one.nwb", spikes, trials)
    with pytest.raises(InputError, match="units table, column 'spike_times', unit 'n2', spike 5: "):
        read_session(path)


def test_a_unit_without_spikes_is_named(tmp_path: Path, spikes: dict, trials: pd.DataFrame) -> None:
    path = write_nwb(tmp_path / "one.nwb", {**spikes, "n3": np.empty(0)}, trials)
    session = read_session(path)
    assert session.units == ("n1", "n2", "n3", "n10")
    assert session.bin().units_left_out == {"n3": "no spike in the scored windows"}


def test_a_file_that_is_no_nwb(tmp_path: Path) -> None:
    path = tmp_path / "one.nwb"
    path.write_bytes(b"not hdf5 at all")
    with pytest.raises(InputError, match=r"one\.nwb: this is not a readable NWB 2\.x file"):
        read_session(path)


def test_without_pynwb_the_extra_is_named(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "one.nwb"
    path.write_bytes(b"")
    monkeypatch.setitem(sys.modules, "pynwb", None)
    with pytest.raises(InputError, match=r"pip install 'portfire\[nwb\]'"):
        read_session(path)
