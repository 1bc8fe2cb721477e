"""Linear dynamics: x' = A x + b, and the prior over paths that every kind of dynamics states."""

from __future__ import annotations

from typing import NamedTuple

import jax
import jax.numpy as jnp
from jax import lax

from portfire.dynamics._setup import Setup
from portfire.dynamics._spread import spread_kernels

Params = dict[str, jax.Array]


class PathPrior(NamedTuple):
    """Gaussian prior over the path of one chunk, shared by its trials (time axis includes the run-up).

    Attributes
    ----------
    transition : array, shape (time-1, D, D)
        F_t, from index t to t+1.
    precision : array, shape (time-1,)
        1/q of that step's noise (noise covariance q·I).
    border : array, shape (time-1, D, D)
        How the unit-variance border variable e enters that step.
    border_anchor : array, shape (D, D)
        How e enters the state at the set cue.
    anchor_precision : array, shape (D, D)
        Inverse of P0.
    log_normaliser : array, shape ()
        Log normaliser of p(path, e) per trial.
    """

    transition: jax.Array
    precision: jax.Array
    border: jax.Array
    border_anchor: jax.Array
    anchor_precision: jax.Array
    log_normaliser: jax.Array


def parameter_shapes(setup: Setup) -> dict[str, tuple[int, ...]]:
    """Names and shapes of the parameters of linear dynamics, less the readout's own."""
    d, n = setup.latent_dim, setup.n_units
    shapes = {
        "readout": (n, d),
        "log_rate": (n,),
        "drift": (n, setup.n_drift),
        "transition": (d, d),
        "offset": (d,),
        "cue": (d, setup.model.n_bumps),
        "push": (d, len(setup.columns)),
        "initial_factor": (d, d),
        "sustained_factor": (d, d),
        "noise": (),
    }
    if setup.n_before:
        shapes["log_run_up_noise"] = ()
    return shapes


def accumulated_noise(transition: jax.Array, noise: jax.Array, n_bins: int) -> jax.Array:
    """P00: covariance that the dynamics accumulate from nothing in ``n_bins`` bins, shape (D, D)."""
    identity = jnp.eye(transition.shape[0])

    def step(cov: jax.Array, _: None) -> tuple[jax.Array, None]:
        return transition @ cov @ transition.T + noise * identity, None

    return lax.scan(step, jnp.zeros_like(transition), None, length=n_bins)[0]


def initial_covariance(params: Params, setup: Setup) -> jax.Array:
    """P0 = P00 + the trial source's own initial covariance, shape (D, D)."""
    own = params["initial_factor"] @ params["initial_factor"].T
    return accumulated_noise(params["transition"], params["noise"], setup.initial_bins) + own


def _kernels(params: Params, setup: Setup, n_time: int) -> jax.Array:
    # Kernels are chosen, not ascended: their slope at decay 0 is of no use to anyone.
    fixed = {name: lax.stop_gradient(params[name]) for name in ("decay",) if name in params}
    return jnp.asarray(spread_kernels(fixed, setup, n_time, jnp))


def path_prior(params: Params, setup: Setup, n_time: int) -> PathPrior:
    """The path prior over ``n_time`` bins, of which the first ``setup.n_before`` are run-up."""
    d, before = setup.latent_dim, setup.n_before
    identity = jnp.eye(d)
    in_run_up = jnp.arange(n_time - 1) < before
    run_up_noise = jnp.exp(params["log_run_up_noise"]) if before else params["noise"]
    transition = jnp.where(in_run_up[:, None, None], identity, params["transition"])
    step_noise = jnp.where(in_run_up, run_up_noise, params["noise"])
    kernel = _kernels(params, setup, n_time - before)[-1]
    into_step = jnp.concatenate([jnp.zeros(before), kernel[1:]])
    factor = params["sustained_factor"]
    cov = initial_covariance(params, setup)
    chol = jnp.linalg.cholesky(cov)
    log_normaliser = (
        -0.5 * d * jnp.sum(jnp.log(2 * jnp.pi * step_noise))
        - 0.5 * d * jnp.log(2 * jnp.pi)
        - jnp.sum(jnp.log(jnp.diagonal(chol)))
        - 0.5 * d * jnp.log(2 * jnp.pi)
    )
    inverse = jax.scipy.linalg.cho_solve((chol, True), identity)
    return PathPrior(
        transition,
        1.0 / step_noise,
        into_step[:, None, None] * factor,
        kernel[0] * factor,
        0.5 * (inverse + inverse.T),
        log_normaliser,
    )


def path_inputs(params: Params, setup: Setup, n_time: int, rows: jax.Array) -> jax.Array:
    """Known inputs into every bin (offset, cue response, pushes of the conditions).

    Parameters
    ----------
    params : dict of arrays
        Optional beside those of `parameter_shapes`: ``decay`` (see `spread_kernels`), and ``course``,
        shape (D, column, time), what a unit of each design row adds to the input of every bin.
    rows : array, shape (column, trial)
        Design rows of the trials.

    Returns
    -------
    array, shape (time, D, trial)
        Zero in the run-up; at the set cue the mean of the initial state.
    """
    before = setup.n_before
    n_after = n_time - before
    kernels = _kernels(params, setup, n_after)[:-1]
    spread = jnp.einsum("dc,ct,cb->tdb", params["push"], kernels, rows)
    if "course" in params:
        spread = spread + jnp.einsum("dct,cb->tdb", params["course"][:, :, :n_after], rows)
    constant = params["cue"] @ jnp.asarray(setup.cue_basis(n_after)) + params["offset"][:, None]
    constant = jnp.where(jnp.arange(n_after) > 0, constant, 0.0)
    after = spread + constant.T[:, :, None]
    return jnp.concatenate([jnp.zeros((before, *after.shape[1:])), after])
