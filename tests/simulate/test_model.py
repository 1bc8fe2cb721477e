"""A drawn session lies inside the model that is fitted."""

from __future__ import annotations

from dataclasses import replace

import jax.numpy as jnp
import numpy as np
import pytest

from portfire.accounts import Account, make_design
from portfire.dynamics import ModelFile, initial_covariance, make_setup, parameter_shapes, path_inputs
from portfire.simulate import Scenario, demo_scenario, draw_session, true_parameters
from portfire.simulate._make import make_system
from portfire.simulate._system import carry
from portfire.simulate._system import path_inputs as drawn_inputs


def setup_of(trials, drawn):
    return make_setup(trials, drawn.system.setup.model, 3, True, drawn.system.setup.n_reference)


def test_columns_rows_and_shapes_are_those_of_a_fit(everything):
    session, drawn = everything
    trials = session.bin()
    setup = setup_of(trials, drawn)
    design = make_design(trials)
    assert design.columns == drawn.system.setup.columns
    assert design.sources == drawn.system.setup.sources
    used = [list(drawn.trials["trial"]).index(label) for label in trials.trial]
    # The centre is that of the used trials in the one, of the conditions in the other.
    np.testing.assert_allclose(design.rows, drawn.system.rows[drawn.condition[used]], atol=0.02)
    shapes = {name: value.shape for name, value in true_parameters(drawn, setup, trials).items()}
    assert shapes == parameter_shapes(setup)


def test_inputs_and_initial_covariance_are_those_of_the_dynamics(everything):
    _, drawn = everything
    system = drawn.system
    params = {name: jnp.asarray(value) for name, value in system.params.items()}
    theirs = path_inputs(params, system.setup, 50, jnp.asarray(system.rows.T))
    ours = drawn_inputs(system.params, system.setup, system.rows, 50)
    np.testing.assert_allclose(ours, np.moveaxis(np.asarray(theirs), -1, 0), rtol=1e-5, atol=1e-6)
    covariance = np.asarray(initial_covariance(params, system.setup))
    np.testing.assert_allclose(system.initial_covariance, covariance, rtol=1e-5)


def test_paths_follow_the_dynamics_with_the_noise_stated(everything):
    _, drawn = everything
    system, rows = drawn.system, drawn.system.rows[drawn.condition]
    normal = np.isin(drawn.kind, ("normal", "aborted"))
    known = drawn_inputs(system.params, system.setup, rows, drawn.path.shape[1])
    left = drawn.path[:, 1:] - drawn.path[:, :-1] @ system.params["transition"].T - known[:, 1:]
    left = left[normal]
    # What stays constant within a trial is its own sustained push.
    own = left.mean(axis=1)
    factor = system.params["sustained_factor"] / system.setup.n_reference
    noise = float(system.params["noise"])
    np.testing.assert_allclose((left - own[:, None]).var(axis=(0, 1)), noise, rtol=0.03)
    np.testing.assert_allclose(
        np.diag(np.cov(own.T)), np.diag(factor @ factor.T) + noise / left.shape[1], rtol=0.2
    )
    start = drawn.path[normal, 0] - known[normal, 0]
    np.testing.assert_allclose(np.diag(np.cov(start.T)), np.diag(system.initial_covariance), rtol=0.2)
    lag = (left[:, 1:] - own[:, None]) * (left[:, :-1] - own[:, None])
    assert abs(lag.mean()) < 0.03 * noise


def test_binned_counts_are_poisson_about_the_rates_stated(everything):
    session, drawn = everything
    trials = session.bin()
    params = true_parameters(drawn, setup_of(trials, drawn), trials)
    used = [list(drawn.trials["trial"]).index(label) for label in trials.trial]
    path = drawn.path[used, : trials.mask.shape[1]]
    drift = setup_of(trials, drawn).drift_basis(trials) @ params["drift"].T
    assert 0.03 < drift.std() < 0.3
    rate = np.exp(path @ params["readout"].T + params["log_rate"] + drift[:, None])
    mean = trials.bin_s * rate[trials.mask]
    counts = trials.counts[trials.mask]
    assert abs(((counts - mean) ** 2 / mean).mean() - 1) < 0.02
    z = (counts - mean).sum(axis=0) / np.sqrt(mean.sum(axis=0))
    assert np.abs(z).max() < 4.5
    assert abs(z.var() - 1) < 0.8
    # One bin off is noticed: the rates move enough within a trial.
    late = trials.mask[:, 1:]
    shifted = trials.bin_s * rate[:, :-1][late]
    ahead = trials.bin_s * rate[:, 1:][late]
    there = trials.counts[:, 1:][late]
    assert (there * np.log(ahead / shifted) - ahead + shifted).sum() > 50


def test_overdispersed_counts_have_the_variance_stated():
    model = ModelFile(name="spread", readout="negative_binomial", drift="off")
    scenario = Scenario(
        model=model, n_trials=200, n_units=10, mean_rate_hz=30.0, dispersion=0.7, drift_sd=0.0
    )
    session, drawn = draw_session(scenario, seed=2)
    trials = session.bin()
    setup = setup_of(trials, drawn)
    setup = replace(setup, n_drift=0)
    params = true_parameters(drawn, setup, trials)
    np.testing.assert_allclose(params["log_dispersion"], np.log(0.7))
    used = [list(drawn.trials["trial"]).index(label) for label in trials.trial]
    path = drawn.path[used, : trials.mask.shape[1]]
    mean = trials.bin_s * np.exp(path @ params["readout"].T + params["log_rate"])[trials.mask]
    error = (trials.counts[trials.mask] - mean) ** 2
    assert (error / (mean + mean**2 / 0.7)).mean() == pytest.approx(1.0, abs=0.05)
    assert (error / mean).mean() > 1.5


def test_mean_rates_are_those_asked_for(demo):
    _, drawn = demo
    trials = demo[0].bin()
    rates = trials.counts.sum(axis=(0, 1)) / trials.duration_s.sum()
    assert 9 < rates.mean() < 15
    assert drawn.system.setup.n_units == demo_scenario().n_units + demo_scenario().n_silent


@pytest.mark.parametrize("latent_dim", [1, 2, 4, 6])
def test_any_number_of_dimensions(latent_dim):
    session, drawn = draw_session(Scenario(latent_dim=latent_dim, n_trials=40, n_units=12), seed=1)
    assert drawn.path.shape[2] == latent_dim
    eigenvalues = np.linalg.eigvals(drawn.system.params["transition"])
    assert np.abs(eigenvalues).max() == pytest.approx(np.exp(-0.02 / 2.0))
    assert np.ptp(session.bin().produced_s[session.bin().responded]) > 0.2


def test_a_push_of_no_route_is_absent_and_the_others_are_not():
    account = Account.parse("interval=initial,context=none,trial=sustained")
    system = make_system(Scenario(account=account), seed=0)
    size = {
        (c.source, c.persistence_s): np.abs(system.params["push"][:, k]).max()
        for k, c in enumerate(system.setup.columns)
    }
    assert size["interval", 0.0] > 0.5
    assert size["interval", np.inf] == size["context", 0.0] == size["context", np.inf] == 0.0
    assert not system.params["initial_factor"].any()
    assert system.params["sustained_factor"].any()


def test_the_trials_own_push_outweighs_the_noise_at_the_cue():
    system = make_system(Scenario(), seed=0)
    own = system.params["initial_factor"] @ system.params["initial_factor"].T
    noise = system.initial_covariance - own
    assert np.linalg.eigvalsh(np.linalg.solve(noise, own)).min() > 2


def test_a_model_without_drift_or_cue_response_is_drawn_without():
    model = ModelFile(n_bumps=0, drift="off")
    session, drawn = draw_session(Scenario(model=model, drift_sd=0.0, n_trials=30, n_units=8), seed=1)
    assert drawn.system.params["cue"].shape == (3, 0)
    assert drawn.system.params["drift"].shape == (8, 0)
    path = carry(
        drawn.system.params,
        drawn.system.setup,
        drawn_inputs(drawn.system.params, drawn.system.setup, drawn.system.rows, 30),
    )
    assert np.isfinite(path).all()
    assert len(session.bin()) > 25
