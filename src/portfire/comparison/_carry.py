"""Which mode of the dynamics carries an initial push to the end of a trial."""

from __future__ import annotations

import numpy as np

from ..estimation import Fit, kind_of


def carrying_time_constant(fitted: Fit, source: str) -> float:
    """Time constant of the mode that holds most of an initial push at the end of a median trial.

    An initial push that lives in a mode which outlasts the trial acts as a sustained one.

    Parameters
    ----------
    fitted : Fit
        Of an account that lets the source push initially.
    source : {"interval", "context", "trial"}

    Returns
    -------
    float
        Seconds; infinite where the mode does not decay. Complex pairs count as one mode. Where the
        dynamics are not linear, they are taken about the mean initial state.
    """
    params, setup = fitted.params, fitted.setup
    if source == "trial":
        push = params["initial_factor"]
    else:
        wanted = [k for k, c in enumerate(setup.columns) if c.source == source and c.persistence_s == 0]
        push = params["push"][:, wanted]
    values, vectors = np.linalg.eig(kind_of(setup).local_transition(params, setup))
    modes = np.linalg.solve(vectors, push.astype(complex))
    held = modes * (values**setup.n_reference)[:, None]
    readout = params["readout"] @ vectors
    strength = np.linalg.norm(readout, axis=0) * np.linalg.norm(held, axis=1)
    radius = np.abs(values)
    if not np.any(strength > 0):
        return float(setup.bin_s)
    # Members of a complex pair have the same radius; they are added up as one mode.
    groups = np.round(radius, 9)
    best = max(set(groups.tolist()), key=lambda g: float(strength[groups == g].sum()))
    return float("inf") if best >= 1 else float(-setup.bin_s / np.log(max(best, 1e-12)))
