"""Coordinates of the latent space: canonical form, and predictions that do not hang on it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from portfire.estimation import Fit, predict_rates
from portfire.estimation._gauge import canonical_map
from portfire.estimation._objective import to_device
from portfire.inference import fit_bound, laplace, pack, start_guess, start_path


def moved(fitted: Fit, change: np.ndarray, noise: float) -> Fit:
    """The same model in the coordinates ``change @ x``; a turn times a scale keeps the noise q·I."""
    p, back = fitted.params, np.linalg.inv(change)
    params = {
        **p,
        "readout": p["readout"] @ back,
        "transition": change @ p["transition"] @ back,
        "noise": np.array(noise),
    }
    params |= {
        name: change @ p[name] for name in ("offset", "cue", "push", "initial_factor", "sustained_factor")
    }
    return replace(fitted, params=params, canonical=fitted.canonical @ back)


@pytest.fixture(scope="module")
def turned(full):
    angle, scale = 0.8, 3.0
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    flip = np.diag([1.0, -1.0])
    return moved(full, scale * turn @ flip, scale**2 * float(full.params["noise"]))


def test_canonical_readout_is_orthonormal_and_ordered(world, full):
    trials, _ = world
    readout = full.params["readout"] @ np.linalg.inv(full.canonical)
    np.testing.assert_allclose(readout.T @ readout, np.eye(2), atol=1e-10)
    assert (readout.sum(axis=0) >= 0).all()
    state = full.infer(trials)["state"].values[trials.mask]
    variance = state.var(axis=0)
    assert variance[0] > variance[1]
    # Orthonormal columns: the variance of a latent is the log-rate variance that it explains, and the
    # covariance between latents is nil.
    log_rate = state @ readout.T
    assert log_rate.var(axis=0).sum() == pytest.approx(variance.sum())
    # The axes come from posterior means, the states here are modes: nil but for that difference.
    assert abs(np.corrcoef(state.T)[0, 1]) < 2e-3


def test_posteriors_do_not_hang_on_the_coordinates(world, full, turned):
    trials = world[0][:24]
    for until_s in (None, 0.24):
        one, other = full.infer(trials, until_s), turned.infer(trials, until_s)
        for name in one:
            np.testing.assert_allclose(other[name], one[name], rtol=1e-6, atol=1e-6, err_msg=str(name))


def test_likelihoods_do_not_hang_on_the_coordinates(world, full, turned):
    trials = world[0][:24]
    values = []
    for fitted in (full, turned):
        packed = pack(trials, fitted.setup)
        chunk = packed.chunks[0]
        found = laplace(to_device(fitted.params), fitted.setup, chunk, start_path(fitted.setup, chunk))
        values.append(np.asarray(found.value)[: len(trials)])
    np.testing.assert_allclose(values[1], values[0], rtol=1e-9, atol=1e-6)
    one, other = full.score(trials), turned.score(trials)
    gap = np.abs(one["loglik"] - other["loglik"])
    assert (gap < 5 * np.hypot(one["loglik_se"], other["loglik_se"]) + 1e-6).all()


def test_rates_do_not_hang_on_the_coordinates(world, full, turned):
    trials, _ = world
    one, other = predict_rates(full, trials, 40, 0)[0], predict_rates(turned, trials, 40, 1)[0]
    seen = np.isfinite(one) & np.isfinite(other)
    assert np.abs(np.log(one[seen] / other[seen])).mean() < 0.05


def test_canonical_map_is_found_again_in_other_coordinates(world, full, turned):
    trials, _ = world
    maps = []
    for fitted in (full, turned):
        packed = pack(trials, fitted.setup)
        paths = [
            fit_bound(to_device(fitted.params), fitted.setup, chunk, start_guess(fitted.setup, chunk)).mean
            for chunk in packed.chunks
        ]
        maps.append(canonical_map(fitted.params["readout"], paths, packed))
    np.testing.assert_allclose(maps[0], full.canonical, rtol=1e-4, atol=1e-6)
    np.testing.assert_allclose(maps[1], turned.canonical, rtol=1e-4, atol=1e-6)
