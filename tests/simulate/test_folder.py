"""Sessions on disk: the same again, refusals, and what the truth says."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest

from portfire.dynamics import model_from_dict
from portfire.errors import InputError
from portfire.session import read_session
from portfire.simulate import demo_scenario, draw_session, simulate_session, write_demo_session

SMALL = {"n_trials": 30, "n_units": 6}


@pytest.fixture(scope="module")
def demo_folder(tmp_path_factory):
    return write_demo_session(tmp_path_factory.mktemp("demo") / "session", seed=0)


def times_of(folder):
    return {path.name: path.stat().st_mtime_ns for path in folder.iterdir()}


def test_the_folder_reads_back_as_it_was_drawn(demo_folder):
    session, _ = draw_session(demo_scenario(), seed=0)
    assert read_session(demo_folder).digest == session.digest


def test_a_folder_with_the_same_session_is_left_alone(demo_folder):
    before = times_of(demo_folder)
    assert sorted(before) == ["README.txt", "spikes.csv", "trials.csv", "truth.json"]
    write_demo_session(demo_folder, seed=0)
    assert times_of(demo_folder) == before


def test_the_readme_and_the_truth_say_that_it_is_invented(demo_folder):
    truth = json.loads((demo_folder / "truth.json").read_text(encoding="utf-8"))
    for words in (truth["words"], (demo_folder / "README.txt").read_text(encoding="utf-8")):
        assert "invented" in words
    assert truth["account"] == "interval=sustained,context=initial,trial=initial"
    assert [c["persistence_s"] for c in truth["model"]["columns"]] == [0.0] * 3 + [None] * 3


def test_the_truth_holds_paths_that_reach_the_threshold(demo_folder):
    truth = json.loads((demo_folder / "truth.json").read_text(encoding="utf-8"))
    trials = pd.read_csv(demo_folder / "trials.csv")
    threshold = truth["response"]["threshold"]
    normal = [row for row, entry in enumerate(truth["trials"]) if entry["kind"] == "normal"]
    assert len(normal) > 0.9 * len(trials)
    for row in normal:
        entry, produced = truth["trials"][row], trials["response_s"][row] - trials["set_s"][row]
        assert entry["trial"] == str(trials["trial"][row])
        assert len(entry["timer"]) == int(np.floor(produced / 0.02 + 1e-6))
        assert 0.0 < produced - entry["crossing_s"] < 0.07
        assert max(entry["timer"][: int(entry["crossing_s"] / 0.02 - 0.5)], default=0.0) < threshold + 1e-3
    means = {(c["context"], c["sample_s"]): c["mean_s"] for c in truth["conditions"]}
    assert means["low hum", 0.5] < means["high hum", 0.5]


def test_a_session_is_the_same_for_a_seed_and_another_for_another(tmp_path):
    for name, seed in (("a", 1), ("b", 1), ("c", 2)):
        simulate_session("linear", tmp_path / name, **SMALL, seed=seed)
    spikes = [(tmp_path / name / "spikes.csv").read_bytes() for name in "abc"]
    assert spikes[0] == spikes[1] != spikes[2]
    trials = read_session(tmp_path / "a").bin()
    assert len(trials.unit) == 6
    assert len(trials) + len(trials.trials_left_out) == 30


def test_a_drawn_session_is_replaced(tmp_path):
    simulate_session("linear", tmp_path, **SMALL, seed=1)
    simulate_session("linear", tmp_path, **SMALL, seed=2)
    assert json.loads((tmp_path / "truth.json").read_text(encoding="utf-8"))["seed"] == 2


def test_a_half_written_session_is_completed(tmp_path):
    simulate_session("linear", tmp_path, **SMALL, seed=1)
    whole = {path.name: path.read_bytes() for path in tmp_path.iterdir()}
    (tmp_path / "spikes.csv").unlink()
    simulate_session("linear", tmp_path, **SMALL, seed=1)
    assert {path.name: path.read_bytes() for path in tmp_path.iterdir()} == whole


@pytest.mark.parametrize("name", ["notes.txt", "spikes.csv", "truth.json"])
def test_a_folder_with_anything_else_is_refused(tmp_path, name):
    (tmp_path / name).write_text('{"mine": 1}', encoding="utf-8")
    for write in (write_demo_session, lambda out: simulate_session("linear", out)):
        with pytest.raises(InputError, match=rf"the folder holds '{name}' and is no simulated session"):
            write(tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == [name]


def test_a_file_is_refused(tmp_path):
    (tmp_path / "s").write_text("", encoding="utf-8")
    with pytest.raises(InputError, match="is a file"):
        write_demo_session(tmp_path / "s")


@pytest.mark.parametrize(
    ("table", "words"),
    [
        ({"extra_s": [0.0, 0.1]}, "3 contexts but 2 extra_s"),
        ({"sample_s": [0.5, 0.5]}, "holds a value twice"),
        ({"sample_s": [0.05, 0.5]}, "intervals from 0.1 to 10 s"),
        ({"latent_dim": 9}, "latent_dim = 9 does not suit 6 units"),
        ({"account": "interval=maybe"}, "'maybe' is no route"),
    ],
)
def test_a_table_that_cannot_be_drawn_is_refused(tmp_path, table, words):
    model = model_from_dict({"simulate": table}, "mine", "mine.toml")
    with pytest.raises(InputError, match=words):
        simulate_session(model, tmp_path / "s", **SMALL)
    assert not (tmp_path / "s").exists()


def test_a_gaussian_readout_and_too_few_are_refused(tmp_path):
    with pytest.raises(InputError, match="'gaussian' has no spikes to draw"):
        simulate_session({"model": {"readout": "gaussian"}}, tmp_path / "s")
    with pytest.raises(InputError, match="n_trials = 0 is too few"):
        simulate_session("linear", tmp_path / "s", n_trials=0)


@pytest.mark.parametrize(
    ("table", "sources"),
    [
        ({"contexts": ["only"], "extra_s": [0.1]}, ["interval", "trial"]),
        ({"sample_s": [0.6]}, ["context", "trial"]),
    ],
)
def test_one_context_or_one_interval_is_no_source(tmp_path, table, sources):
    simulate_session({"simulate": table}, tmp_path / "s", **SMALL)
    truth = json.loads((tmp_path / "s" / "truth.json").read_text(encoding="utf-8"))
    assert list(truth["sources"]) == sources
    assert [part.split("=")[0] for part in truth["account"].split(",")] == sources
    assert len(read_session(tmp_path / "s").bin()) > 20


def test_the_account_asked_for_is_the_truth(tmp_path):
    simulate_session("linear", tmp_path / "s", **SMALL, account="context=sustained")
    truth = json.loads((tmp_path / "s" / "truth.json").read_text(encoding="utf-8"))
    assert truth["account"] == "interval=none,context=sustained,trial=none"
    assert (
        truth["sources"]["interval"] == "does not push the state, and does not change the produced interval"
    )
