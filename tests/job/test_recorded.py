"""Two recorded sessions of a reach task: one whose activity foretells the reaction time, one that does not.

Riehle, Grün, Diesmann and Aertsen 1997, Science 278:1950; 128 trials each, of two and three units, with a
run-up of 0.3 s.

The rule was chosen after seeing results, so this guards against change and is no test of the method:
counts to 0.1 s and to 0.2 s predict the reaction time of ``foreperiod-a`` (p = 0.039 each, with 50 shifts),
while counts to 0.0 s (p = 0.078) and, with one latent dimension, the state (p above 0.1 at all three) do
not. A model-free check of others had found counts to 0.19 s (r = 0.60, p = 0.01). No feature set predicts
the reaction time of ``foreperiod-b`` at these cutoffs.

One latent dimension takes up the course that both units share after the signal, while it is their
difference that goes with the reaction time (r = −0.41 and 0.41).
"""

from __future__ import annotations

import json

import pytest

import portfire

JOB = """\
session = {folders}
[window]
before_set_s = 0.3
[compare]
latent_dims = [1]
sources = []
[decode]
cutoffs_s = [0.0, 0.1, 0.2]
"""


@pytest.fixture(scope="module")
def decoded(recordings, tmp_path_factory):
    """Rows of the decode of both sessions, by letter."""
    here = tmp_path_factory.mktemp("recorded")
    job = here / "job.toml"
    folders = json.dumps([str(recordings / f"foreperiod-{letter}") for letter in "ab"])
    job.write_text(JOB.format(folders=folders), encoding="utf-8")
    portfire.run(job, out=here / "out", workers=2, quiet=True)
    found = {}
    for letter in "ab":
        folder = here / "out" / f"foreperiod-{letter}"
        result = json.loads((folder / "result.json").read_text(encoding="utf-8"))
        assert result["session"]["trials_used"] == 128
        assert result["chosen"]["latent_dim"] == 1
        found[letter] = [row for row in result["decode"] if row["variant"] == "all"]
    return found


def test_activity_of_the_first_foretells_the_reaction_time(decoded):
    counts = {row["cutoff_s"]: row for row in decoded["a"] if row["features"] == "counts"}
    for cutoff in (0.1, 0.2):
        assert counts[cutoff]["p"] < 0.05
        assert counts[cutoff]["r2_within_condition"] > 0.1
        assert counts[cutoff]["ci95"][0] > 0
        assert counts[cutoff]["n_trials"] == 128


def test_activity_of_the_second_does_not(decoded):
    assert len(decoded["b"]) == 3 + 5 + 5
    for row in decoded["b"]:
        assert row["p"] > 0.05, row
        assert row["r2_within_condition"] < 0.05, row


def test_at_the_cue_only_the_run_up_is_used(decoded):
    """Without a spike after the cue there is no sustained push to infer."""
    for letter in "ab":
        rows = [row for row in decoded[letter] if row["cutoff_s"] == 0.0]
        assert {row["features"] for row in rows} == {"initial", "state", "counts"}
        by_name = {row["features"]: row for row in rows}
        state, initial = by_name["state"], by_name["initial"]
        assert state["r2_within_condition"] == pytest.approx(initial["r2_within_condition"], abs=1e-9)
