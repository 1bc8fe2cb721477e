"""Every malformed input is refused by one sentence that says where and what would be right."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from portfire.errors import InputError
from portfire.session import read_session

Tables = tuple[pd.DataFrame, pd.DataFrame]


def refusal(path: Path, columns: dict[str, str] | None = None) -> str:
    with pytest.raises(InputError) as caught:
        read_session(path, columns)
    message = str(caught.value)
    assert "\n" not in message
    assert message.endswith(".")
    return message


@pytest.mark.parametrize(
    ("stem", "row", "column", "text", "expected"),
    [
        ("trials", 3, "set_s", "soon", "'soon' is not a number"),
        ("trials", 3, "set_s", "1_0", "'1_0' is not a number"),
        ("trials", 3, "set_s", "10,5", "decimal point"),
        ("trials", 3, "set_s", "", "empty or NaN"),
        ("trials", 3, "set_s", "nan", "'nan' is no number; leave a cell without a value empty"),
        ("trials", 3, "set_s", "inf", "infinite"),
        ("trials", 3, "set_s", "1e12", "1e+12 is too large"),
        ("trials", 3, "response_s", "-inf", "infinite"),
        ("trials", 3, "response_s", "0.001", "the response at 0.001 s is not after the set cue at 10."),
        ("trials", 3, "sample_s", "", "while other trials have one"),
        ("trials", 3, "sample_s", "-0.5", "-0.5 is no interval"),
        ("trials", 3, "sample_s", "inf", "infinite"),
        ("trials", 3, "context", " ", "while other trials have one"),
        ("trials", 3, "trial", "", "label is empty"),
        ("trials", 3, "trial", "t1", "trial 't1' is already in data row 2"),
        ("trials", 3, "include", "2", "'2' is neither 0 nor 1"),
        ("trials", 3, "include", "", "an empty cell is neither 0 nor 1"),
        ("trials", 3, "include", "yes", "'yes' is not a number"),
        ("spikes", 3, "time_s", "soon", "'soon' is not a number"),
        ("spikes", 3, "time_s", "", "empty or NaN"),
        ("spikes", 3, "time_s", "NaN", "'NaN' is no number"),
        ("spikes", 3, "time_s", "inf", "infinite"),
        ("spikes", 3, "time_s", "1e300", "too large"),
        ("spikes", 3, "unit", "  ", "the label of the unit is needed"),
    ],
)
def test_a_wrong_cell_is_named(
    spoil: Callable[..., Path], stem: str, row: int, column: str, text: str, expected: str
) -> None:
    message = refusal(spoil(stem, row, column, text))
    assert f"{stem}.csv, line {row + 2} (data row {row + 1}), column '{column}'" in message
    assert expected in message


def test_end_before_set(folder: Path, tables: Tables) -> None:
    trials = tables[1].assign(end_s=tables[1]["response_s"] + 0.1)
    trials.loc[3, "end_s"] = 2.0
    trials.to_csv(folder / "trials.csv", index=False)
    message = refusal(folder)
    assert "line 5 (data row 4), column 'end_s': observation ends at 2 s, not after the set cue" in message


def test_end_before_response(folder: Path, tables: Tables) -> None:
    tables[1].assign(end_s=tables[1]["response_s"] - 0.1).to_csv(folder / "trials.csv", index=False)
    assert re.search(r"line 2 .*column 'end_s': observation ends at .* before the response", refusal(folder))


def test_overlapping_trials(spoil: Callable[..., Path]) -> None:
    folder = spoil("trials", 4, "response_s", "17")
    message = refusal(folder)
    assert "trials.csv, line 7 (data row 6), column 'set_s'" in message
    assert "falls into the trial of data row 5" in message
    assert "must not overlap" in message


def test_a_trial_within_a_long_one_is_found_past_its_neighbour(folder: Path, tables: Tables) -> None:
    trials = tables[1].iloc[[0, 1, 4]].copy()
    trials.iloc[0, 2] = trials.iloc[2, 1] + 0.1
    trials.iloc[1, 1:3] = [trials.iloc[0, 1] - 2, trials.iloc[0, 1] - 1]
    trials.to_csv(folder / "trials.csv", index=False)
    assert "data row 3), column 'set_s'" in refusal(folder)


def test_a_response_at_the_next_set_cue_is_no_overlap(folder: Path, tables: Tables) -> None:
    trials = tables[1].copy()
    trials.loc[4, "response_s"] = trials.loc[5, "set_s"]
    trials.to_csv(folder / "trials.csv", index=False)
    assert len(read_session(folder).trials) == len(trials)


def test_no_usable_trial(folder: Path, tables: Tables) -> None:
    tables[1].assign(response_s="").to_csv(folder / "trials.csv", index=False)
    assert "no usable trial" in refusal(folder)
    tables[1].assign(include=0).to_csv(folder / "trials.csv", index=False)
    assert "no usable trial" in refusal(folder)


@pytest.mark.parametrize("stem", ["spikes", "trials"])
@pytest.mark.parametrize(
    ("content", "expected"),
    [
        (b"", "the file is empty"),
        (b"\n\n", "the file is empty"),
        (b"PAR1abc", "this is a Parquet file, not text"),
        (b"\xff\xfea\x00b\x00", "UTF-16"),
        (b"unit,time_s,set_s,response_s\n1,2,3\x00,4\n", "line 2: the file is binary"),
        (b"unit,time_s,set_s,response_s\n1,2,3,4\n\xe9,2,3,4\n", "line 3: byte 0xe9 is not UTF-8"),
        (b"unit,time_s,set_s,response_s\n", "below the header"),
        (b"unit,time_s,set_s,response_s\n1,2,3,4,5\n", "line 2 (data row 1): 5 cells where the header has 4"),
        (b"unit;time_s;set_s;response_s\n1;2;3;4\n", "not parted by commas"),
        (b'unit,time_s,set_s,response_s\n"1,2,3,4\n', "not valid CSV"),
        (b"unit,time_s,set_s,response_s,unit,set_s\n1,2,3,4,5,6\n", "is there more than once"),
    ],
)
def test_a_file_that_is_no_table(folder: Path, stem: str, content: bytes, expected: str) -> None:
    (folder / f"{stem}.csv").write_bytes(content)
    message = refusal(folder)
    assert f"{stem}.csv" in message
    assert expected in message


@pytest.mark.parametrize(
    ("stem", "column", "renamed"),
    [
        ("spikes", "unit", "units"),
        ("spikes", "time_s", "times"),
        ("trials", "set_s", "Set_S"),
        ("trials", "response_s", "resp_s"),
    ],
)
def test_a_missing_column_names_the_nearest(
    folder: Path, tables: Tables, stem: str, column: str, renamed: str
) -> None:
    table = tables[0] if stem == "spikes" else tables[1]
    table.rename(columns={column: renamed}).to_csv(folder / f"{stem}.csv", index=False)
    message = refusal(folder)
    assert f"{stem}.csv, line 1: no column {column!r}" in message
    assert f"the nearest is {renamed!r}" in message


def test_a_missing_table_names_the_nearest(folder: Path) -> None:
    (folder / "spikes.csv").rename(folder / "spike.csv")
    assert "no spikes.csv or spikes.parquet in the folder; the nearest file is spike.csv" in refusal(folder)


def test_two_tables_of_one_kind(folder: Path, tables: Tables) -> None:
    tables[0].to_parquet(folder / "spikes.parquet")
    assert "both spikes.csv and spikes.parquet" in refusal(folder)


def test_a_path_that_is_no_session(tmp_path: Path) -> None:
    assert "no such folder or file" in refusal(tmp_path / "nowhere")
    (tmp_path / "notes.txt").write_text("x")
    assert "this is no session" in refusal(tmp_path / "notes.txt")
    (tmp_path / "empty").mkdir()
    assert "no spikes.csv or spikes.parquet" in refusal(tmp_path / "empty")


@pytest.mark.parametrize("stem", ["spikes", "trials"])
def test_a_broken_parquet_file(folder: Path, stem: str) -> None:
    (folder / f"{stem}.csv").rename(folder / f"{stem}.parquet")
    assert f"{stem}.parquet: this is not a readable Parquet file" in refusal(folder)


@pytest.mark.parametrize(
    ("column", "values", "expected"),
    [
        ("set_s", "text", "row 1, column 'set_s': 'text' is not a number"),
        ("set_s", [1.0, 2.0], "row 1, column 'set_s'"),
        ("set_s", pd.Timestamp("2020-01-01"), "row 1, column 'set_s'"),
        ("set_s", np.inf, "row 1, column 'set_s': the value is infinite"),
        ("set_s", np.nan, "row 1, column 'set_s': the cell is empty or NaN"),
        ("include", 2, "row 1, column 'include': 2 is neither 0 nor 1"),
    ],
)
def test_a_wrong_cell_of_a_parquet_table(
    folder: Path, tables: Tables, column: str, values: object, expected: str
) -> None:
    (folder / "trials.csv").unlink()
    tables[1].assign(**{column: [values] * len(tables[1])}).to_parquet(folder / "trials.parquet")
    message = refusal(folder)
    assert "trials.parquet" in message
    assert expected in message


def test_nan_and_null_of_parquet_mean_no_response(folder: Path, tables: Tables) -> None:
    (folder / "trials.csv").unlink()
    trials = tables[1].assign(include=True)
    trials.loc[2, "response_s"] = np.nan
    trials.to_parquet(folder / "trials.parquet")
    assert read_session(folder).bin().trials_left_out == {"t2": "no response and no end_s"}


def test_trials_in_milliseconds(folder: Path, tables: Tables) -> None:
    trials = tables[1].copy()
    trials[["set_s", "response_s"]] *= 1000
    trials.to_csv(folder / "trials.csv", index=False)
    message = refusal(folder)
    assert re.search(r"hardly overlap; .*trials\.csv looks like milliseconds", message)


def test_spikes_in_milliseconds(folder: Path, tables: Tables) -> None:
    tables[0].assign(time_s=tables[0]["time_s"] * 1000).to_csv(folder / "spikes.csv", index=False)
    assert re.search(r"hardly overlap; .*spikes\.csv looks like milliseconds", refusal(folder))


def test_both_in_milliseconds(folder: Path, tables: Tables) -> None:
    tables[0].assign(time_s=tables[0]["time_s"] * 1000).to_csv(folder / "spikes.csv", index=False)
    trials = tables[1].copy()
    trials[["set_s", "response_s"]] *= 1000
    trials.to_csv(folder / "trials.csv", index=False)
    assert "the clock looks like milliseconds" in refusal(folder)


def test_spikes_of_another_recording(folder: Path, tables: Tables) -> None:
    tables[0].assign(time_s=tables[0]["time_s"] + 5000).to_csv(folder / "spikes.csv", index=False)
    message = refusal(folder)
    assert "hardly overlap; both must be in seconds on one clock" in message


def test_a_long_rest_before_the_task_is_allowed(folder: Path, tables: Tables) -> None:
    rest = pd.DataFrame({"unit": "n1", "time_s": np.arange(-2000, 0, 0.2)})
    pd.concat([rest, tables[0]]).to_csv(folder / "spikes.csv", index=False)
    assert len(read_session(folder).spikes[0]) > 10_000


@pytest.mark.parametrize(
    ("columns", "expected"),
    [
        ({"set": "cue"}, "'set' is no column of a session; the nearest is 'set_s'"),
        ({"set_s": "contxt"}, "no column 'contxt' to stand for 'set_s'; the nearest is 'context'"),
        ({"set_s": ""}, "mapped to ''"),
        ({"set_s": 3}, "mapped to 3"),
    ],
)
def test_a_wrong_map_of_columns(folder: Path, columns: dict, expected: str) -> None:
    assert expected in refusal(folder, columns)
