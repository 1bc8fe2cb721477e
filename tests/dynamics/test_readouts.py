"""Readouts: likelihoods against scipy, derivatives against differences, expectations against quadrature."""

from __future__ import annotations

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy.stats import nbinom, norm, poisson

import portfire.inference  # noqa: F401 - turns on double precision
from portfire.dynamics import READOUTS, own_gradient, read_model
from portfire.errors import InputError

BIN_S = 0.02
COUNTS = np.array([0.0, 1.0, 2.0, 5.0, 40.0])
ETA = np.array([-1.0, 2.0, 3.5, 5.0, 7.0])
DISPERSIONS = [0.05, 0.7, 3.0, 50.0, 99.0, 101.0, 1e4]


def entries(values: np.ndarray) -> jax.Array:
    """Every value with every other, one unit: (1, count, rate)."""
    return jnp.asarray(values)[None]


def grid() -> tuple[jax.Array, jax.Array]:
    counts, eta = np.meshgrid(COUNTS, ETA, indexing="ij")
    return entries(counts), entries(eta)


def own(readout: str, value: float) -> dict[str, jax.Array]:
    return {name: jnp.array([value]) for name in READOUTS[readout].own}


def test_model_files_know_every_readout() -> None:
    for name in READOUTS:
        assert read_model({"model": {"readout": name}}).readout == name
    with pytest.raises(InputError, match="should be one of poisson, negative_binomial, gaussian"):
        read_model({"model": {"readout": "binomial"}})


@pytest.mark.parametrize("dispersion", DISPERSIONS)
def test_negative_binomial_is_that_of_scipy(dispersion: float) -> None:
    readout = READOUTS["negative_binomial"]
    counts, eta = grid()
    found = readout.evaluate(own("negative_binomial", np.log(dispersion)), counts, eta, BIN_S).value
    found = found + readout.constant(np.asarray(counts), BIN_S)
    mean = BIN_S * np.exp(np.asarray(eta))
    expected = nbinom.logpmf(np.asarray(counts), dispersion, dispersion / (dispersion + mean))
    np.testing.assert_allclose(found, expected, rtol=1e-10, atol=1e-10)
    assert nbinom.var(dispersion, dispersion / (dispersion + 3.0)) == pytest.approx(3 + 9 / dispersion)


def test_negative_binomial_without_dispersion_is_poisson() -> None:
    negative, plain = READOUTS["negative_binomial"], READOUTS["poisson"]
    counts, eta = grid()
    spread, change = jnp.full(eta.shape, 0.2), jnp.full(eta.shape, -0.7)
    for log_size in (25.0, 60.0):
        params = own("negative_binomial", log_size)
        for name in ("value", "score", "weight", "slope"):
            np.testing.assert_allclose(
                getattr(negative.evaluate(params, counts, eta, BIN_S), name),
                getattr(plain.evaluate({}, counts, eta, BIN_S), name),
                rtol=1e-6,
                atol=1e-6,
                err_msg=name,
            )
        for name in ("value", "score", "weight"):
            np.testing.assert_allclose(
                getattr(negative.expect(params, counts, eta, spread, BIN_S), name),
                getattr(plain.expect({}, counts, eta, spread, BIN_S), name),
                rtol=1e-6,
                atol=1e-6,
                err_msg=name,
            )
        np.testing.assert_allclose(
            negative.remainder(params, counts, eta, change, BIN_S),
            plain.remainder({}, counts, eta, change, BIN_S),
            rtol=1e-6,
        )
        (slope,) = negative.expected_gradient(params, counts, eta, spread, BIN_S).values()
        assert np.abs(slope).max() < 1e-3
    mean = BIN_S * np.exp(np.asarray(eta))
    found = plain.evaluate({}, counts, eta, BIN_S).value + plain.constant(np.asarray(counts), BIN_S)
    np.testing.assert_allclose(found, poisson.logpmf(np.asarray(counts), mean), rtol=1e-10)


@pytest.mark.parametrize("name", list(READOUTS))
def test_derivatives_agree_with_differences(name: str) -> None:
    readout, params, step = READOUTS[name], own(name, 0.4), 1e-5
    counts, eta = grid()
    at = readout.evaluate(params, counts, eta, BIN_S)
    up, down = (readout.evaluate(params, counts, eta + sign * step, BIN_S) for sign in (1, -1))
    scale = 1 + np.abs(np.asarray(at.weight)).max()
    for found, high, low in (
        (at.score, up.value, down.value),
        (-at.weight, up.score, down.score),
        (at.slope, up.weight, down.weight),
    ):
        np.testing.assert_allclose(found, (high - low) / (2 * step), rtol=1e-6, atol=1e-7 * scale)
    # Concave, so that a path has one mode.
    assert np.asarray(at.weight).min() >= 0


@pytest.mark.parametrize("name", list(READOUTS))
def test_remainder_is_what_the_expansion_lacks(name: str) -> None:
    readout, params = READOUTS[name], own(name, 0.4)
    counts, eta = grid()
    at = readout.evaluate(params, counts, eta, BIN_S)
    for change in (-1.5, 0.03, 0.8):
        moved = readout.evaluate(params, counts, eta + change, BIN_S).value
        expected = moved - at.value - at.score * change + 0.5 * at.weight * change**2
        found = readout.remainder(params, counts, eta, jnp.full(eta.shape, change), BIN_S)
        np.testing.assert_allclose(found, expected, rtol=1e-8, atol=1e-9)
        low = {key: value.astype(jnp.float32) for key, value in params.items()}
        single = [jnp.asarray(part, jnp.float32) for part in (counts, eta, jnp.full(eta.shape, change))]
        coarse = readout.remainder(low, *single, BIN_S)
        assert coarse.dtype == jnp.float32
        # A term of the expansion is the size of what single precision can round off.
        size = np.asarray((at.weight + jnp.abs(at.score)) * abs(change) + 1)
        assert np.all(np.abs(np.asarray(coarse) - np.asarray(expected)) < 1e-5 * size)


@pytest.mark.parametrize("name", list(READOUTS))
@pytest.mark.parametrize("sd", [0.0, 0.3, 0.8])
def test_expectations_agree_with_integrals(name: str, sd: float) -> None:
    readout, params = READOUTS[name], own(name, 0.4)
    counts, eta = grid()
    found = readout.expect(params, counts, eta, jnp.full(eta.shape, sd**2), BIN_S)
    z = np.linspace(-8, 8, 4001)
    mass = norm.pdf(z) * (z[1] - z[0])
    for at in ((0, 0, 1), (0, 2, 3), (0, 4, 2)):
        along = eta[at] + sd * jnp.asarray(z)[None, None]
        moved = readout.evaluate(params, jnp.broadcast_to(counts[at], along.shape), along, BIN_S)
        for part in ("value", "score", "weight"):
            expected = float(mass @ np.asarray(getattr(moved, part))[0, 0])
            assert float(getattr(found, part)[at]) == pytest.approx(expected, rel=2e-6, abs=2e-6), part


@pytest.mark.parametrize("name", [name for name, readout in READOUTS.items() if readout.own])
def test_own_gradients_agree_with_differences(name: str) -> None:
    readout, step = READOUTS[name], 1e-5
    (own_name,) = readout.own
    counts, eta = grid()
    spread, turn = jnp.full(eta.shape, 0.3), jnp.full(eta.shape, -0.2)

    def expected(value: float) -> np.ndarray:
        return np.asarray(readout.expect(own(name, value), counts, eta, spread, BIN_S).value)

    def laplace(value: float) -> np.ndarray:
        at = readout.evaluate(own(name, value), counts, eta, BIN_S)
        return np.asarray(at.value - 0.5 * spread * at.weight + turn * at.score)

    # On both sides of where the series takes over, too.
    for value in (0.4, np.log(99.9), np.log(100.1)):
        params = own(name, value)
        for function, found in (
            (expected, readout.expected_gradient(params, counts, eta, spread, BIN_S)),
            (laplace, own_gradient(readout, params, counts, eta, spread, turn, BIN_S)),
        ):
            numeric = (function(value + step) - function(value - step)) / (2 * step)
            np.testing.assert_allclose(found[own_name], numeric, rtol=1e-5, atol=1e-5)


def test_drawn_counts_have_the_mean_and_variance_that_is_said() -> None:
    rng = np.random.default_rng(0)
    mean, size = np.tile([0.3, 4.0], (40_000, 1)), np.array([0.8, 5.0])
    drawn = READOUTS["negative_binomial"].draw({"log_dispersion": np.log(size)}, mean, rng)
    variance = mean[0] + mean[0] ** 2 / size
    np.testing.assert_allclose(drawn.mean(axis=0), mean[0], atol=5 * np.sqrt(variance.max() / 40_000))
    np.testing.assert_allclose(drawn.var(axis=0), variance, rtol=0.06)
    start = READOUTS["negative_binomial"].start(drawn.astype(float))["log_dispersion"]
    # Half of what exceeds Poisson.
    np.testing.assert_allclose(start, np.log(2 * size), atol=0.2)


def test_information_is_the_expected_one() -> None:
    size, eta = 2.0, np.log(0.6 / BIN_S)
    weight, own_information = READOUTS["negative_binomial"].information(
        {"log_dispersion": np.log([size])}, np.array([[eta]]), BIN_S
    )
    counts = np.arange(200.0)
    mass = nbinom.pmf(counts, size, size / (size + 0.6))
    observed = READOUTS["negative_binomial"].evaluate(
        own("negative_binomial", np.log(size)), entries(counts[None]), entries(np.full((1, 200), eta)), BIN_S
    )
    assert weight[0, 0] == pytest.approx(float(mass @ np.asarray(observed.weight)[0, 0]), rel=1e-9)
    assert own_information["log_dispersion"].shape == (1,)
