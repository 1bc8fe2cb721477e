"""Readouts: how counts arise from log rates. Each states its likelihood and three derivatives."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import NamedTuple, Protocol

import jax
import jax.numpy as jnp
import numpy as np
from jax.scipy.special import gammaln as gammaln_of
from scipy.special import gammaln

from portfire.dynamics._linear import Params

# Gauss–Hermite nodes of a standard normal, with their masses.
_PLACES, _MASSES = np.polynomial.hermite_e.hermegauss(9)
_NODES = [(float(at), float(mass)) for at, mass in zip(_PLACES, _MASSES / _MASSES.sum(), strict=True)]


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
    """What a readout has to state; η is the log rate in spikes/s (the mean for a Gaussian).

    Attributes
    ----------
    own : tuple of str
        Names of the readout's own parameters, each with one value a unit.
    of_counts : bool
        Whether its likelihood is that of the counts themselves, so that it may be compared with others.
    """

    own: tuple[str, ...]
    of_counts: bool

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

    def remainder(
        self, params: Params, counts: jax.Array, eta: jax.Array, change: jax.Array, bin_s: float
    ) -> jax.Array:
        """log p(η+change) minus its expansion to second order at η, shape of ``change``."""

    def transform(self, counts: np.ndarray) -> np.ndarray:
        """What the readout models: the counts themselves, or their square root."""

    def constant(self, counts: np.ndarray, bin_s: float) -> np.ndarray:
        """Log-likelihood terms of each entry that no parameter touches."""

    def start(self, counts: np.ndarray) -> dict[str, np.ndarray]:
        """Starting values of its own parameters from counts (entry, unit)."""

    def information(
        self, params: dict[str, np.ndarray], eta: np.ndarray, bin_s: float
    ) -> tuple[np.ndarray, dict[str, np.ndarray]]:
        """Expected information by η (entry, unit), and by its own parameters summed over entries (unit,)."""

    def draw(self, params: dict[str, np.ndarray], mean: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        """Counts of these means (entry, unit); a readout that is not of counts need not be drawn from."""


def differentiate(function: Callable[[Params], jax.Array], params: Params, names: tuple[str, ...]) -> Params:
    """Derivative of every entry by its unit's value of each of these parameters."""
    return {
        name: jax.jvp(
            lambda value, name=name: function({**params, name: value}),
            (params[name],),
            (jnp.ones_like(params[name]),),
        )[1]
        for name in names
    }


def own_gradient(
    readout: Readout,
    params: Params,
    counts: jax.Array,
    eta: jax.Array,
    spread: jax.Array,
    turn: jax.Array,
    bin_s: float,
) -> Params:
    """What every entry adds to the gradient of the Laplace value by the readout's own parameters.

    Parameters
    ----------
    spread : array, shape (unit, time, trial)
        Posterior variance of η.
    turn : array, shape (unit, time, trial)
        Movement of η that stands for the mode's own: the solve with the gradient of the log determinant.
    """

    def entries(moved: Params) -> jax.Array:
        at = readout.evaluate(moved, counts, eta, bin_s)
        return at.value - 0.5 * spread * at.weight + turn * at.score

    return differentiate(entries, params, readout.own)


class Poisson:
    """Counts are Poisson with log link: y ~ Poisson(Δ exp(η))."""

    own: tuple[str, ...] = ()
    of_counts = True

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

    def remainder(
        self, params: Params, counts: jax.Array, eta: jax.Array, change: jax.Array, bin_s: float
    ) -> jax.Array:
        mean = bin_s * jnp.exp(eta)
        return -mean * (jnp.expm1(change) - change - 0.5 * change * change)

    def transform(self, counts: np.ndarray) -> np.ndarray:
        return counts

    def constant(self, counts: np.ndarray, bin_s: float) -> np.ndarray:
        return counts * np.log(bin_s) - gammaln(counts + 1.0)

    def start(self, counts: np.ndarray) -> dict[str, np.ndarray]:
        return {}

    def information(
        self, params: dict[str, np.ndarray], eta: np.ndarray, bin_s: float
    ) -> tuple[np.ndarray, dict[str, np.ndarray]]:
        return bin_s * np.exp(eta), {}

    def draw(self, params: dict[str, np.ndarray], mean: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        return rng.poisson(mean)


def _log_rising(counts: jax.Array, log_size: jax.Array) -> jax.Array:
    """log Γ(y+φ) − log Γ(φ) − y log φ, which is 0 for φ → ∞: by Stirling's series where φ is large."""
    size = jnp.exp(log_size)
    large = size > 100.0
    near = jnp.where(large, 1.0, size)
    plain = gammaln_of(counts + near) - gammaln_of(near) - counts * jnp.log(near)
    far = jnp.where(large, size, 1e3)
    whole = far + counts

    def tail(z: jax.Array) -> jax.Array:
        return (1 / 12 - 1 / (360 * z * z)) / z

    series = (whole - 0.5) * jnp.log1p(counts / far) - counts + tail(whole) - tail(far)
    return jnp.where(large, series, plain)


class NegativeBinomial:
    """Overdispersed counts with log link: y of mean μ = Δ exp(η) and variance μ + μ²/φ_n.

    φ_n = exp(log_dispersion) is the unit's own; φ → ∞ is Poisson. With a = log(μ/φ) the log-likelihood is
    y η − (y + φ) log(1 + eᵃ) + terms without η, so it is concave in η for every count: minus its
    second derivative (y + φ) s (1 − s), s = μ/(φ + μ), is never negative. What is used is therefore this
    observed information and not the expected one, φ s: Newton's method then finds the one mode, log|H| is
    that of the log posterior itself, and the expansion at the mode is the true one.

    References
    ----------
    Lawless 1987, Can. J. Stat. 15:209 (from memory).
    """

    own: tuple[str, ...] = ("log_dispersion",)
    of_counts = True

    def _shares(
        self, params: Params, counts: jax.Array, eta: jax.Array, bin_s: float
    ) -> tuple[jax.Array, jax.Array]:
        """log(μ/φ), and y + φ."""
        log_size = params["log_dispersion"][:, None, None]
        return eta - log_size + math.log(bin_s), counts + jnp.exp(log_size)

    def evaluate(self, params: Params, counts: jax.Array, eta: jax.Array, bin_s: float) -> Curvature:
        odds, both = self._shares(params, counts, eta, bin_s)
        share = jax.nn.sigmoid(odds)
        weight = both * share * jax.nn.sigmoid(-odds)
        value = counts * eta - both * jax.nn.softplus(odds)
        value = value + _log_rising(counts, params["log_dispersion"][:, None, None])
        return Curvature(value, counts - both * share, weight, weight * (1 - 2 * share))

    def expect(
        self, params: Params, counts: jax.Array, eta: jax.Array, spread: jax.Array, bin_s: float
    ) -> Expected:
        """By Gauss–Hermite quadrature of nine nodes, off by less than 1e-9 (y + φ) up to an SD of 0.5."""
        odds, both = self._shares(params, counts, eta, bin_s)
        sd = jnp.sqrt(jnp.maximum(spread, 0.0))
        level, share, weight = (jnp.zeros_like(eta) for _ in range(3))
        for node, mass in _NODES:
            at = odds + node * sd
            now = jax.nn.sigmoid(at)
            level = level + mass * jax.nn.softplus(at)
            share = share + mass * now
            weight = weight + mass * now * jax.nn.sigmoid(-at)
        value = counts * eta - both * level + _log_rising(counts, params["log_dispersion"][:, None, None])
        return Expected(value, counts - both * share, both * weight)

    def expected_gradient(
        self, params: Params, counts: jax.Array, eta: jax.Array, spread: jax.Array, bin_s: float
    ) -> Params:
        return differentiate(
            lambda moved: self.expect(moved, counts, eta, spread, bin_s).value, params, self.own
        )

    def remainder(
        self, params: Params, counts: jax.Array, eta: jax.Array, change: jax.Array, bin_s: float
    ) -> jax.Array:
        odds, both = self._shares(params, counts, eta, bin_s)
        share, rest = jax.nn.sigmoid(odds), jax.nn.sigmoid(-odds)
        beyond = jnp.log1p(share * jnp.expm1(change)) - share * change * (1 + 0.5 * rest * change)
        return -both * beyond

    def transform(self, counts: np.ndarray) -> np.ndarray:
        return counts

    def constant(self, counts: np.ndarray, bin_s: float) -> np.ndarray:
        return counts * np.log(bin_s) - gammaln(counts + 1.0)

    def start(self, counts: np.ndarray) -> dict[str, np.ndarray]:
        # Half of what exceeds Poisson over the whole session; the latent state will explain the rest.
        mean = counts.mean(axis=0) + 1e-3
        excess = 0.5 * (counts.var(axis=0) - mean) / mean**2
        return {"log_dispersion": -np.log(np.clip(excess, 0.02, 2.0))}

    def information(
        self, params: dict[str, np.ndarray], eta: np.ndarray, bin_s: float
    ) -> tuple[np.ndarray, dict[str, np.ndarray]]:
        size = np.exp(params["log_dispersion"])
        share = 1.0 / (1.0 + size * np.exp(-eta) / bin_s)
        # About half of s² an entry for small μ (the variance of y(y - 1) - 2μy is 2μ²); a unit without
        # any is kept from steps without bound by one entry's worth.
        return size * share, {"log_dispersion": 1.0 + 0.5 * (share**2).sum(axis=0)}

    def draw(self, params: dict[str, np.ndarray], mean: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        size = np.broadcast_to(np.exp(params["log_dispersion"]), mean.shape)
        return rng.poisson(mean * rng.gamma(size) / size)


class Gaussian:
    """Square-root counts (or any real data) are Gaussian: y ~ N(η, σ_n²)."""

    own: tuple[str, ...] = ("log_variance",)
    of_counts = False

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

    def remainder(
        self, params: Params, counts: jax.Array, eta: jax.Array, change: jax.Array, bin_s: float
    ) -> jax.Array:
        return jnp.zeros_like(change)

    def transform(self, counts: np.ndarray) -> np.ndarray:
        return np.sqrt(counts)

    def constant(self, counts: np.ndarray, bin_s: float) -> np.ndarray:
        return np.zeros(counts.shape)

    def start(self, counts: np.ndarray) -> dict[str, np.ndarray]:
        return {"log_variance": np.log(np.var(np.sqrt(counts), axis=0) + 1e-3)}

    def information(
        self, params: dict[str, np.ndarray], eta: np.ndarray, bin_s: float
    ) -> tuple[np.ndarray, dict[str, np.ndarray]]:
        weight = np.broadcast_to(np.exp(-params["log_variance"]), eta.shape)
        return weight, {"log_variance": np.full(eta.shape[1], 0.5 * len(eta))}

    def draw(self, params: dict[str, np.ndarray], mean: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        raise NotImplementedError("square-root counts are not drawn: they need not be whole numbers")


READOUTS: dict[str, Readout] = {
    "poisson": Poisson(),
    "negative_binomial": NegativeBinomial(),
    "gaussian": Gaussian(),
}
