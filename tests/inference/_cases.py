"""Models and chunks built from raw arrays, and a dense Gaussian computation to hold them against."""

from __future__ import annotations

from dataclasses import dataclass

import jax
import jax.numpy as jnp
import numpy as np
from scipy.special import gammaln

from portfire.accounts import Column
from portfire.dynamics import READOUTS, ModelFile, Setup, parameter_shapes
from portfire.inference import Chunk, Sampled

INFINITE = float("inf")


@dataclass(frozen=True)
class Case:
    """Parameters, setup and chunk that go together."""

    params: dict[str, jax.Array]
    setup: Setup
    chunk: Chunk

    def with_params(self, **new: np.ndarray) -> Case:
        """The same case with some parameters replaced."""
        return Case({**self.params, **{k: jnp.asarray(v) for k, v in new.items()}}, self.setup, self.chunk)

    def with_chunk(self, **new: np.ndarray) -> Case:
        """The same case with parts of its chunk replaced."""
        return Case(
            self.params, self.setup, self.chunk._replace(**{k: jnp.asarray(v) for k, v in new.items()})
        )


def make_chunk(
    counts: np.ndarray,
    mask: np.ndarray | None = None,
    rows: np.ndarray | None = None,
    drift: np.ndarray | None = None,
    readout: str = "poisson",
    bin_s: float = 1.0,
) -> Chunk:
    """A chunk of lanes from counts (unit, time, lane); every lane is a trial at its own place."""
    _, n_time, n_lanes = counts.shape
    mask = np.ones((n_time, n_lanes)) if mask is None else np.asarray(mask, dtype=float)
    counts = counts * mask
    constant = (READOUTS[readout].constant(counts, bin_s) * mask).sum(axis=(0, 1))
    empty = np.zeros((0, n_lanes))
    chunk = Chunk(
        counts,
        mask,
        empty if rows is None else rows,
        empty if drift is None else drift,
        np.ones(n_lanes),
        constant,
        np.arange(n_lanes),
    )
    return Chunk(*(jnp.asarray(leaf) for leaf in chunk))


def simple_case(
    observed: np.ndarray,
    readout_matrix: np.ndarray,
    log_rate: np.ndarray,
    transition: np.ndarray,
    noise: float,
    initial_cov: np.ndarray,
    n_lanes: int,
    readout: str = "poisson",
    name: str = "simple",
    **extra: np.ndarray,
) -> Case:
    """x_0 ~ N(0, initial_cov), x' = A x + N(0, noise), the same observations (time, unit) in every lane."""
    n_time, n_units = observed.shape
    d = len(transition)
    model = ModelFile(name=name, readout=readout, n_bumps=0, initial_noise_s=1.0)
    setup = Setup(model, d, n_units, 1.0, 0, n_time, (), ("trial",), 0)
    params = {key: np.zeros(shape) for key, shape in parameter_shapes(setup).items()}
    # The state at the set cue always carries one step's noise; the rest of its covariance is its own.
    values, vectors = np.linalg.eigh(initial_cov - noise * np.eye(d))
    own = vectors * np.sqrt(values)
    params.update(
        readout=readout_matrix,
        log_rate=log_rate,
        transition=transition,
        noise=np.array(noise),
        initial_factor=own,
    )
    params.update(extra)
    counts = np.repeat(observed.T[:, :, None], n_lanes, axis=2)
    return Case(
        {k: jnp.asarray(v, float) for k, v in params.items()}, setup, make_chunk(counts, readout=readout)
    )


def autoregressive_case(
    counts: np.ndarray, coefficient: float, sd: float, n_lanes: int, log_rate: float = 0.0
) -> Case:
    """One Poisson unit whose log rate is a stationary first-order autoregression."""
    one = np.ones((1, 1))
    initial = sd**2 / (1 - coefficient**2) * one
    return simple_case(counts[:, None], one, np.array([log_rate]), coefficient * one, sd**2, initial, n_lanes)


def rich_case(readout: str, n_before: int, seed: int = 0, name: str = "rich") -> Case:
    """All parts of the model at once: drift, cue response, pushes, both trial-to-trial covariances, masks."""
    rng = np.random.default_rng(seed)
    d, n, n_after, n_lanes, n_drift = 2, 4, 7, 3, 2
    bin_s = 0.02
    columns = tuple(
        Column(source, level, h)
        for h in (0.0, INFINITE)
        for source, level in (("interval", "sample"), ("context", "low"))
    )
    model = ModelFile(name=name, readout=readout, n_bumps=2, initial_noise_s=0.06, cue_duration_s=0.08)
    setup = Setup(model, d, n, bin_s, n_before, 6, columns, ("interval", "context", "trial"), n_drift)
    params = {key: 0.2 * rng.normal(size=shape) for key, shape in parameter_shapes(setup).items()}
    params["transition"] = 0.9 * np.eye(d) + 0.1 * rng.normal(size=(d, d))
    params["noise"] = np.array(0.02)
    params["readout"] *= 4
    params["log_rate"] += 3.5
    params["sustained_factor"] *= 4
    params["push"] *= 2
    if n_before:
        params["log_run_up_noise"] = np.array(np.log(0.01))
    n_time = n_before + n_after
    mask = np.ones((n_time, n_lanes))
    mask[-2:, 1] = 0
    mask[-4:, 2] = 0
    mask[n_before + 1, 2] = 0
    if READOUTS[readout].of_counts:
        counts = rng.poisson(0.8, size=(n, n_time, n_lanes)).astype(float)
    else:
        counts = 3.5 + rng.normal(size=(n, n_time, n_lanes))
    chunk = make_chunk(
        counts,
        mask,
        rng.normal(size=(len(columns), n_lanes)),
        rng.normal(size=(n_drift, n_lanes)),
        readout,
        bin_s,
    )
    return Case({k: jnp.asarray(v, float) for k, v in params.items()}, setup, chunk)


@dataclass(frozen=True)
class Dense:
    """Exact law of one lane's path and border given its observations, and the log-likelihood."""

    loglik: float
    x: np.ndarray
    e: np.ndarray
    covariance: np.ndarray
    cross: np.ndarray
    border: np.ndarray


def solve_dense(case: Case, lane: int) -> Dense:
    """Condition one big Gaussian, built from the model's own equations rather than from its precision."""
    p = {k: np.asarray(v) for k, v in case.params.items()}
    setup, chunk = case.setup, case.chunk
    d, before = setup.latent_dim, setup.n_before
    n_time = chunk.mask.shape[0]
    n_after = n_time - before
    a, q = p["transition"], float(p["noise"])
    accumulated = sum(
        q * np.linalg.matrix_power(a, k) @ np.linalg.matrix_power(a, k).T for k in range(setup.initial_bins)
    )
    initial_cov = accumulated + p["initial_factor"] @ p["initial_factor"].T
    lasting = np.ones(n_after) / setup.n_reference
    rows = np.asarray(chunk.rows)[:, lane]
    kernels = [lasting if column.persistence_s > 0 else np.eye(n_after)[0] for column in setup.columns]
    pushes = sum(
        (p["push"][:, [k]] * rows[k] * kernels[k] for k in range(len(kernels))), np.zeros((d, n_after))
    )
    cue = p["cue"] @ setup.cue_basis(n_after)
    # The path is a linear map of independent standard normals: e, initial state, steps after, steps before.
    n_noise = d + d + d * (n_time - 1)
    mean, maps = np.zeros((n_time, d)), np.zeros((n_time, d, n_noise))
    border = np.zeros((d, n_noise))
    border[:, :d] = np.eye(d)
    mean[before] = pushes[:, 0]
    maps[before] = lasting[0] * p["sustained_factor"] @ border
    maps[before][:, d : 2 * d] += np.linalg.cholesky(initial_cov)
    column = 2 * d
    for t in range(1, n_after):
        now = before + t
        mean[now] = a @ mean[now - 1] + p["offset"] + cue[:, t] + pushes[:, t]
        maps[now] = a @ maps[now - 1] + lasting[t] * p["sustained_factor"] @ border
        maps[now][:, column : column + d] += np.sqrt(q) * np.eye(d)
        column += d
    for now in range(before - 1, -1, -1):
        mean[now] = mean[now + 1]
        maps[now] = maps[now + 1]
        maps[now][:, column : column + d] += np.exp(0.5 * p["log_run_up_noise"]) * np.eye(d)
        column += d
    seen = np.asarray(chunk.mask)[:, lane] > 0
    offset = p["log_rate"] + p["drift"] @ np.asarray(chunk.drift)[:, lane]
    look = np.einsum("ni,tik->tnk", p["readout"], maps[seen]).reshape(-1, n_noise)
    expected = (mean[seen] @ p["readout"].T + offset).ravel()
    variance = np.tile(np.exp(p["log_variance"]), seen.sum())
    error = np.asarray(chunk.counts)[:, :, lane].T[seen].ravel() - expected
    spread = look @ look.T + np.diag(variance)
    weighted = np.linalg.solve(spread, error)
    loglik = -0.5 * (error @ weighted + np.linalg.slogdet(spread)[1] + len(error) * np.log(2 * np.pi))
    noise_mean = look.T @ weighted
    noise_cov = np.eye(n_noise) - look.T @ np.linalg.solve(spread, look)
    flat = maps.reshape(-1, n_noise)
    cov = (flat @ noise_cov @ flat.T).reshape(n_time, d, n_time, d)
    return Dense(
        float(loglik),
        mean + (maps @ noise_mean),
        noise_mean[:d],
        cov,
        (flat @ noise_cov[:, :d]).reshape(n_time, d, d),
        noise_cov[:d, :d],
    )


def log_factorials(counts: np.ndarray) -> float:
    """Sum of log y! (nats)."""
    return float(gammaln(counts + 1).sum())


def check_sampled(sampled: Sampled, exact: float) -> None:
    """One lane's score is within 3 standard errors of exact, and the likelihood is unbiased over lanes."""
    loglik, se = np.asarray(sampled.loglik), np.asarray(sampled.se)
    assert abs(loglik[0] - exact) < 3 * se[0]
    # The weights' tail is heavy: some lanes miss it, and their standard errors are too small, but over
    # lanes the mean square error is what the standard errors say.
    assert np.mean(np.abs(loglik - exact) < 3 * se) > 0.85
    assert 0.6 < np.sqrt(np.mean(se**2) / np.mean((loglik - exact) ** 2)) < 1.6
    ratio = np.exp(np.asarray(sampled.raw) - exact)
    assert abs(ratio.mean() - 1) < 3 * ratio.std(ddof=1) / np.sqrt(len(ratio))
