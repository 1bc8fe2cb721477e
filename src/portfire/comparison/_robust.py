"""p values that survive a wrong model: signs of blocks, and labels as the task might have dealt them."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from itertools import product

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ..accounts import make_design
from ..errors import InputError, PortfireError
from ..estimation import Efficient, Fit, score_each
from ..session import Trials
from ._bootstrap import DrawnP, sequential_p
from ._cone import score_statistic

Array = NDArray[np.float64]
ASSIGNMENTS = ("free", "blocked", "sequence")
_EXACT = 16


def sum_blocks(contributions: ArrayLike, block: ArrayLike) -> Array:
    """Sums over the trials of each block, shape (block, …)."""
    values, labels = np.asarray(contributions, dtype=float), np.asarray(block)
    return np.stack([values[labels == b].sum(axis=0) for b in np.unique(labels)])


def sign_flip_p(
    contributions: ArrayLike,
    information: Array | None = None,
    cones: Sequence[int] = (),
    draws: int = 999,
    seed: int = 0,
) -> DrawnP:
    """p of a sum of scores against the same sum with signs of its blocks turned at random.

    Each block's efficient score has mean zero under the restricted account, whatever its variance, and
    turning its sign changes neither: the test holds where counts are overdispersed or trials of a block
    depend on each other (Hemerik, Goeman and Finos 2020, J. R. Stat. Soc. B 82:841).

    Parameters
    ----------
    contributions : array, shape (block, direction)
        Efficient score of each block of trials.
    information : array, shape (direction, direction), optional
        Metric of the statistic; by default the outer products of the contributions.
    cones : sequence of int
        As in `score_statistic`.
    draws : int, default 999
        Random signs; with 16 blocks or fewer all signs are gone through.
    seed : int, default 0

    Raises
    ------
    PortfireError
        If there are fewer than two blocks.
    """
    each = np.atleast_2d(np.asarray(contributions, dtype=float).T).T
    n = len(each)
    if n < 2:
        raise PortfireError(f"signs of blocks can only be turned where there are several; got {n}")
    metric = each.T @ each if information is None else information
    observed = score_statistic(each.sum(axis=0), metric, cones)
    if n <= _EXACT:
        # All signs, those observed among them; the first sign is free to stay where both are alike.
        signs = np.array(list(product((1.0, -1.0), repeat=n)))
        stats = np.array([score_statistic(row, metric, cones) for row in signs @ each])
        n_above = int(np.sum(stats >= observed * (1 - 1e-12)))
        return DrawnP(n_above / len(stats), 0.0, len(stats), n_above)
    rng = np.random.default_rng(seed)

    def draw(_: int) -> float:
        return score_statistic(rng.choice((1.0, -1.0), n) @ each, metric, cones)

    return sequential_p(observed, draw, draws, stop_at=draws + 1)


def robust_p(
    efficient: Efficient, trials: Trials, block: ArrayLike, draws: int = 999, seed: int = 0
) -> DrawnP:
    """p of the directions beyond a restricted fit, robust to blocks of trials.

    Parameters
    ----------
    efficient : Efficient
        Of the restricted fit to ``trials``.
    trials : Trials
    block : array of int, shape (trial,)
    """
    each = efficient.score_trials(trials)
    # What the whole score holds beyond its trials (the drift's prior, the offset) is shared evenly.
    each = each + (efficient.score(trials) - each.sum(axis=0)) / len(each)
    contributions = sum_blocks(each, block)
    return sign_flip_p(contributions, efficient.information, efficient.directions.cones, draws, seed)


def deal_labels(
    labels: NDArray[np.int64], assignment: str, rng: np.random.Generator, strata: NDArray | None = None
) -> NDArray[np.int64]:
    """Labels as the task might have dealt them to the same trials.

    Parameters
    ----------
    labels : array of int, shape (trial,)
        In session order.
    assignment : {"free", "blocked", "sequence"}
        ``free``: drawn trial by trial; labels are permuted, within strata where given. ``blocked``: drawn
        block by block; the labels of runs are permuted among the runs. ``sequence``: a fixed sequence that
        starts anywhere; it is shifted in a circle.
    strata : array, shape (trial,), optional

    Raises
    ------
    InputError
        If the assignment is unknown.
    """
    if assignment == "free":
        out = labels.copy()
        for stratum in (None,) if strata is None else np.unique(strata):
            mine = np.arange(len(labels)) if stratum is None else np.flatnonzero(strata == stratum)
            out[mine] = rng.permutation(labels[mine])
        return out
    if assignment == "blocked":
        run = np.concatenate([[0], np.cumsum(np.diff(labels) != 0)])
        of_run = labels[np.flatnonzero(np.diff(run, prepend=-1))]
        return rng.permutation(of_run)[run]
    if assignment == "sequence":
        return np.roll(labels, rng.integers(len(labels)))
    raise InputError(f"[tests] assignment = {assignment!r} should be one of {', '.join(ASSIGNMENTS)}.")


def push_scores(fitted: Fit, trials: Trials, source: str) -> Array:
    """Score of a push on each single trial, were its design row one, shape (trial, 2 D): initial, sustained.

    Parameters
    ----------
    fitted : Fit
        Of an account in which the source pushes by no route.
    """
    setup = fitted.setup
    wanted = [k for k, c in enumerate(setup.columns) if c.source == source]
    levels = sorted({setup.columns[k].persistence_s for k in wanted})
    first = {h: next(k for k in wanted if setup.columns[k].persistence_s == h) for h in levels}
    if np.any(fitted.params["push"][:, wanted]):
        raise PortfireError(f"labels of the {source} can only be dealt anew where the account has none")
    gradients = score_each(fitted.params, setup, trials, dict.fromkeys(first.values(), 1.0))
    return np.concatenate([gradients["push"][:, k] for k in first.values()]).T


def randomisation_p(
    scores: Array,
    coded: Callable[[NDArray[np.int64]], Array],
    labels: NDArray[np.int64],
    assignment: str = "free",
    strata: NDArray | None = None,
    draws: int = 999,
    seed: int = 0,
) -> DrawnP:
    """p of an association between labels and push scores, against labels dealt anew.

    The scores come from an account that knows nothing of these labels, so under the hypothesis that they
    do nothing every dealing is as likely as the recorded one, whatever the true dynamics are.

    Parameters
    ----------
    scores : array, shape (trial, score)
    coded : callable
        Design rows (trial, column) of labels.
    labels : array of int, shape (trial,)
    assignment, strata
        As in `deal_labels`. Scores and rows are centred within strata.
    draws : int, default 999
    seed : int, default 0
    """
    strata = np.zeros(len(labels), dtype=int) if strata is None else strata
    kept = np.isin(strata, [s for s in np.unique(strata) if len(np.unique(labels[strata == s])) > 1])
    rng = np.random.default_rng(seed)

    def centre(values: Array) -> Array:
        out = values.astype(float).copy()
        for stratum in np.unique(strata):
            out[strata == stratum] -= out[strata == stratum].mean(axis=0)
        return out * kept[:, None]

    centred = centre(scores)
    if not kept.any():
        raise PortfireError("no stratum holds trials of more than one label")
    spread = np.linalg.pinv(centred.T @ centred, hermitian=True)

    def association(now: NDArray[np.int64]) -> float:
        rows = centre(coded(now))
        cross = centred.T @ rows
        inner = np.linalg.pinv(rows.T @ rows, hermitian=True)
        return float(np.einsum("ic,ij,jd,cd->", cross, spread, cross, inner))

    observed = association(labels)
    return sequential_p(
        observed,
        lambda _: association(deal_labels(labels, assignment, rng, strata)),
        draws,
        stop_at=draws + 1,
    )


def randomise_source(
    fitted: Fit,
    trials: Trials,
    source: str,
    assignment: str = "free",
    matched: bool = False,
    draws: int = 999,
    seed: int = 0,
    n_matched: int = 6,
) -> DrawnP:
    """Randomisation p of a source's total, from a fit in which it pushes by no route.

    Labels are dealt within levels of the other source. For the *matched* comparison they are dealt
    within bins of the produced interval (quantiles) instead: whether trials of equal produced
    interval differ by their label.

    Parameters
    ----------
    fitted : Fit
    trials : Trials
    source : {"interval", "context"}
    """
    if source == "context":
        assert trials.context is not None
        labels = np.array([trials.contexts.index(c) for c in trials.context])
        other = None if trials.sample_s is None else np.unique(trials.sample_s, return_inverse=True)[1]

        def relabel(now: NDArray[np.int64]) -> Trials:
            return replace(trials, context=tuple(trials.contexts[k] for k in now))
    elif source == "interval":
        assert trials.sample_s is not None
        levels, labels = np.unique(trials.sample_s, return_inverse=True)
        other = None if trials.context is None else np.unique(trials.context, return_inverse=True)[1]

        def relabel(now: NDArray[np.int64]) -> Trials:
            return replace(trials, sample_s=levels[now])
    else:
        raise PortfireError(f"the source {source} has no labels to deal; it must be interval or context")
    columns = [k for k, c in enumerate(fitted.setup.columns) if c.source == source and c.persistence_s == 0]

    def coded(now: NDArray[np.int64]) -> Array:
        return make_design(relabel(now)).rows[:, columns]

    scores = push_scores(fitted, trials, source)
    if not matched:
        return randomisation_p(scores, coded, labels, assignment, other, draws, seed)
    had = np.flatnonzero(trials.responded)
    produced = trials.produced_s[had]
    edges = np.quantile(produced, np.linspace(0, 1, n_matched + 1)[1:-1])

    def coded_part(now: NDArray[np.int64]) -> Array:
        whole = labels.copy()
        whole[had] = now
        return coded(whole)[had]

    strata = np.searchsorted(edges, produced)
    return randomisation_p(scores[had], coded_part, labels[had], "free", strata, draws, seed)
