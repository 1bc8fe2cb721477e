"""Sessions drawn from a fit: the same trials, conditions and units, with counts of the model's own."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from portfire.accounts import make_design
from portfire.errors import PortfireError
from portfire.estimation._fit import Fit
from portfire.estimation._forward import draw_ends, draw_paths
from portfire.session import Trials

_MAX_LOG_RATE = 12.0


def draw_trials(fitted: Fit, trials: Trials, rng: np.random.Generator, own_ends: bool = False) -> Trials:
    """The trials with counts drawn from the fit.

    Parameters
    ----------
    fitted : Fit
        With a readout of counts.
    trials : Trials
        Their conditions, session times and lengths are kept.
    rng : Generator
    own_ends : bool, default False
        Let trials with a response end by first passage of the fit's own hazard, at two bins or more and
        at the latest at the end of the longest trial; otherwise every trial keeps its length.

    Raises
    ------
    PortfireError
        If the readout draws no counts, or ``own_ends`` is asked of a fit without a response hazard.
    """
    setup, p, before = fitted.setup, fitted.params, trials.n_before
    if setup.model.readout != "poisson":
        raise PortfireError(f"no counts can be drawn from a {setup.model.readout} readout")
    if own_ends and fitted.hazard is None:
        raise PortfireError("trials end by first passage only where the fit has a response hazard")
    n_time = trials.counts.shape[1] - before
    path = draw_paths(fitted, make_design(trials).rows, n_time, rng)
    mask = trials.mask
    if own_ends:
        ends = np.where(trials.responded, np.maximum(draw_ends(fitted, path, rng), 2), trials.n_bins)
        mask = mask.copy()
        mask[:, before:] = np.arange(n_time) < ends[:, None]
    if before:
        steps = np.exp(0.5 * p["log_run_up_noise"]) * rng.standard_normal(
            (len(trials), before, path.shape[2])
        )
        path = np.concatenate([(path[:, :1] + np.cumsum(steps, axis=1))[:, ::-1], path], axis=1)
    drift = setup.drift_basis(trials) @ p["drift"].T
    log_rate = path @ p["readout"].T + p["log_rate"] + drift[:, None]
    counts = rng.poisson(setup.bin_s * np.exp(np.minimum(log_rate, _MAX_LOG_RATE))) * mask[:, :, None]
    top = np.iinfo(trials.counts.dtype).max
    produced = np.where(trials.responded, mask[:, before:].sum(axis=1) * setup.bin_s, trials.produced_s)
    return replace(
        trials,
        counts=np.minimum(counts, top).astype(trials.counts.dtype),
        mask=mask,
        produced_s=produced if own_ends else trials.produced_s,
    )
