"""What a decode found: one feature set at one cutoff."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import pandas as pd

Variant = Literal["all", "late"]
LATE_S = 0.15


@dataclass(frozen=True)
class Decoding:
    """Held-out prediction of the produced interval from one feature set at one cutoff.

    Attributes
    ----------
    cutoff_s : float
        Cutoff, rounded to whole bins, s.
    features : str
        Name of the feature set.
    variant : str
        ``all``, or ``late``: only responses at least 0.15 s after the cutoff.
    running : int
        Trials with a response that are still running at the cutoff.
    n_used : int
        Of these, trials of the variant.
    n_trials : int
        Of these, trials scored: those of a condition with three or more training trials in their fold.
    r2 : float or None
        ``1 - Σ(z - ẑ)² / Σz²`` over all scored trials; below zero where the prediction is worse than the
        mean of the condition.
    ci95 : (float, float) or None
        Interval from a bootstrap over blocks of trials.
    p : float or None
        One-sided, from linear shifts.
    null95 : (float, float) or None
        Middle 95 % of the statistic under the shifts.
    null_draws : int
        Distinct shifts.
    r2_window : float or None
        The observed statistic within the window of the shifts, which p compares with the null.
    row : (scored,) int
        Rows of the scored trials in the input.
    condition, fold : (scored,) int
        Their condition and the fold that held them out.
    produced_s, baseline_s, predicted_s : (scored,) float
        Produced interval, geometric mean of the training trials of the condition, and prediction, s.
    log_sd : (scored,) float
        SD of log interval over the training trials of the condition, so that r2 can be computed again.
    """

    cutoff_s: float
    features: str
    variant: Variant
    running: int
    n_used: int
    n_trials: int
    r2: float | None
    ci95: tuple[float, float] | None
    p: float | None
    null95: tuple[float, float] | None
    null_draws: int
    r2_window: float | None
    row: NDArray[np.int64]
    condition: NDArray[np.int64]
    fold: NDArray[np.int64]
    produced_s: NDArray[np.float64]
    baseline_s: NDArray[np.float64]
    predicted_s: NDArray[np.float64]
    log_sd: NDArray[np.float64]

    def to_row(self) -> dict[str, object]:
        """Row of ``decode`` in ``result.json``."""
        return {
            "cutoff_s": self.cutoff_s,
            "features": self.features,
            "variant": self.variant,
            "running": self.running,
            "n_used": self.n_used,
            "n_trials": self.n_trials,
            "r2_within_condition": self.r2,
            "ci95": None if self.ci95 is None else list(self.ci95),
            "p": self.p,
            "null95": None if self.null95 is None else list(self.null95),
            "null_draws": self.null_draws,
            "r2_window": self.r2_window,
        }

    def to_table(self, labels: Sequence[str]) -> pd.DataFrame:
        """Rows of ``decode.parquet``.

        Parameters
        ----------
        labels : sequence of str
            Label of every trial of the input.

        Returns
        -------
        DataFrame
            ``trial, condition, fold, cutoff_s, features, produced_s, baseline_s, predicted_s``, then
            ``variant`` and ``log_sd``.
        """
        import pandas as pd

        return pd.DataFrame(
            {
                "trial": [str(labels[i]) for i in self.row],
                "condition": self.condition,
                "fold": self.fold,
                "cutoff_s": self.cutoff_s,
                "features": self.features,
                "produced_s": self.produced_s,
                "baseline_s": self.baseline_s,
                "predicted_s": self.predicted_s,
                "variant": self.variant,
                "log_sd": self.log_sd,
            }
        )
