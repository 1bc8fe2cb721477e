"""Posterior of state and pushes of single trials, smoothed or causal."""

from __future__ import annotations

from math import floor

import numpy as np
import xarray as xr

from portfire.errors import InputError
from portfire.estimation._fit import Fit
from portfire.estimation._kinds import kind_of
from portfire.inference import pack
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
    setup = fitted.setup
    mask = causal_mask(trials, until_s)
    found = kind_of(setup).posterior(fitted.params, setup, pack(trials, setup, mask))
    to = fitted.canonical
    seen = mask.copy()
    seen[:, : setup.n_before] = True
    seen[:, setup.n_before] = True
    x = np.where(seen[..., None], found.state, np.nan)
    cov = np.where(seen[..., None, None], found.state_cov, np.nan)
    at_cue = setup.n_before
    time = (np.arange(x.shape[1]) - at_cue) * setup.bin_s
    return xr.Dataset(
        {
            "state": (("trial", "time", "latent"), x @ to.T),
            "state_cov": (("trial", "time", "latent", "latent2"), to @ cov @ to.T),
            "initial": (("trial", "latent"), x[:, at_cue] @ to.T),
            "initial_cov": (("trial", "latent", "latent2"), to @ cov[:, at_cue] @ to.T),
            "sustained": (("trial", "latent"), found.sustained @ to.T),
            "sustained_cov": (("trial", "latent", "latent2"), to @ found.sustained_cov @ to.T),
            **{name: (dims, _blank(dims, values, seen)) for name, (dims, values) in found.extra.items()},
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
    setup = fitted.setup
    x = kind_of(setup).causal_states(fitted.params, setup, pack(trials, setup))
    return np.where(trials.mask[:, setup.n_before :, None], x, np.nan) @ fitted.canonical.T


def _blank(dims: tuple[str, ...], values: np.ndarray, seen: np.ndarray) -> np.ndarray:
    """Values with those of unseen bins blanked, where they go by trial and time."""
    if dims[:2] != ("trial", "time"):
        return values
    return np.where(seen.reshape(*seen.shape, *(1,) * (values.ndim - 2)), values, np.nan)
