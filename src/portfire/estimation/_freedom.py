"""Which parameters an account frees, and how many that is."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from portfire.accounts import Account
from portfire.dynamics import Setup


@dataclass(frozen=True)
class Freedom:
    """Free pushes of an account.

    Parameters
    ----------
    prompt, lasting : arrays of int
        Free columns of pushes at the set cue, and of pushes that last.
    initial_factor, sustained_factor : bool
        Whether the trial source may push initially, and lastingly.
    drift : bool
        Whether rates may change slowly over the session.
    """

    prompt: np.ndarray
    lasting: np.ndarray
    initial_factor: bool
    sustained_factor: bool
    drift: bool


def free_parameters(account: Account, setup: Setup, drift: bool = True) -> Freedom:
    """What ``account`` frees in a model of this setup, with or without slow drift of the rates."""
    allowed = [
        k for k, column in enumerate(setup.columns) if account.allows(column.source, column.persistence_s)
    ]
    prompt = [k for k in allowed if setup.columns[k].persistence_s == 0]
    lasting = [k for k in allowed if setup.columns[k].persistence_s > 0]
    return Freedom(
        np.array(prompt, dtype=int),
        np.array(lasting, dtype=int),
        account.allows("trial", 0.0),
        account.allows("trial", float("inf")),
        drift and setup.n_drift > 0,
    )


def project(params: dict[str, np.ndarray], freedom: Freedom) -> dict[str, np.ndarray]:
    """The parameters with everything that is not free put to zero."""
    push = np.zeros_like(params["push"])
    for columns in (freedom.prompt, freedom.lasting):
        push[:, columns] = params["push"][:, columns]
    return {
        **params,
        "push": push,
        "drift": params["drift"] * float(freedom.drift),
        "initial_factor": params["initial_factor"] * float(freedom.initial_factor),
        "sustained_factor": params["sustained_factor"] * float(freedom.sustained_factor),
    }


def count_additive_route(account: Account, source: str, persistence_s: float, setup: Setup) -> int:
    """Free parameters of a route whose pushes add to the state: D a column, D(D+1)/2 for the trial source."""
    d = setup.latent_dim
    if not account.allows(source, persistence_s):
        return 0
    if source == "trial":
        return d * (d + 1) // 2
    return d * sum(c.source == source and c.persistence_s == persistence_s for c in setup.columns)
