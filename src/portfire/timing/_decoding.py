"""Does recorded activity up to a cutoff predict the produced interval within a condition?"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import floor

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ..comparison import block_of, fold_of, training_rows
from ..errors import PortfireError
from ._decoded import LATE_S, Decoding, Variant
from ._ridge import HeldOut, predict_held_out, standardise

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

MARGIN_SHARE = 0.2
N_BOOTSTRAP = 2000


def round_cutoff(cutoff_s: float, bin_s: float) -> tuple[int, float]:
    """Whole bins nearest to a cutoff (halves up), and the cutoff that they make, s."""
    n_bins = floor(cutoff_s / bin_s + 0.5 + 1e-9)
    return n_bins, round(n_bins * bin_s, 9)


def find_running(produced_s: ArrayLike, cutoff_s: float, bin_s: float) -> NDArray[np.bool_]:
    """Trials with a response that comes at or after the cutoff.

    Parameters
    ----------
    produced_s : (trial,) float
        Produced intervals, s; NaN where there was no response, which never counts as running.
    cutoff_s : float
        Cutoff, s; rounded to whole bins.
    bin_s : float
        Width of a bin, s.

    Returns
    -------
    (trial,) bool
    """
    return np.asarray(np.asarray(produced_s, dtype=float) >= round_cutoff(cutoff_s, bin_s)[1] - 1e-9)


def decode(
    features: Mapping[str, ArrayLike],
    produced_s: ArrayLike,
    condition: ArrayLike,
    index: ArrayLike,
    n_session: int,
    n_folds: int,
    cutoff_s: float,
    bin_s: float,
    variant: Variant = "all",
    draws: int = 1000,
    seed: int = 0,
) -> tuple[Decoding, ...]:
    """Predict the produced interval within a condition from features known at a cutoff.

    Only trials still running at the cutoff are used, in training and in test. The target is the log produced
    interval minus the mean of the training trials of its condition, over their SD; features are centred
    by the same trials and scaled by their pooled SD within conditions. The prediction is ridge regression,
    its penalty chosen inside the training trials by leave-one-out in closed form.

    The null pairs the recording in the middle 60 % of the trials still running with the standardised
    intervals of trials up to 20 % earlier or later: a linear shift, which keeps the slow changes of both.
    Baselines (by the conditions of the recording, so that features and intervals are centred by the same
    trials at every shift), penalties and weights are fitted anew at every shift, and the observed statistic
    that p compares with them comes from the same window.

    Parameters
    ----------
    features : mapping of str to array
        (trial, feature) where the features do not depend on a fit, or (fold, trial, feature): entry j from
        the fit that did not train on fold j, for all trials. Rows of trials not running may be NaN.
    produced_s : (trial,) float
        Produced intervals, s; NaN where there was no response.
    condition : (trial,) int
        Condition of each trial.
    index : (trial,) int
        Position of each trial among the used trials of the session, ascending.
    n_session : int
        Used trials of the session.
    n_folds : int
        Folds J.
    cutoff_s : float
        Cutoff, s from the set cue; rounded to whole bins.
    bin_s : float
        Width of a bin, s.
    variant : {"all", "late"}, default "all"
        ``late`` uses only responses at least 0.15 s after the cutoff: activity that makes the movement
        predicts it.
    draws : int, default 1000
        Shifts at most; fewer where the session has fewer, evenly chosen where it has more.
    seed : int, default 0
        Of the bootstrap.

    Returns
    -------
    tuple of Decoding
        One a feature set, in the order received.

    Raises
    ------
    PortfireError
        If shapes disagree, trials are not in session order, or a feature of a running trial is not finite.

    References
    ----------
    Harris (2020), Nonsense correlations in neuroscience, bioRxiv 2020.11.29.402719 (linear shift; from
    memory).
    """
    produced = np.asarray(produced_s, dtype=float)
    position = np.asarray(index, dtype=np.int64)
    label = np.asarray(condition, dtype=np.int64)
    _check_trials(produced, label, position)
    if variant not in ("all", "late"):
        raise PortfireError(f"the variant of a decode is {variant!r}; it must be 'all' or 'late'")
    rounded_s = round_cutoff(cutoff_s, bin_s)[1]
    running = find_running(produced, cutoff_s, bin_s)
    used = running if variant == "all" else running & (produced >= rounded_s + LATE_S - 1e-9)
    row = np.flatnonzero(used)
    by_name = {name: _check_features(name, x, row, len(produced), n_folds) for name, x in features.items()}
    trials = _Used(
        row=row,
        log_s=np.log(produced[row]),
        condition=np.unique(label[row], return_inverse=True)[1].astype(np.int64),
        index=position[row],
        n_session=n_session,
        n_folds=n_folds,
    )
    results = []
    for name, x in by_name.items():
        held = trials.predict(x, trials.log_s[:, None])
        window = _test_shifts(trials, x, draws)
        results.append(
            _summarise(
                trials,
                held,
                window,
                name,
                variant,
                rounded_s,
                int(running.sum()),
                label,
                produced,
                seed,
            )
        )
    return tuple(results)


@dataclass(frozen=True)
class _Used:
    """Trials that a decode uses, in session order."""

    row: NDArray[np.intp]
    log_s: Floats
    condition: Ints
    index: Ints
    n_session: int
    n_folds: int

    @property
    def fold(self) -> Ints:
        return fold_of(self.index, self.n_session, self.n_folds)

    @property
    def n_conditions(self) -> int:
        return int(self.condition.max(initial=-1)) + 1

    def predict(self, x: Floats, targets: Floats, start: int = 0) -> HeldOut:
        """Predict `targets` (trial, target) from the features of as many trials from `start` on."""
        here = slice(start, start + len(targets))
        index = self.index[here]
        return predict_held_out(
            lambda j: x[min(j, len(x) - 1), here],
            targets,
            self.condition[here],
            self.fold[here],
            lambda j: training_rows(index, self.n_session, self.n_folds, {j}),
            self.n_conditions,
        )


@dataclass(frozen=True)
class _Window:
    observed: float
    null: Floats


def choose_shifts(n_trials: int, draws: int) -> NDArray[np.int64]:
    """Shifts of the null, without zero: all within 20 % of the trials, or `draws` of them evenly chosen."""
    margin = int(MARGIN_SHARE * n_trials)
    shifts = np.concatenate([np.arange(-margin, 0), np.arange(1, margin + 1)])
    if len(shifts) > draws:
        shifts = shifts[np.unique(np.round(np.linspace(0, len(shifts) - 1, draws)).astype(int))]
    return shifts


def _test_shifts(trials: _Used, x: Floats, draws: int) -> _Window | None:
    n = len(trials.row)
    shifts = choose_shifts(n, draws)
    if shifts.size == 0:
        return None
    margin = int(MARGIN_SHARE * n)
    source = np.arange(margin, n - margin)[:, None] + np.concatenate([[0], shifts])
    # A pairing within a condition is the same after any rescaling of that condition, so the observed
    # column is exactly that of the log intervals; only the shifted ones need a common scale.
    z = standardise(trials.log_s[:, None], trials.condition, np.arange(n), trials.n_conditions)[0][:, 0]
    r2 = trials.predict(x, z[source], margin).r2()
    if not np.isfinite(r2[0]):
        return None
    return _Window(float(r2[0]), r2[1:][np.isfinite(r2[1:])])


def _bootstrap_blocks(residual: Floats, total: Floats, block: Ints, seed: int) -> tuple[float, float] | None:
    """Interval of the R² from blocks of trials drawn with replacement."""
    _, inverse = np.unique(block, return_inverse=True)
    n_blocks = int(inverse.max()) + 1
    if n_blocks < 2:
        return None
    sums = np.stack([np.bincount(inverse, weights=part) for part in (residual, total)], axis=1)
    share = np.full(n_blocks, 1.0 / n_blocks)
    drawn = np.random.default_rng(seed).multinomial(n_blocks, share, size=N_BOOTSTRAP) @ sums
    drawn = drawn[drawn[:, 1] > 0.0]
    low, high = np.quantile(1.0 - drawn[:, 0] / drawn[:, 1], [0.025, 0.975])
    return float(low), float(high)


def _summarise(
    trials: _Used,
    held: HeldOut,
    window: _Window | None,
    name: str,
    variant: Variant,
    cutoff_s: float,
    n_running: int,
    label: Ints,
    produced: Floats,
    seed: int,
) -> Decoding:
    scored = np.flatnonzero(held.scored[:, 0])
    row = trials.row[scored]
    z, predicted = held.z[scored, 0], held.predicted[scored, 0]
    center, scale = held.center[scored, 0], held.scale[scored, 0]
    r2 = float(held.r2()[0])
    ci95 = None
    if len(scored):
        block = block_of(trials.index[scored], trials.n_session, trials.n_folds)
        ci95 = _bootstrap_blocks((z - predicted) ** 2, z**2, block, seed)
    p = null95 = None
    n_null = 0 if window is None else len(window.null)
    if window is not None and n_null:
        p = (1.0 + float((window.null >= window.observed).sum())) / (1.0 + n_null)
        low, high = np.quantile(window.null, [0.025, 0.975])
        null95 = (float(low), float(high))
    return Decoding(
        cutoff_s=cutoff_s,
        features=name,
        variant=variant,
        running=n_running,
        n_used=len(trials.row),
        n_trials=len(scored),
        r2=r2 if np.isfinite(r2) else None,
        ci95=ci95,
        p=p,
        null95=null95,
        null_draws=n_null,
        r2_window=None if window is None else window.observed,
        row=row.astype(np.int64),
        condition=label[row],
        fold=trials.fold[scored],
        produced_s=produced[row],
        baseline_s=np.exp(center),
        predicted_s=np.exp(center + scale * predicted),
        log_sd=scale,
    )


def _check_trials(produced: Floats, condition: Ints, index: Ints) -> None:
    if not produced.shape == condition.shape == index.shape or produced.ndim != 1:
        raise PortfireError(
            "produced intervals, conditions and positions must have one entry a trial; got shapes "
            f"{produced.shape}, {condition.shape} and {index.shape}"
        )
    if np.any(np.diff(index) <= 0):
        i = int(np.flatnonzero(np.diff(index) <= 0)[0])
        raise PortfireError(
            f"trials must be in session order: position {index[i + 1]} follows position {index[i]}"
        )
    if np.any(produced <= 0.0):
        raise PortfireError(f"a produced interval is {produced[produced <= 0.0][0]} s; it must be positive")


def _check_features(
    name: str, values: ArrayLike, row: NDArray[np.intp], n_trials: int, n_folds: int
) -> Floats:
    """Features of the used trials as (fold or 1, trial, feature)."""
    x = np.asarray(values, dtype=float)
    x = x[None] if x.ndim == 2 else x
    if x.ndim != 3 or x.shape[1] != n_trials or x.shape[0] not in (1, n_folds) or x.shape[2] == 0:
        raise PortfireError(
            f"features {name!r} have shape {np.shape(values)}; they must be ({n_trials} trials, features) or "
            f"({n_folds} folds, {n_trials} trials, features), with one feature or more"
        )
    x = x[:, row]
    bad = np.argwhere(~np.isfinite(x))
    if bad.size:
        raise PortfireError(
            f"feature {bad[0][2]} of {name!r} is {x[tuple(bad[0])]} on row {row[bad[0][1]]}, a trial that is "
            "still running at the cutoff; it must be a finite number"
        )
    return x
