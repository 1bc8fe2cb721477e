"""Which size of model to take: the smallest whose held-out deficit is no deficit worth having."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from ..errors import PortfireError


class Deficit(NamedTuple):
    """What a candidate loses against the best one, nats a trial, and the paired standard error."""

    nats_per_trial: float
    se: float


class Choice(NamedTuple):
    """Position of the chosen candidate, of the best one, and every candidate's deficit."""

    chosen: int
    best: int
    deficits: tuple[Deficit, ...]


def choose_smallest(loglik: Sequence[NDArray[np.float64]], min_gain: float) -> Choice:
    """Choose among candidates that are ordered from the simplest to the richest.

    Parameters
    ----------
    loglik : sequence of arrays, shape (trial,)
        Held-out log-likelihood of each candidate on the same trials, nats.
    min_gain : float
        Smallest gain worth having, nats a trial.

    Returns
    -------
    Choice
        The first candidate whose mean paired deficit to the best is under one paired standard error
        and under `min_gain`.

    Raises
    ------
    PortfireError
        If there is no candidate, or the candidates were scored on different numbers of trials.
    """
    if not loglik or len({len(values) for values in loglik}) != 1 or len(loglik[0]) < 2:
        raise PortfireError(
            "a choice of size needs candidates that are all scored on the same two or more trials"
        )
    table = np.asarray(loglik, dtype=float)
    best = int(np.argmax(table.mean(axis=1)))
    behind = table[best] - table
    deficits = tuple(Deficit(float(row.mean()), float(row.std(ddof=1) / np.sqrt(len(row)))) for row in behind)
    for position, deficit in enumerate(deficits):
        small = deficit.nats_per_trial < deficit.se and deficit.nats_per_trial < min_gain
        if position == best or small:
            return Choice(position, best, deficits)
    raise PortfireError("no candidate could be chosen")
