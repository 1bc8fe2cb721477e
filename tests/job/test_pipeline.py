"""The whole job on small sessions, through real processes: every file, every key, again and alike."""

from __future__ import annotations

import json
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr

import portfire
from portfire.accounts import Account
from portfire.cli import main
from portfire.dynamics import ModelFile
from portfire.errors import InputError
from portfire.estimation import load_fit
from portfire.simulate import Scenario, draw_session

from .._thorough import OF_THOROUGH_RUNS

ACCOUNTS = [
    "interval=both,context=both,trial=both",
    *[f"interval={route},context=both,trial=both" for route in ("none", "initial", "sustained")],
    *[f"interval=both,context={route},trial=both" for route in ("none", "initial", "sustained")],
    *[f"interval=both,context=both,trial={route}" for route in ("none", "initial", "sustained")],
]
NOT_THOROUGH = (
    "No persistence, time course, rivals, tests that survive a wrong model, predictive checks or unseen "
    "units: the job does not ask for them ([tests] thorough)."
)
FEATURES = ("initial", "sustained", "initial+sustained", "state", "counts")
JOB = """\
session = "session"
seed = 3
[window]
bin_s = 0.04
[compare]
folds = 3
latent_dims = [1, 2]
[decode]
cutoffs_s = [0.12, 0.2]
draws = 50
"""


def write_session(folder: Path, with_context: bool = True, with_response: bool = True) -> None:
    scenario = Scenario(
        model=ModelFile(),
        account=Account.parse("interval=sustained,context=initial,trial=initial"),
        n_trials=60,
        n_units=8,
        latent_dim=1,
        sample_s=(0.5, 0.8),
        contexts=("high", "low"),
        extra_s=(0.2, 0.0),
        mean_rate_hz=20.0,
        bin_s=0.04,
    )
    _, drawn = draw_session(scenario, 4)
    table = drawn.trials.drop(columns="lead_s")
    if not with_context:
        table = table.drop(columns=["context", "target_s"])
    if not with_response:
        table["end_s"] = table["response_s"].fillna(table["end_s"])
        table["response_s"] = np.nan
    folder.mkdir(parents=True)
    table.to_csv(folder / "trials.csv", index=False)
    spikes = [pd.DataFrame({"unit": unit, "time_s": times}) for unit, times in drawn.spike_times.items()]
    pd.concat(spikes).to_csv(folder / "spikes.csv", index=False)


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    """A session with its job, done once."""
    here = tmp_path_factory.mktemp("pipeline")
    write_session(here / "session")
    (here / "job.toml").write_text(JOB, encoding="utf-8")
    # By the command, which also draws the report.
    assert main(["run", str(here / "job.toml"), "--out", str(here / "out"), "--workers", "2", "--quiet"]) == 0
    return here


@pytest.fixture(scope="module")
def result(folder) -> dict:
    return json.loads((folder / "out" / "result.json").read_text(encoding="utf-8"))


def numbers(value: object, path: str = "result"):
    """All numbers in nested values, with where they stand."""
    if isinstance(value, dict):
        for key, part in value.items():
            yield from numbers(part, f"{path}.{key}")
    elif isinstance(value, list):
        for place, part in enumerate(value):
            yield from numbers(part, f"{path}[{place}]")
    elif isinstance(value, int | float) and not isinstance(value, bool):
        yield path, value


def names(value: object) -> set[str]:
    """All keys in nested values."""
    if isinstance(value, dict):
        return set(value).union(*map(names, value.values()))
    return set().union(*map(names, value)) if isinstance(value, list) else set()


def test_result_has_what_the_interface_names(result):
    assert set(result) >= {
        "portfire", "seed", "session", "behaviour", "chosen", "accounts", "contrasts", "decode", "warnings",
    }  # fmt: skip
    assert result["seed"] == 3
    assert set(result["session"]) >= {
        "units_used", "units_left_out", "trials_used", "trials_left_out", "conditions", "digest",
    }  # fmt: skip
    assert result["session"]["conditions"] == 4
    assert result["session"]["digest"].startswith("sha256:")
    assert len(result["behaviour"]["conditions"]) == 4
    assert set(result["behaviour"]["conditions"][0]) >= {"context", "sample_s", "n", "mean_s", "sd_s"}
    assert result["behaviour"]["weber_fraction"] is not None
    assert result["chosen"]["model"] == "linear"
    assert result["chosen"]["latent_dim"] in (1, 2)
    assert len(result["chosen"]["by_fold"]) == 3
    assert [row["source"] for row in result["contrasts"]] == ["interval", "context", "trial"]
    for row in result["contrasts"]:
        assert set(row) >= {
            "source", "none", "initial", "sustained", "both", "initial_unique", "sustained_unique", "total",
            "verdict",
        }  # fmt: skip
        for name in ("initial_unique", "sustained_unique", "total"):
            assert set(row[name]) >= {"nats_per_trial", "ci95", "p"}
            low, high = row[name]["ci95"]
            assert low <= row[name]["nats_per_trial"] <= high
            assert 0 <= row[name]["p"] <= 1
            assert row[name]["p"] >= row["lr"][name]["p_raw"]
        assert row["verdict"] in ("initial", "sustained", "both", "neither", "undetermined")
        assert ("open" in row) == (row["verdict"] == "undetermined")


def test_all_numbers_are_finite(folder, result):
    text = (folder / "out" / "result.json").read_text(encoding="utf-8")
    assert "NaN" not in text
    assert "Infinity" not in text
    found = list(numbers(result))
    assert len(found) > 100
    assert all(np.isfinite(value) for _, value in found)


def test_scores_have_a_row_for_every_trial_and_account(folder, result):
    scores = pd.read_parquet(folder / "out" / "scores.parquet")
    assert list(scores.columns[:9]) == [
        "trial", "fold", "account", "model", "latent_dim", "loglik", "loglik_se", "n_spikes", "n_bins",
    ]  # fmt: skip
    n = result["session"]["trials_used"]
    assert scores.groupby("account", sort=False).size().to_dict() == dict.fromkeys(ACCOUNTS, n)
    assert not scores.duplicated(["trial", "account"]).any()
    assert np.isfinite(scores[["loglik", "loglik_se"]]).all().all()
    trials = pd.read_parquet(folder / "out" / "trials.parquet").set_index("trial")
    assert len(trials) == n
    assert (scores["fold"].to_numpy() == trials.loc[scores["trial"], "fold"].to_numpy()).all()
    # In session order, blocks of min(25, n // 2J) trials are dealt to the folds in turn.
    size = min(25, n // 6)
    assert trials["fold"].tolist() == [i // size % 3 for i in range(n)]


def test_accounts_and_contrasts_are_sums_of_the_scores(folder, result):
    scores = pd.read_parquet(folder / "out" / "scores.parquet")
    mean = scores.groupby("account")["loglik"].mean()
    assert sorted(row["account"] for row in result["accounts"]) == sorted(ACCOUNTS)
    assert result["accounts"][0]["account"] == ACCOUNTS[0]
    for row in result["accounts"]:
        assert row["loglik_per_trial"] == pytest.approx(mean[row["account"]])
        assert row["n_trials"] == result["session"]["trials_used"]
        assert row["loglik_se"] < 0.05
    wide = scores.pivot(index="trial", columns="account", values="loglik")
    n, n_train = len(wide), None
    for contrast in result["contrasts"]:
        source = contrast["source"]
        for name, route in (
            ("initial_unique", "sustained"),
            ("sustained_unique", "initial"),
            ("total", "none"),
        ):
            smaller = ACCOUNTS[0].replace(f"{source}=both", f"{source}={route}")
            difference = wide[ACCOUNTS[0]] - wide[smaller]
            correction = contrast[name]["nats_per_trial"] - difference.mean()
            k = contrast["gain_k"][name]
            n_train = n_train or k / (2 * correction)
            # The mean number of training trials is the same in all: fewer than two thirds of the session.
            assert correction == pytest.approx(k / (2 * n_train))
            assert contrast["both"] - contrast[route] == pytest.approx(difference.mean())
    assert 0.4 * n < n_train < 2 / 3 * n
    best = max(row["bits_per_spike"] for row in result["accounts"])
    assert 0.02 < best < 1.0


def test_bits_per_spike_are_above_constant_rates(folder, result):
    """Recounted: gain over each unit's training rate, in bits, over all spikes of the scored windows."""
    from portfire.job._assemble import null_loglik

    trials = portfire.read_session(folder / "session").bin(0.04)
    scores = pd.read_parquet(folder / "out" / "scores.parquet")
    own = scores[scores["account"] == ACCOUNTS[0]].set_index("trial").loc[list(trials.trial)]
    bits = (own["loglik"].to_numpy() - null_loglik(trials, 3)).sum() / np.log(2) / own["n_spikes"].sum()
    assert result["accounts"][0]["bits_per_spike"] == pytest.approx(bits)
    assert own["n_spikes"].sum() == trials.counts.sum()


def test_decode_has_a_row_for_every_cutoff_and_feature_set(folder, result):
    rows = [row for row in result["decode"] if row["variant"] == "all"]
    assert [(row["cutoff_s"], row["features"]) for row in rows] == [
        (cutoff, name) for cutoff in (0.12, 0.2) for name in FEATURES
    ]
    for row in rows:
        assert set(row) >= {
            "cutoff_s", "features", "n_trials", "r2_within_condition", "ci95", "p", "null95",
        }  # fmt: skip
        assert row["p"] >= 1 / (1 + row["null_draws"])
        assert row["null_draws"] <= 50
    table = pd.read_parquet(folder / "out" / "decode.parquet")
    assert list(table.columns[:8]) == [
        "trial", "condition", "fold", "cutoff_s", "features", "produced_s", "baseline_s", "predicted_s",
    ]  # fmt: skip
    counted = table.groupby(["cutoff_s", "features"]).size().to_dict()
    assert counted == {(row["cutoff_s"], row["features"]): row["n_trials"] for row in rows}
    assert np.isfinite(table[["produced_s", "baseline_s", "predicted_s"]]).all().all()


def test_latents_are_those_of_every_trial(folder, result):
    trials = portfire.read_session(folder / "session").bin(0.04)
    d, n = result["chosen"]["latent_dim"], len(trials)
    with xr.open_dataset(folder / "out" / "latents.nc", engine="h5netcdf") as latents:
        assert latents["state"].dims == ("trial", "time", "latent")
        assert latents["state"].shape == (n, trials.counts.shape[1], d)
        assert latents["initial_cov"].shape == latents["sustained_cov"].shape == (n, d, d)
        assert latents["initial"].shape == latents["sustained"].shape == (n, d)
        assert [str(label) for label in latents["trial"].values] == list(trials.trial)
        for name in ("state", "state_causal"):
            seen = np.isfinite(latents[name].values).all(axis=2)
            np.testing.assert_array_equal(seen, trials.mask)
        last = trials.n_bins - 1
        smooth, causal = (latents[name].values[np.arange(n), last] for name in ("state", "state_causal"))
        # At the end of a trial nothing comes after.
        np.testing.assert_allclose(smooth, causal, atol=1e-3)
    with xr.open_dataset(folder / "out" / "rates.nc", engine="h5netcdf") as rates:
        assert rates["recorded"].dims == ("condition", "time", "unit")
        seen = np.isfinite(rates["recorded"].values)
        np.testing.assert_array_equal(np.isfinite(rates["model"].values), seen)
        assert (rates["n_running"].values[seen.all(axis=2)] >= 5).all()
        ratio = rates["model"].sum(skipna=True) / rates["recorded"].sum(skipna=True)
        assert 0.8 < float(ratio) < 1.25
        assert 0.5 < float(rates["pc_variance"].sum()) <= 1 + 1e-9


def test_the_other_files_are_there(folder):
    out = folder / "out"
    page = (out / "report.html").read_text(encoding="utf-8")
    assert "<html" in page
    assert list((out / "figures").glob("*.svg"))
    assert (out / "log.txt").read_text(encoding="utf-8").strip().endswith("done")
    entries = [path for path in (out / "fits").iterdir() if path.is_dir()]
    assert entries
    for entry in entries:
        assert {path.name for path in entry.iterdir()} >= {"fit.json", "arrays.npz"}
    assert not [p for p in out.rglob("*") if p.suffix in (".pkl", ".pickle") or p.name.endswith(".tmp")]


def test_stored_fits_can_be_read(folder, result):
    """Any fit of the full account to all trials gives scores from Python."""
    trials = portfire.read_session(folder / "session").bin(0.04)
    for entry in sorted((folder / "out" / "fits").iterdir()):
        content = json.loads((entry / "fit.json").read_text(encoding="utf-8"))
        if content.get("account") == ACCOUNTS[0]:
            table = load_fit(entry).score(trials[:5])
            assert np.isfinite(table["loglik"]).all()
            return
    raise AssertionError("no fit of the full account is stored")


def test_a_second_run_uses_what_is_there(folder, result):
    before = {path: path.stat().st_mtime_ns for path in (folder / "out" / "fits").rglob("fit.json")}
    (folder / "out" / "report.html").unlink()
    start = time.perf_counter()
    again = portfire.run(folder / "job.toml", out=folder / "out", workers=2, quiet=True)
    assert time.perf_counter() - start < 30
    assert {path: path.stat().st_mtime_ns for path in before} == before
    assert json.loads((folder / "out" / "result.json").read_text(encoding="utf-8")) == result
    assert (folder / "out" / "report.html").exists()
    assert len(again.contrasts) > 0
    assert len(again.decode) == len(result["decode"])


def test_the_same_seed_gives_the_same_result(folder, result):
    """In another folder, where the processes take the fits in whatever order they come."""
    portfire.run(folder / "job.toml", out=folder / "again", workers=2, quiet=True)
    again = json.loads((folder / "again" / "result.json").read_text(encoding="utf-8"))
    assert [found["settings"].pop("out") for found in (result, again)] == ["out", "again"]
    assert again == result


def test_a_bare_session_without_context_response_or_contrasts(tmp_path):
    write_session(tmp_path / "session", with_context=False, with_response=False)
    text = JOB.replace("latent_dims = [1, 2]", 'latent_dims = [1]\nsources = ["context"]')
    (tmp_path / "job.toml").write_text(text, encoding="utf-8")
    job, out = str(tmp_path / "job.toml"), str(tmp_path / "out")
    assert main(["run", job, "--out", out, "--workers", "2", "--quiet"]) == 0
    result = json.loads((tmp_path / "out" / "result.json").read_text(encoding="utf-8"))
    assert result["contrasts"] == []
    assert result["decode"] == []
    assert [row["account"] for row in result["accounts"]] == ["interval=both,trial=both"]
    assert result["session"]["conditions"] == 2
    assert result["chosen"]["latent_dim"] == 1
    assert result["not_run"] == [
        "The source context is not contrasted: the session has no context column.",
        "No contrasts: the job names no source that this session has.",
        "No decode: no trial has a response.",
        NOT_THOROUGH,
    ]
    assert pd.read_parquet(tmp_path / "out" / "decode.parquet").empty
    assert "<html" in (tmp_path / "out" / "report.html").read_text(encoding="utf-8")
    assert all(np.isfinite(value) for _, value in numbers(result))


def test_a_thorough_job_says_how_long_pushes_last_and_what_rivals_them(tmp_path):
    write_session(tmp_path / "session")
    text = JOB.replace("latent_dims = [1, 2]", 'latent_dims = [1]\nsources = ["context"]')
    text = text.replace("cutoffs_s = [0.12, 0.2]", "cutoffs_s = []") + "[tests]\nthorough = true\n"
    (tmp_path / "job.toml").write_text(text, encoding="utf-8")
    job, out = str(tmp_path / "job.toml"), tmp_path / "out"
    assert main(["run", job, "--out", str(out), "--workers", "2", "--quiet"]) == 0
    result = json.loads((out / "result.json").read_text(encoding="utf-8"))
    assert NOT_THOROUGH not in result["not_run"]
    (row,) = result["contrasts"]
    persistence = row["persistence_s"]
    if persistence is None:
        assert "two pushes" in row["persistence_words"]
    else:
        assert set(persistence) == {"estimate", "ci95", "at_next_dim", "at_previous_dim"}
        low, high = persistence["ci95"]
        assert low >= 0
        assert high is None or high >= low
    losses = row["persistence_profile"][0]["loss_nats"]
    assert min(losses) == 0
    assert len(losses) == 8
    for name in ("blocks", "labels"):
        assert 0 < row["tests"]["total"][name]["p"] <= 1
    assert {rival["source"] for rival in result["rivals"]} == {"context"}
    assert {check["check"] for check in result["checks"]}
    assert np.isfinite(result["yardsticks"]["unseen_units_bits_per_spike"])
    assert not OF_THOROUGH_RUNS - names(result)
    assert "Persistence" in (out / "report.html").read_text(encoding="utf-8")
    assert all(np.isfinite(value) for _, value in numbers(result))


def test_models_of_different_readouts_are_refused(folder):
    (folder / "roots.toml").write_text('[model]\nreadout = "gaussian"\n', encoding="utf-8")
    job = folder / "mixed.toml"
    text = (folder / "job.toml").read_text(encoding="utf-8")
    assert "[model]" not in text
    job.write_text(text + '\n[model]\nfile = ["linear", "./roots.toml"]\n', encoding="utf-8")
    with pytest.raises(
        InputError, match=r"'linear' has poisson; give models whose readouts are all of counts"
    ):
        portfire.run(job, out=folder / "mixed", workers=1, quiet=True)
