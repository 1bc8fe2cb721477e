"""Sessions drawn from a fit: its parameters, its hazard, its units."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest

from portfire.dynamics import make_setup
from portfire.errors import InputError
from portfire.estimation import Fit, Hazard, load_fit
from portfire.session import read_session
from portfire.simulate import simulate_session, true_parameters


@pytest.fixture(scope="module")
def fitted(demo) -> Fit:
    """A fit that is the truth of the demo session, with a hazard that rises steeply at its boundary."""
    session, drawn = demo
    trials = session.bin()
    system = drawn.system
    setup = make_setup(trials, system.setup.model, 3, True)
    rule = system.response
    return Fit(
        setup=setup,
        account=system.account,
        params=true_parameters(drawn, setup, trials),
        canonical=np.eye(3),
        value=0.0,
        trace=(0.0,),
        status="converged",
        seed=0,
        session={
            "units": list(trials.unit),
            "contexts": list(trials.contexts),
            "sample_center": trials.sample_center,
            "sample_scale": trials.sample_scale,
            "conditions": [list(pair) for pair in trials.conditions],
            "n_trials": len(trials),
            "digest": trials.digest,
        },
        hazard=Hazard(-20.0 * rule.threshold, 20.0 * rule.weights),
    )


def test_a_session_from_a_fit_is_like_the_one_it_describes(fitted, demo, tmp_path):
    fitted.save(tmp_path / "fit")
    simulate_session(tmp_path / "fit", tmp_path / "s", seed=5)
    drawn, recorded = read_session(tmp_path / "s").bin(), demo[0].bin()
    assert drawn.unit == recorded.unit
    assert len(drawn) + len(drawn.trials_left_out) == len(recorded)
    assert drawn.conditions == recorded.conditions
    differences = []
    for condition in range(9):
        pair = [t.produced_s[(t.condition == condition) & t.responded] for t in (drawn, recorded)]
        differences.append(pair[0].mean() - pair[1].mean())
        # A hazard adds about a bin: it belongs to the last whole bin before a response.
        assert abs(differences[-1]) < 0.02 + 3.5 * np.sqrt(sum(p.var() / len(p) for p in pair))
    assert abs(np.mean(differences)) < 0.03
    rates = [t.counts.sum(axis=(0, 1)) / t.duration_s.sum() for t in (drawn, recorded)]
    np.testing.assert_allclose(rates[0], rates[1], rtol=0.15)


def test_units_are_chosen_or_repeated(fitted, tmp_path):
    simulate_session(fitted, tmp_path / "few", n_trials=20, n_units=10, seed=1)
    few = read_session(tmp_path / "few").units
    assert len(few) == 10
    assert set(few) <= set(fitted.session["units"])
    n = len(fitted.session["units"])
    simulate_session(fitted, tmp_path / "many", n_trials=20, n_units=2 * n + 20, seed=1)
    many = read_session(tmp_path / "many").units
    assert len(many) == 2 * n + 20
    assert sum(unit.endswith("copy 2") for unit in many) == n
    assert sum(unit.endswith("copy 3") for unit in many) == 20


def test_an_account_takes_pushes_away(fitted, tmp_path):
    simulate_session(fitted, tmp_path / "s", n_trials=20, account="interval=sustained")
    truth = json.loads((tmp_path / "s" / "truth.json").read_text(encoding="utf-8"))
    assert truth["account"] == "interval=sustained,context=none,trial=none"
    push = np.array(truth["model"]["parameters"]["push"])
    assert not push[:, [0, 1, 2, 4, 5]].any()
    assert push[:, 3].any()
    assert not np.array(truth["model"]["parameters"]["initial_factor"]).any()


def test_what_a_fit_cannot_give_is_refused(fitted, tmp_path):
    with pytest.raises(InputError, match="no push for the routes that this adds"):
        simulate_session(fitted, tmp_path / "s", account="interval=both")
    with pytest.raises(InputError, match="no response hazard"):
        simulate_session(replace(fitted, hazard=None), tmp_path / "s")
    (tmp_path / "empty").mkdir()
    with pytest.raises(InputError, match=r"no fit\.json"):
        simulate_session(tmp_path / "empty", tmp_path / "s")
    assert not (tmp_path / "s").exists()
    assert load_fit(fitted.save(tmp_path / "fit")).hazard is not None
