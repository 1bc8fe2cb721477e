"""A fit from the command line, and a session drawn from it."""

from __future__ import annotations

import json

import numpy as np

from portfire import load_fit, read_session


def test_a_session_can_be_drawn_from_a_fit(portfire, session, tmp_path):
    options = ("--account", "context=initial", "--latent-dim", "1", "--out", tmp_path / "fit")
    status, out, err = portfire("fit", session, *options)
    assert (status, err) == (0, "")
    first, advice, last = out.splitlines()
    assert first == "account context=initial,trial=none, 1 latent dimensions, 40 trials"
    fitted = load_fit(tmp_path / "fit")
    assert advice == f"{fitted.status}: {fitted.advice}"
    assert last == f"fit: {tmp_path}/fit"
    assert fitted.hazard is not None
    status, _, err = portfire("simulate", tmp_path / "fit", "--out", tmp_path / "drawn")
    assert (status, err) == (0, "")
    trials = read_session(tmp_path / "drawn").bin(min_rate_hz=0.0)
    assert trials.unit == ("u1", "u2", "u3")
    assert len(trials) + len(trials.trials_left_out) == 40
    assert np.isfinite(trials.produced_s).mean() > 0.9
    truth = json.loads((tmp_path / "drawn" / "truth.json").read_text())
    assert truth["account"] == "context=initial,trial=none"
