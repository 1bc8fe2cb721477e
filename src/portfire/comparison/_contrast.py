"""Contrasts: what each source loses when one of its routes, or both, are taken away."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..accounts import ROUTES, Account
from ..dynamics import Setup
from ..estimation import count_route
from ._boundary import expected_cost, likelihood_ratio_p
from ._gain import gain, holm
from ._verdict import Evidence, Verdict, judge

_TAKEN = {"initial_unique": "sustained", "sustained_unique": "initial", "total": "none"}
_PERSISTENCES = {"initial": 0.0, "sustained": float("inf")}


@dataclass(frozen=True)
class Scored:
    """Accounts at one size: fitted to all trials, and scored on held-out ones.

    Parameters
    ----------
    setup : Setup
        Of the fits to all trials.
    values : dict of str to float
        Objective of each account on all trials (nats).
    loglik : dict of str to array, shape (trial,)
        Held-out log-likelihood of every trial (nats), each from the fold that held it out.
    n_train : float
        Mean number of training trials.
    n_folds : int
    in_sample : bool
        Whether ``loglik`` is of the training trials themselves. A difference by k parameters is then
        lowered by k/n, which is what it loses on new trials (Akaike 1974, from memory).
    """

    setup: Setup
    values: Mapping[str, float]
    loglik: Mapping[str, NDArray[np.float64]]
    n_train: float
    n_folds: int
    in_sample: bool = False


@dataclass(frozen=True)
class Entry:
    """One entry of a contrast: evidence with adjusted p, and the likelihood ratio behind it.

    ``n_params`` are the parameters that the smaller account lacks; the gain was corrected for ``cost`` of
    them, which is less where some are covariances at their boundary.
    """

    evidence: Evidence
    statistic: float
    n_fixed: int
    cov_dims: tuple[int, ...]
    p_raw: float
    n_params: int
    cost: float


@dataclass(frozen=True)
class Contrast:
    """The contrasts of one source at one size.

    Parameters
    ----------
    source : str
    scores : dict of str to float
        Mean held-out log-likelihood by route (nats/trial), the other sources by both.
    entries : dict of str to Entry
        ``initial_unique``, ``sustained_unique`` and ``total``.
    verdict : Verdict
    end_difference : float
        Objective of the sustained-only account minus that of the initial-only one (nats): they have
        as many parameters, so it is the profile of the persistence at its two ends.
    """

    source: str
    scores: dict[str, float]
    entries: dict[str, Entry]
    verdict: Verdict
    end_difference: float


def _count(full: Account, smaller: Account, source: str, setup: Setup) -> tuple[int, tuple[int, ...], int]:
    """Fixed effects, covariance sizes and parameters that the smaller account lacks."""
    fixed, dims, total = 0, [], 0
    for persistence in _PERSISTENCES.values():
        lost = count_route(full, source, persistence, setup) - count_route(
            smaller, source, persistence, setup
        )
        total += lost
        if lost and source == "trial":
            dims.append(setup.latent_dim)
        else:
            fixed += lost
    return fixed, tuple(dims), total


def contrast_sources(
    scored: Scored,
    sources: Sequence[str],
    level: float,
    min_gain: float,
    drawn: Mapping[tuple[str, str], float] | None = None,
) -> tuple[Contrast, ...]:
    """Contrast the routes of every source; p values are adjusted over all entries (Holm).

    Parameters
    ----------
    scored : Scored
        With the accounts of `contrast_accounts`.
    sources : sequence of str
    level : float
        Largest adjusted p that counts as evidence.
    min_gain : float
        Smallest gain worth having (nats/trial).
    drawn : mapping of (str, str) to float, optional
        p by source and entry that takes the place of that of the likelihood ratio, before adjustment.

    Returns
    -------
    tuple of Contrast
        In the order of ``sources``.
    """
    full = Account.full(scored.setup.sources)
    keys = [(source, name) for source in sources for name in _TAKEN]
    raw = []
    for source, name in keys:
        smaller = full.replace(source, _TAKEN[name])
        fixed, dims, total = _count(full, smaller, source, scored.setup)
        statistic = max(0.0, 2 * (scored.values[str(full)] - scored.values[str(smaller)]))
        p_raw = (drawn or {}).get((source, name), likelihood_ratio_p(statistic, fixed, dims))
        raw.append((smaller, statistic, fixed, dims, total, p_raw))
    adjusted = holm([row[-1] for row in raw])
    entries: dict[tuple[str, str], Entry] = {}
    for key, (smaller, statistic, fixed, dims, total, p_raw), p in zip(keys, raw, adjusted, strict=True):
        difference = scored.loglik[str(full)] - scored.loglik[str(smaller)]
        cost = expected_cost(fixed, dims)
        if scored.in_sample:
            difference = difference - cost / scored.n_train
        gained = gain(difference, cost, scored.n_train, scored.n_folds)
        entries[key] = Entry(Evidence(gained, float(p)), statistic, fixed, dims, float(p_raw), total, cost)
    return tuple(_contrast_one(scored, full, source, entries, level, min_gain) for source in sources)


def _contrast_one(
    scored: Scored,
    full: Account,
    source: str,
    entries: Mapping[tuple[str, str], Entry],
    level: float,
    min_gain: float,
) -> Contrast:
    by_route = {route: str(full.replace(source, route)) for route in ROUTES}
    mine = {name: entries[source, name] for name in _TAKEN}
    verdict = judge(
        source,
        mine["initial_unique"].evidence,
        mine["sustained_unique"].evidence,
        mine["total"].evidence,
        len(scored.loglik[str(full)]),
        level,
        min_gain,
    )
    return Contrast(
        source,
        {route: float(scored.loglik[name].mean()) for route, name in by_route.items()},
        mine,
        verdict,
        scored.values[by_route["sustained"]] - scored.values[by_route["initial"]],
    )
