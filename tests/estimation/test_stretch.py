"""Stretches of the latent space."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import expm

from portfire.estimation._stretch import n_stretches, pull_through, stretch, stretch_map

D, N = 3, 5


def draw(seed: int) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(seed)
    shapes = {"readout": (N, D), "log_rate": (N,), "transition": (D, D), "offset": (D,), "cue": (D, 2)}
    shapes |= {"push": (D, 4), "initial_factor": (D, D), "sustained_factor": (D, D), "noise": ()}
    return {name: rng.normal(size=shape) for name, shape in shapes.items()}


def test_a_stretch_is_the_exponential_of_a_symmetric_matrix() -> None:
    flat = np.random.default_rng(0).normal(size=n_stretches(D))
    i, j = np.triu_indices(D)
    symmetric = np.zeros((D, D))
    symmetric[i, j] = symmetric[j, i] = np.where(i == j, flat, flat / np.sqrt(2))
    assert np.linalg.norm(symmetric) == pytest.approx(np.linalg.norm(flat))
    np.testing.assert_allclose(stretch_map(flat, D), expm(symmetric), atol=1e-12)


def test_a_stretch_leaves_log_rates_and_the_law_of_motion_alone() -> None:
    params, flat = draw(1), 0.4 * np.random.default_rng(2).normal(size=n_stretches(D))
    moved, g = stretch(params, flat), stretch_map(flat, D)
    x = np.random.default_rng(3).normal(size=D)
    np.testing.assert_allclose(moved["readout"] @ (g @ x), params["readout"] @ x, atol=1e-12)
    step = params["transition"] @ x + params["offset"] + params["push"] @ np.arange(4.0)
    again = moved["transition"] @ (g @ x) + moved["offset"] + moved["push"] @ np.arange(4.0)
    np.testing.assert_allclose(again, g @ step, atol=1e-12)
    np.testing.assert_array_equal(moved["noise"], params["noise"])


@pytest.mark.parametrize("size", [0.0, 0.5])
def test_gradients_through_a_stretch_agree_with_finite_differences(size: float) -> None:
    params, weights = draw(4), draw(5)
    flat = size * np.random.default_rng(6).normal(size=n_stretches(D))

    def value(values: dict[str, np.ndarray], along: np.ndarray) -> float:
        moved = stretch(values, along)
        return float(sum(np.sum(np.sin(moved[name]) * weights[name]) for name in moved))

    moved = stretch(params, flat)
    by_moved = {name: np.cos(moved[name]) * weights[name] for name in moved}
    before, along = pull_through(moved, flat, by_moved)
    h = 1e-6
    for k in range(n_stretches(D)):
        step = np.zeros(n_stretches(D))
        step[k] = h
        slope = (value(params, flat + step) - value(params, flat - step)) / (2 * h)
        assert along[k] == pytest.approx(slope, abs=1e-7)
    for name in ("readout", "transition", "offset", "push"):
        step = np.random.default_rng(7).normal(size=params[name].shape)
        up, down = ({**params, name: params[name] + sign * h * step} for sign in (1, -1))
        slope = (value(up, flat) - value(down, flat)) / (2 * h)
        assert np.sum(before[name] * step) == pytest.approx(slope, abs=1e-7)
