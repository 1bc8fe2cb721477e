"""Readouts: how counts arise from log rates. Each states its likelihood and three derivatives."""

from __future__ import annotations

from typing import NamedTuple, Protocol

import jax
import jax.numpy as jnp
import numpy as np
from scipy.special import gammaln

from portfire.dynamics._linear import Params


class Curvature(NamedTuple):
    """Log-likelihood of every entry and its derivatives by η, each of shape (unit, time, trial).

    ``weight`` is minus the second derivative and ``slope`` the derivative of ``weight`` by η. Terms
    that depend on the counts alone are left to `Readout.constant`.
    """

    value: jax.Array
    score: jax.Array
    weight: jax.Array
    slope: jax.Array


class Expected(NamedTuple):
    """Expected log-likelihood of every entry for Gaussian η, each of shape (unit, time, trial).

    ``score`` and ``weight`` are the expectations of the first and of minus the second derivative.
    """

    value: jax.Array
    score: jax.Array
    weight: jax.Array


class Readout(Protocol):
    """What a readout has to state; η is the log rate in spikes/s (the mean for a Gaussian)."""

    def evaluate(self, params: Params, counts: jax.Array, eta: jax.Array, bin_s: float) -> Curvature:
        """Likelihood and derivatives at η."""

    def expect(
        self, params: Params, counts: jax.Array, eta: jax.Array, spread: jax.Array, bin_s: float
    ) -> Expected:
        """Expectations for η of mean ``eta`` and variance ``spread``."""

    def expected_gradient(
        self, params: Params, counts: jax.Array, eta: jax.Array, spread: jax.Array, bin_s: float
    ) -> Params:
        """Derivative of the expected log-likelihood of every entry by the readout's own parameters."""

    def remainder(self, params: Params, eta: jax.Array, change: jax.Array, bin_s: float) -> jax.Array:
        """log p(η+change) minus its expansion to second order at η, shape of ``change``."""

    def transform(self, counts: np.ndarray) -> np.ndarray:
        """What the readout models: the counts themselves, or their square root."""

    def constant(self, counts: np.ndarray, bin_s: float) -> np.ndarray:
        """Log-likelihood terms of each entry that no parameter touches."""


class Poisson:
    """Counts are Poisson with log link: y ~ Poisson(Δ exp(η))."""

    def evaluate(self, params: Params, counts: jax.Array, eta: jax.Array, bin_s: float) -> Curvature:
        mean = bin_s * jnp.exp(eta)
        return Curvature(counts * eta - mean, counts - mean, mean, mean)

    def expect(
        self, params: Params, counts: jax.Array, eta: jax.Array, spread: jax.Array, bin_s: float
    ) -> Expected:
        mean = bin_s * jnp.exp(eta + 0.5 * spread)
        return Expected(counts * eta - mean, counts - mean, mean)

    def expected_gradient(
        self, params: Params, counts: jax.Array, eta: jax.Array, spread: jax.Array, bin_s: float
    ) -> Params:
        return {}

    def remainder(self, params: Params, eta: jax.Array, change: jax.Array, bin_s: float) -> jax.Array:
        mean = bin_s * jnp.exp(eta)
        return -mean * (jnp.expm1(change) - change - 0.5 * change * change)

    def transform(self, counts: np.ndarray) -> np.ndarray:
        return counts

    def constant(self, counts: np.ndarray, bin_s: float) -> np.ndarray:
        return counts * np.log(bin_s) - gammaln(counts + 1.0)


class Gaussian:
    """Square-root counts (or any real data) are Gaussian: y ~ N(η, σ_n²)."""

    def evaluate(self, params: Params, counts: jax.Array, eta: jax.Array, bin_s: float) -> Curvature:
        log_variance = params["log_variance"][:, None, None]
        precision = jnp.exp(-log_variance) + jnp.zeros_like(eta)
        error = counts - eta
        value = -0.5 * (error * error * precision + log_variance + jnp.log(2 * jnp.pi))
        return Curvature(value, error * precision, precision, jnp.zeros_like(eta))

    def expect(
        self, params: Params, counts: jax.Array, eta: jax.Array, spread: jax.Array, bin_s: float
    ) -> Expected:
        at_mean = self.evaluate(params, counts, eta, bin_s)
        return Expected(at_mean.value - 0.5 * spread * at_mean.weight, at_mean.score, at_mean.weight)

    def expected_gradient(
        self, params: Params, counts: jax.Array, eta: jax.Array, spread: jax.Array, bin_s: float
    ) -> Params:
        precision = jnp.exp(-params["log_variance"])[:, None, None]
        return {"log_variance": 0.5 * (precision * ((counts - eta) ** 2 + spread) - 1)}

    def remainder(self, params: Params, eta: jax.Array, change: jax.Array, bin_s: float) -> jax.Array:
        return jnp.zeros_like(change)

    def transform(self, counts: np.ndarray) -> np.ndarray:
        return np.sqrt(counts)

    def constant(self, counts: np.ndarray, bin_s: float) -> np.ndarray:
        return np.zeros(counts.shape)


READOUTS: dict[str, Readout] = {"poisson": Poisson(), "gaussian": Gaussian()}
