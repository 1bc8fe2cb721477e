"""Trials of a given size, drawn from linear dynamics with known parameters."""

from __future__ import annotations

from dataclasses import dataclass, replace

import jax
import numpy as np

from portfire.accounts import make_design
from portfire.dynamics import (
    Params,
    Setup,
    initial_covariance,
    make_setup,
    parameter_shapes,
    path_inputs,
    path_prior,
    read_model,
)
from portfire.estimation._objective import to_device
from portfire.inference import Packed, pack
from portfire.session import Trials

BIN_S = 0.02
SAMPLES_S = (0.5, 0.7, 0.9)
CONTEXTS = ("high", "low", "mid")


@dataclass(frozen=True)
class Sizes:
    """How large a problem is; every trial has all bins."""

    n_trials: int
    n_bins: int
    n_units: int
    latent_dim: int


@dataclass(frozen=True)
class Problem:
    """Trials with the parameters that they were drawn from.

    Parameters
    ----------
    sizes : Sizes
    trials : Trials
    setup : Setup
    params : dict of arrays
    packed : Packed
    """

    sizes: Sizes
    trials: Trials
    setup: Setup
    params: Params
    packed: Packed


def make_problem(sizes: Sizes, seed: int = 0) -> Problem:
    """Draw a problem: three sample intervals, three contexts, slow drift, all pushes by both routes."""
    rng = np.random.default_rng(seed)
    empty = _blank_trials(sizes, rng)
    setup = make_setup(empty, read_model("linear"), sizes.latent_dim, drift=True)
    values = _draw_parameters(setup, rng)
    params = to_device(values)
    trials = replace(empty, counts=_draw_counts(params, setup, empty, rng))
    return Problem(sizes, trials, setup, params, pack(trials, setup))


def without_own_push(problem: Problem) -> Params:
    """The parameters with the sustained push of single trials at zero: then the border is idle."""
    return {**problem.params, "sustained_factor": 0.0 * problem.params["sustained_factor"]}


def _blank_trials(sizes: Sizes, rng: np.random.Generator) -> Trials:
    n = sizes.n_trials
    conditions = tuple((context, sample) for context in CONTEXTS for sample in SAMPLES_S)
    condition = rng.permutation(np.arange(n) % len(conditions))
    sample_s = np.array([conditions[c][1] for c in condition])
    period_s = sizes.n_bins * BIN_S + 2.0
    set_s = 1.0 + period_s * np.arange(n)
    return Trials(
        counts=np.zeros((n, sizes.n_bins, sizes.n_units), dtype=np.uint16),
        mask=np.ones((n, sizes.n_bins), dtype=bool),
        n_before=0,
        bin_s=BIN_S,
        trial=tuple(str(row) for row in range(n)),
        unit=tuple(f"u{unit}" for unit in range(sizes.n_units)),
        set_s=set_s,
        produced_s=np.full(n, sizes.n_bins * BIN_S),
        sample_s=sample_s,
        context=tuple(conditions[c][0] for c in condition),
        target_s=None,
        contexts=CONTEXTS,
        condition=condition,
        conditions=conditions,
        sample_center=float(sample_s.mean()),
        sample_scale=float(sample_s.std()),
        index=np.arange(n),
        n_session=n,
        session_span=(float(set_s[0]), float(set_s[-1])),
        units_left_out={},
        trials_left_out={},
        digest="sha256:none",
    )


def _draw_parameters(setup: Setup, rng: np.random.Generator) -> dict[str, np.ndarray]:
    """Dynamics with time constants of 0.2 to 1 s, log rates about 12 spikes/s with an SD of about 0.5."""
    d, n = setup.latent_dim, setup.n_units
    decay = np.exp(-setup.bin_s / np.linspace(0.2, 1.0, d))
    turn = np.linalg.qr(rng.standard_normal((d, d)))[0]
    values = {
        "readout": rng.standard_normal((n, d)) * np.sqrt(0.2 / d),
        "log_rate": np.log(12.0) + 0.5 * rng.standard_normal(n),
        "drift": 0.3 * rng.standard_normal((n, setup.n_drift)),
        "transition": turn @ np.diag(decay) @ turn.T,
        "offset": 0.02 * rng.standard_normal(d),
        "cue": 0.1 * rng.standard_normal((d, setup.model.n_bumps)),
        "push": 0.4 * rng.standard_normal((d, len(setup.columns))),
        "initial_factor": 0.4 * np.eye(d),
        "sustained_factor": 0.6 * np.eye(d),
        "noise": np.array(0.02),
    }
    return {name: np.asarray(values[name], dtype=float) for name in parameter_shapes(setup)}


def _draw_counts(params: Params, setup: Setup, trials: Trials, rng: np.random.Generator) -> np.ndarray:
    n_trials, n_time, n_units = trials.counts.shape
    d = setup.latent_dim
    prior = jax.tree.map(np.asarray, path_prior(params, setup, n_time))
    inputs = np.asarray(path_inputs(params, setup, n_time, make_design(trials).rows.T))
    own = rng.standard_normal((d, n_trials))
    spread = np.linalg.cholesky(np.asarray(initial_covariance(params, setup)))
    x = inputs[0] + spread @ rng.standard_normal((d, n_trials)) + prior.border_anchor @ own
    readout = np.asarray(params["readout"])
    level = np.asarray(params["log_rate"] + setup.drift_basis(trials) @ params["drift"].T)
    counts = np.zeros((n_trials, n_time, n_units), dtype=np.uint16)
    for t in range(n_time):
        if t:
            noise = rng.standard_normal((d, n_trials)) / np.sqrt(prior.precision[t - 1])
            x = prior.transition[t - 1] @ x + inputs[t] + prior.border[t - 1] @ own + noise
        counts[:, t] = rng.poisson(setup.bin_s * np.exp(x.T @ readout.T + level))
    return counts
