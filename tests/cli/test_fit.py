"""A fit from the command line, and a session drawn from it."""

from __future__ import annotations

import json

import numpy as np

from portfire import load_fit, read_session


def test_a_session_can_be_drawn_from_a_fit(portfire, tmp_path):
    session = tmp_path / "monday"
    size = ("--trials", 60, "--units", 6, "--seed", 4)
    assert portfire("simulate", "linear", "--out", session, *size)[0] == 0
    n_trials = len(read_session(session).bin())
    options = ("--account", "context=initial", "--latent-dim", "1", "--out", tmp_path / "fit")
    status, out, err = portfire("fit", session, *options)
    assert (status, err) == (0, "")
    first, advice, last = out.splitlines()
    account = "interval=none,context=initial,trial=none"
    assert first == f"account {account}, 1 latent dimensions, {n_trials} trials"
    fitted = load_fit(tmp_path / "fit")
    assert advice == f"{fitted.status}: {fitted.advice}"
    assert last == f"fit: {tmp_path}/fit"
    assert fitted.hazard is not None
    status, _, err = portfire("simulate", tmp_path / "fit", "--out", tmp_path / "drawn")
    assert (status, err) == (0, "")
    trials = read_session(tmp_path / "drawn").bin(min_rate_hz=0.0)
    assert set(trials.unit) <= {f"u{k}" for k in range(7)}
    assert len(trials) + len(trials.trials_left_out) == n_trials
    assert np.isfinite(trials.produced_s).mean() > 0.9
    truth = json.loads((tmp_path / "drawn" / "truth.json").read_text())
    assert truth["account"] == account
