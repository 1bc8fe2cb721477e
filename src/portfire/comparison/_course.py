"""The time course of a source's push: how much of it enters the state when."""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from ..accounts import Column, make_design
from ..dynamics import spread_kernels
from ..errors import PortfireError
from ..estimation import Fit, Linear, make_efficient
from ..session import Trials

Array = NDArray[np.float64]
_FIRST_S, _GROWTH = 0.1, 1.25
_LEAST_RUNNING = 0.1
_Z = 1.959964


@dataclass(frozen=True)
class Course:
    """A push by time since the set cue, along the axis on which most of it lies.

    Parameters
    ----------
    source : str
    levels : tuple of str
        Columns of the source: ``sample``, or contexts.
    edges_s : array, shape (segment + 1,)
        Edges of the segments, from the end of the first bin (s).
    at_cue, at_cue_se : arrays, shape (level,)
        Push in the bin of the set cue, and its standard error (log rate).
    rate, rate_se : arrays, shape (level, segment)
        Push a second in each segment (log rate/s).
    smoothing : float
        Weight of the roughness penalty.
    axis : array, shape (D,)
        The axis, in the fit's own coordinates of the readout's orthonormal columns.
    share : float
        Share of the push's squared length that lies on the axis.
    """

    source: str
    levels: tuple[str, ...]
    edges_s: Array
    at_cue: Array
    at_cue_se: Array
    rate: Array
    rate_se: Array
    smoothing: float
    axis: Array
    share: float

    def band(self) -> tuple[Array, Array]:
        """95 % band of the rate."""
        return self.rate - _Z * self.rate_se, self.rate + _Z * self.rate_se


def cut_time(n_bins: Array, bin_s: float, n_time: int) -> NDArray[np.int64]:
    """Edges of segments in bins, from bin 1 to where a tenth of the trials still runs; widths grow."""
    running = (np.asarray(n_bins)[:, None] > np.arange(n_time)).mean(axis=0)
    last = int(np.flatnonzero(running >= _LEAST_RUNNING)[-1]) + 1
    edges, width = [1], max(1.0, _FIRST_S / bin_s)
    while edges[-1] < last:
        edges.append(min(last, edges[-1] + max(1, round(width))))
        width *= _GROWTH
    if len(edges) > 2 and edges[-1] - edges[-2] < 0.5 * (edges[-2] - edges[-3]):
        edges.pop(-2)
    if len(edges) < 3:
        raise PortfireError(f"trials of {last} bins are too short for a time course")
    return np.array(edges)


def find_course(fitted: Fit, trials: Trials, source: str, seed: int = 0) -> Course:
    """Estimate the time course of a source's push around a fit.

    The push is free in the bin of the set cue, and constant within segments after it. One step of
    Fisher scoring from the fit, all other parameters of the account allowed for, with a penalty on
    differences between neighbouring segments whose weight maximises the marginal likelihood.

    Parameters
    ----------
    fitted : Fit
        To ``trials``, with a push of the source that describes them well: the best of a profile over the
        persistence, or the fit by both routes. Far from the truth one step does not suffice.
    trials : Trials
    source : {"interval", "context"}
    seed : int
        For the sessions drawn for the information.

    Raises
    ------
    PortfireError
        If the source has no push with a sign, or trials are too short.
    """
    setup, params = fitted.setup, fitted.params
    d, n_columns = setup.latent_dim, len(setup.columns)
    prompt = [k for k, c in enumerate(setup.columns) if c.source == source and c.persistence_s == 0]
    if not prompt or fitted.account.route(source) == "none":
        raise PortfireError(
            f"a time course needs a source with levels that pushes; got {source} in {fitted.account}"
        )
    lasting = [
        next(j for j, c in enumerate(setup.columns) if c[:2] == setup.columns[k][:2] and c.persistence_s > 0)
        for k in prompt
    ]
    n_time = trials.counts.shape[1] - setup.n_before
    edges = cut_time(trials.n_bins, setup.bin_s, n_time)
    segments = np.zeros((len(edges), n_time))
    segments[0, 0] = 1.0
    for k, (low, high) in enumerate(pairwise(edges), start=1):
        segments[k, low:high] = 1.0
    # What comes after the last segment goes on as there.
    segments[-1, edges[-1] :] = 1.0
    rows = np.array([float(np.sum(make_design(trials).rows[:, prompt[j]] ** 2)) for j in range(len(prompt))])
    basis, steps = [], []
    noise = float(params["noise"])
    for j, column in enumerate(prompt):
        for segment in segments:
            for i in range(d):
                block = np.zeros((d, n_columns, n_time))
                block[i, column] = segment
                basis.append(block)
                length = segment.sum() if segment[0] == 0 else setup.initial_bins
                size = np.sqrt(length * noise / max(rows[j], 1.0))
                steps.append(0.1 * size / max(segment.sum(), 1.0))
    directions = Linear({"course": np.array(basis)}, np.array(steps))
    at = replace(fitted, params={**params, "course": np.zeros((d, n_columns, n_time))})
    none = fitted.account.replace(source, "none")
    efficient = make_efficient(at, trials, directions, np.random.default_rng([seed, 41]), free=none)
    # The fit's own pushes in these directions, in the order of the basis: level, segment, dimension.
    kernels = spread_kernels(params, setup, n_time)
    own = np.stack(
        [
            np.einsum(
                "dc,ct,st->sd",
                params["push"][:, pair],
                kernels[pair],
                segments / segments.sum(1, keepdims=True),
            )
            for pair in map(list, zip(prompt, lasting, strict=True))
        ]
    )
    weight = np.asarray(np.linalg.qr(params["readout"])[1], dtype=float)
    penalty = _penalty(len(prompt), np.diff(edges) * setup.bin_s, weight.T @ weight)
    information = efficient.information
    pulled = information @ own.ravel() + efficient.score(trials)
    smoothing, mean, cov = _smooth(information, pulled, penalty)
    return _describe(
        setup.columns,
        source,
        prompt,
        np.asarray(edges * setup.bin_s, dtype=float),
        setup.bin_s,
        weight,
        mean,
        cov,
        smoothing,
    )


def _penalty(n_levels: int, widths_s: Array, metric: Array) -> Array:
    """Roughness ∫ u'² of the segments after the first bin, in the metric of log rates."""
    k = len(widths_s)
    difference = np.diff(np.eye(k), axis=0)
    gaps = 0.5 * (widths_s[1:] + widths_s[:-1])
    inner = np.zeros((k + 1, k + 1))
    inner[1:, 1:] = difference.T @ (difference / gaps[:, None])
    return np.kron(np.eye(n_levels), np.kron(inner, metric))


def _smooth(information: Array, pulled: Array, penalty: Array) -> tuple[float, Array, Array]:
    """Penalised estimate, its covariance, and the weight of the penalty that the evidence prefers."""
    rank = int(np.linalg.matrix_rank(penalty, hermitian=True))
    ratio = np.trace(information) / np.trace(penalty)
    best: tuple[float, float, Array, Array] | None = None
    for power in np.linspace(-5, 4, 37):
        weight = ratio * 10.0**power
        both = information + weight * penalty
        mean = np.linalg.solve(both, pulled)
        evidence = 0.5 * (pulled @ mean - np.linalg.slogdet(both)[1] + rank * np.log(weight))
        if best is None or evidence > best[0]:
            best = (float(evidence), float(weight), mean, np.linalg.inv(both))
    assert best is not None
    return best[1:]


def _describe(
    columns: tuple[Column, ...],
    source: str,
    prompt: list[int],
    edges_s: Array,
    bin_s: float,
    weight: Array,
    mean: Array,
    cov: Array,
    smoothing: float,
) -> Course:
    d, n_levels, k = len(weight), len(prompt), len(edges_s)
    amounts = mean.reshape(n_levels, k, d) @ weight.T
    lengths = np.concatenate([[1.0], np.diff(edges_s) / bin_s])
    spread = (amounts * lengths[None, :, None]).reshape(-1, d)
    _, sizes, axes = np.linalg.svd(spread, full_matrices=False)
    axis = axes[0] * (1.0 if spread.sum(axis=0) @ axes[0] >= 0 else -1.0)
    along = amounts @ axis
    pick = np.kron(np.eye(n_levels * k), (axis @ weight)[None])
    se = np.sqrt(np.diag(pick @ cov @ pick.T)).reshape(n_levels, k)
    return Course(
        source=source,
        levels=tuple(columns[c].level for c in prompt),
        edges_s=edges_s,
        at_cue=along[:, 0],
        at_cue_se=se[:, 0],
        rate=along[:, 1:] / bin_s,
        rate_se=se[:, 1:] / bin_s,
        smoothing=smoothing,
        axis=axis,
        share=float(sizes[0] ** 2 / np.sum(sizes**2)),
    )
