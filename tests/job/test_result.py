import json

import numpy as np
import pandas as pd
import pytest
import xarray as xr

from portfire.errors import InputError, PortfireError
from portfire.job import load_result, write_dataset_atomic, write_json_atomic, write_table_atomic

RAW = {
    "portfire": "0.1.0",
    "accounts": [{"account": "trial=both", "model": "linear", "latent_dim": 3, "loglik_per_trial": -812.1}],
    "contrasts": [
        {
            "source": "context",
            "both": -811.1,
            "sustained_unique": {"nats_per_trial": 1.2, "ci95": [0.9, 1.5], "p": 0.001},
            "verdict": "undetermined",
            "open": ["initial"],
            "words": None,
        }
    ],
    "decode": [
        {
            "cutoff_s": 0.1,
            "features": "initial+sustained",
            "n_trials": 590,
            "r2_within_condition": 0.12,
            "ci95": [0.07, None],
            "p": 0.001,
            "null95": [-0.01, 0.02],
        },
        {"cutoff_s": 0.1, "features": "counts", "n_trials": 590, "r2_within_condition": 0.1, "p": 0.01},
    ],
    "not_run": ["contrast of interval: the session has one sample interval"],
}


@pytest.fixture
def folder(tmp_path):
    write_json_atomic(tmp_path / "result.json", RAW)
    write_table_atomic(
        tmp_path / "scores.parquet", pd.DataFrame({"trial": ["1", "2"], "loglik": [-1.5, np.inf]})
    )
    return tmp_path


def test_tables_are_flat(folder):
    result = load_result(folder)
    assert result.raw == RAW
    assert result.accounts["loglik_per_trial"].tolist() == [-812.1]
    row = result.contrasts.iloc[0]
    assert row["sustained_unique_nats_per_trial"] == 1.2
    assert (row["sustained_unique_ci95_low"], row["sustained_unique_ci95_high"]) == (0.9, 1.5)
    assert row["open"] == ("initial",)
    assert result.decode["null95_high"].tolist()[0] == 0.02
    assert np.isnan(result.decode["ci95_high"].tolist()[0])


def test_numbers_that_are_not_finite_are_null_in_tables(folder):
    scores = load_result(folder).scores
    assert scores["trial"].tolist() == ["1", "2"]
    assert scores["loglik"].isna().tolist() == [False, True]


def test_a_result_reads_as_a_few_lines(folder):
    assert str(load_result(folder)).splitlines() == [
        "context: verdict undetermined",
        "decode at 0.1 s, initial+sustained: R² within condition 0.120 (p = 0.001, 590 trials)",
        "not run: contrast of interval: the session has one sample interval",
    ]


def test_rows_of_several_sessions_say_whose_they_are(tmp_path):
    rows = [{"session": name, "source": "trial", "verdict": "initial"} for name in ("monday", "tuesday")]
    write_json_atomic(tmp_path / "result.json", {"accounts": [], "contrasts": rows, "decode": []})
    assert str(load_result(tmp_path)).splitlines() == [
        "monday, trial: verdict initial",
        "tuesday, trial: verdict initial",
    ]


def test_folders_without_a_finished_run_are_named(tmp_path, folder):
    with pytest.raises(InputError, match="nowhere: does not exist"):
        load_result(tmp_path / "nowhere")
    with pytest.raises(InputError, match=r"result\.json: is a file"):
        load_result(folder / "result.json")
    (tmp_path / "empty").mkdir()
    with pytest.raises(InputError, match=r"empty: holds no result\.json"):
        load_result(tmp_path / "empty")
    (folder / "result.json").write_text('{"accounts": [')
    with pytest.raises(PortfireError, match=r"result\.json: is damaged"):
        load_result(folder)
    (folder / "result.json").write_text('{"accounts": []}')
    with pytest.raises(PortfireError, match=r"result\.json: has no contrasts, decode"):
        load_result(folder)


def test_a_file_that_cannot_be_written_leaves_the_old_one(folder):
    with pytest.raises(TypeError, match="a set has no JSON form"):
        write_json_atomic(folder / "result.json", {"a": {1, 2}})
    assert json.loads((folder / "result.json").read_text()) == RAW
    assert sorted(path.name for path in folder.iterdir()) == ["result.json", "scores.parquet"]


def test_labelled_arrays_are_written_as_netcdf(tmp_path):
    dataset = xr.Dataset({"state": (("trial", "time"), np.array([[0.5, np.nan]]))}, coords={"trial": ["7"]})
    write_dataset_atomic(tmp_path / "latents.nc", dataset)
    with xr.open_dataset(tmp_path / "latents.nc", engine="h5netcdf") as found:
        xr.testing.assert_equal(found.load(), dataset)
