"""What every fit promises: an ascent, the same numbers again, and a plain refusal of what cannot be."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import poisson

from portfire.accounts import make_design
from portfire.errors import InputError
from portfire.estimation import Fit, Hazard, draw_paths, fit, load_fit, with_hazard
from portfire.estimation._objective import Objective
from portfire.inference import pack
from portfire.session import Trials

from ._world import ALL_BOTH, LATENT_DIM, MODEL, N_UNITS, blank_trials, draw_world, fit_small, make_truth


def objective_of(fitted: Fit, trials: Trials) -> float:
    """The objective at the parameters of a fit, with every path found from scratch."""
    objective = Objective(pack(trials, fitted.setup), fitted.setup)
    value, _ = objective(fitted.params)
    objective.close()
    return value


def test_objective_never_falls_and_is_what_the_fit_says(world, full):
    assert len(full.trace) > 5
    assert np.all(np.diff(full.trace) >= 0)
    assert full.trace[-1] == full.value
    # Newton stops within 1e-8 or so of each mode, wherever it came from.
    assert objective_of(full, world[0]) == pytest.approx(full.value, abs=1e-4)


def test_objective_at_the_fit_is_above_that_at_the_truth(world, full):
    trials, truth = world
    assert full.value > objective_of(truth, trials)


def test_same_seed_same_fit_and_inputs_unchanged(world, full):
    trials, _ = world
    before = trials.counts.tobytes(), trials.mask.tobytes(), trials.set_s.tobytes()
    again = fit_small(trials)
    assert again.value == full.value
    assert again.trace == full.trace
    for name, value in full.params.items():
        np.testing.assert_array_equal(again.params[name], value, err_msg=name)
    assert before == (trials.counts.tobytes(), trials.mask.tobytes(), trials.set_s.tobytes())


def test_a_start_is_left_as_it_was(world, full):
    kept = {name: value.copy() for name, value in full.params.items()}
    smaller = fit_small(world[0], "context=initial,trial=initial", start=full, max_iterations=3)
    assert not smaller.params["push"][:, [0, 2, 3]].any()
    assert not smaller.params["sustained_factor"].any()
    assert str(smaller.account) == "interval=none,context=initial,trial=initial"
    for name, value in kept.items():
        np.testing.assert_array_equal(full.params[name], value, err_msg=name)


def test_saved_fit_gives_the_same_numbers(world, full, tmp_path):
    trials = world[0][:20]
    fitted = with_hazard(full, Hazard(-3.0, np.array([0.5, -1.0])))
    back = load_fit(fitted.save(tmp_path / "one"))
    assert (back.setup, back.account, back.status, back.seed) == (
        fitted.setup,
        fitted.account,
        fitted.status,
        fitted.seed,
    )
    assert (back.value, back.trace, back.drift, back.advice) == (
        fitted.value,
        fitted.trace,
        fitted.drift,
        fitted.advice,
    )
    assert back.session == fitted.session
    assert back.hazard is not None
    assert back.hazard.level == -3.0
    np.testing.assert_array_equal(back.hazard.weights, [0.5, -1.0])
    np.testing.assert_array_equal(back.score(trials)["loglik"], fitted.score(trials)["loglik"])
    for name, value in fitted.infer(trials, 0.2).items():
        np.testing.assert_array_equal(back.infer(trials, 0.2)[name], value, err_msg=str(name))
    assert {p.name for p in (tmp_path / "one").iterdir()} == {"fit.json", "arrays.npz"}
    assert "pickle" not in (tmp_path / "one" / "fit.json").read_text(encoding="utf-8")


def test_what_is_no_fit_is_refused(full, tmp_path):
    with pytest.raises(InputError, match=r"no fit\.json"):
        load_fit(tmp_path)
    folder = full.save(tmp_path / "one")
    whole = (folder / "arrays.npz").read_bytes()
    for broken in (b"", b"PK\x03\x04 cut short", whole[: len(whole) // 2]):
        (folder / "arrays.npz").write_bytes(broken)
        with pytest.raises(InputError, match="cannot be read"):
            load_fit(folder)
    (folder / "arrays.npz").write_bytes(whole)
    content = json.loads((folder / "fit.json").read_text(encoding="utf-8"))
    del content["account"]
    (folder / "fit.json").write_text(json.dumps(content), encoding="utf-8")
    with pytest.raises(InputError, match="cannot be read"):
        load_fit(folder)


def test_statuses_say_what_to_do(world, full):
    assert full.status == "converged"
    assert full.advice == "The objective no longer rises."
    short = fit_small(world[0], max_iterations=2)
    assert short.status == "iterations"
    assert "start=" in short.advice
    assert len(short.trace) == 3
    longer = fit_small(world[0], start=short)
    assert longer.status == "converged"
    assert longer.value == pytest.approx(full.value, abs=0.5)


def test_what_cannot_be_fitted_is_refused(world, full):
    trials, _ = world
    with pytest.raises(InputError, match=f"latent_dim = {N_UNITS + 1} does not suit {N_UNITS} units"):
        fit(trials, MODEL, latent_dim=N_UNITS + 1)
    with pytest.raises(InputError, match="latent_dim = 0"):
        fit(trials, MODEL, latent_dim=0)
    with pytest.raises(InputError, match="no trials"):
        fit(trials[[]], MODEL, latent_dim=2)
    with pytest.raises(InputError, match="latent_dim = 3, but the fit to start from has 2"):
        fit(trials, MODEL, latent_dim=3, start=full)
    with pytest.raises(InputError, match="sorce"):
        fit(trials, MODEL, "sorce=both", LATENT_DIM)


def test_trials_of_another_session_are_refused(world, full):
    trials, _ = world
    fewer = blank_trials(8, n_units=N_UNITS - 1)
    with pytest.raises(InputError, match="other units"):
        full.score(fewer)
    with pytest.raises(InputError, match="other units"):
        fit_small(fewer, start=full)
    with pytest.raises(InputError, match="run-up bins"):
        full.infer(blank_trials(8, n_before=3))
    with pytest.raises(InputError, match="contexts"):
        full.score(replace(trials, contexts=("high", "low", "other")))
    # A sample interval enters in units of its session's spread: another spread is another model.
    with pytest.raises(InputError, match="sample interval"):
        full.score(replace(trials, sample_scale=2 * trials.sample_scale))


def test_a_start_from_the_size_of_the_start(world, full):
    """Without latent_dim a fit takes that of its start, also where the default of 3 would not do."""
    assert fit(world[0], MODEL, ALL_BOTH, start=full, max_iterations=0).latent_dim == LATENT_DIM


def test_scores_are_about_trials_not_about_their_order(world, full):
    trials, _ = world
    rows = np.array([40, 3, 77, 12])
    whole = full.score(trials).set_index("trial")["loglik"]
    some = full.score(trials[rows]).set_index("trial")
    assert list(some.index) == [trials.trial[row] for row in rows]
    # Other lanes, other lengths: the same draws for the same trial.
    np.testing.assert_allclose(some["loglik"], whole.loc[list(some.index)], atol=0.02)
    assert list(some["n_bins"]) == list(trials.n_bins[rows])
    assert list(some["n_spikes"]) == list(trials.counts[rows].sum(axis=(1, 2)))
    assert (some["loglik_se"] < 0.05).all()
    assert (some["loglik"] < 0).all()


def test_a_covariance_is_opened_where_the_score_says_so():
    """Started with no sustained push of the trial, the full account finds it.

    It need not end at the very maximum of a cold fit: here there are two, 1.2 of 50 nats apart.
    """
    trials, truth = draw_world("trial=sustained", seed=5)
    cold = fit_small(trials)
    closed = fit_small(trials, "interval=both,context=both,trial=initial", start=cold)
    assert not closed.params["sustained_factor"].any()
    assert cold.value - closed.value > 5
    opened = fit_small(trials, start=closed)
    assert opened.value - closed.value > 0.95 * (cold.value - closed.value)
    own = opened.params["sustained_factor"] @ opened.params["sustained_factor"].T
    moved = opened.params["readout"] @ own @ opened.params["readout"].T
    true_own = truth.params["sustained_factor"] @ truth.params["sustained_factor"].T
    true_moved = truth.params["readout"] @ true_own @ truth.params["readout"].T
    # In log rates, which do not hang on the coordinates.
    assert np.linalg.norm(moved - true_moved) < 0.5 * np.linalg.norm(true_moved)


def test_a_covariance_stays_at_zero_where_every_direction_loses():
    """Each trial makes up for its own deviations in the next bin, so that whole trials are too alike."""
    blank = blank_trials(96, seed=2)
    truth = make_truth(blank, "interval=sustained,context=both", seed=2)
    # The mean path of each condition: the truth without any noise.
    still = replace(truth, params={**truth.params, "noise": np.array(1e-12)})
    path = draw_paths(still, make_design(blank).rows, blank.counts.shape[1], np.random.default_rng(0))
    mean = blank.bin_s * np.exp(path @ truth.params["readout"].T + truth.params["log_rate"])
    place = np.random.default_rng(1).uniform(size=mean.shape)
    place[:, 1::2] = 1 - place[:, ::2]
    counts = poisson.ppf(place, mean) * blank.mask[:, :, None]
    trials = replace(blank, counts=counts.astype(np.uint16))
    closed = fit_small(trials, "interval=both,context=both")
    again = fit_small(trials, start=closed)
    assert not again.params["initial_factor"].any()
    assert not again.params["sustained_factor"].any()
    assert again.value >= closed.value
