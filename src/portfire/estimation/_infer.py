"""Posterior of state and pushes of single trials, smoothed or causal."""

from __future__ import annotations

from math import floor

import jax.numpy as jnp
import numpy as np
import xarray as xr

from portfire.errors import InputError
from portfire.estimation._fit import Fit
from portfire.estimation._objective import to_device
from portfire.inference import laplace, pack, posterior_moments, start_path
from portfire.session import Trials


def causal_mask(trials: Trials, until_s: float | None) -> np.ndarray:
    """Bins up to ``until_s`` seconds after the set cue (rounded to whole bins, halves up), and the run-up."""
    if until_s is None:
        return trials.mask
    last = trials.n_before + floor(until_s / trials.bin_s + 0.5 + 1e-9)
    if last < 1:
        raise InputError(f"until_s = {until_s} leaves no bin; give a later time, or bin with a run-up.")
    mask = trials.mask.copy()
    mask[:, last:] = False
    return mask


def infer_trials(fitted: Fit, trials: Trials, until_s: float | None = None) -> xr.Dataset:
    """Canonical posterior means and covariances; see `Fit.infer`."""
    setup, params = fitted.setup, fitted.params
    mask = causal_mask(trials, until_s)
    packed = pack(trials, setup, mask)
    device = to_device(params)
    state, state_cov, e, e_cov = [], [], [], []
    for chunk in packed.chunks:
        posterior = laplace(device, setup, chunk, start_path(setup, chunk))
        moments = posterior_moments(posterior)
        state.append(np.asarray(posterior.mode.x))
        state_cov.append(np.asarray(moments.covariance))
        e.append(np.asarray(posterior.mode.e))
        e_cov.append(np.asarray(moments.border))
    to = fitted.canonical
    x = packed.gather_time(state)
    cov = packed.gather_time(state_cov)
    rows = packed.gather([np.asarray(chunk.rows) for chunk in packed.chunks])
    lasting = [k for k, column in enumerate(setup.columns) if column.persistence_s > 0]
    lift = params["sustained_factor"]
    sustained = rows[:, lasting] @ params["push"][:, lasting].T + packed.gather(e) @ lift.T
    sustained_cov = lift @ packed.gather(e_cov) @ lift.T
    seen = mask.copy()
    seen[:, : setup.n_before] = True
    seen[:, setup.n_before] = True
    x, cov = np.where(seen[..., None], x, np.nan), np.where(seen[..., None, None], cov, np.nan)
    at_cue = setup.n_before
    time = (np.arange(x.shape[1]) - at_cue) * setup.bin_s
    return xr.Dataset(
        {
            "state": (("trial", "time", "latent"), x @ to.T),
            "state_cov": (("trial", "time", "latent", "latent2"), to @ cov @ to.T),
            "initial": (("trial", "latent"), x[:, at_cue] @ to.T),
            "initial_cov": (("trial", "latent", "latent2"), to @ cov[:, at_cue] @ to.T),
            "sustained": (("trial", "latent"), sustained @ to.T),
            "sustained_cov": (("trial", "latent", "latent2"), to @ sustained_cov @ to.T),
        },
        coords={"trial": list(trials.trial), "time": time, "latent": np.arange(len(to))},
        attrs={
            "until_s": np.inf if until_s is None else float(until_s),
            "units": "log rate: one unit of a latent moves the log rates by its orthonormal readout column",
        },
    )


def causal_states(fitted: Fit, trials: Trials) -> np.ndarray:
    """State at the end of every bin after the set cue from the spikes up to there, in canonical form.

    The same as `Fit.infer` at every bin, each search starting from the bin before.

    Returns
    -------
    array, shape (trial, time, latent)
        NaN past the end of a trial.
    """
    setup, before = fitted.setup, fitted.setup.n_before
    packed = pack(trials, setup)
    device = to_device(fitted.params)
    states = []
    for chunk in packed.chunks:
        n_time = chunk.mask.shape[0]
        path = start_path(setup, chunk)
        state = np.full(path.x.shape, np.nan)
        for t in range(before, n_time):
            seen = chunk.mask * (jnp.arange(n_time)[:, None] <= t)
            path = laplace(device, setup, chunk._replace(mask=seen, counts=chunk.counts * seen), path).mode
            state[t] = np.asarray(path.x[t])
        states.append(state)
    x = packed.gather_time(states)[:, before:]
    return np.where(trials.mask[:, before:, None], x, np.nan) @ fitted.canonical.T
