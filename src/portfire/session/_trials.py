"""Binned trials: what every later layer takes."""

from __future__ import annotations

from dataclasses import dataclass, fields, replace

import numpy as np
from numpy.typing import ArrayLike

Condition = tuple[str | None, float | None]


@dataclass(frozen=True, eq=False)
class Trials:
    """Spike counts of the used trials with their covariates; immutable.

    Parameters
    ----------
    counts : ndarray of uint16 (trial, time, unit)
        Spikes a bin. The time axis holds `n_before` run-up bins, then bins from the set cue. Zero outside
        `mask`.
    mask : ndarray of bool (trial, time)
        True where the bin is whole and ends at or before the response (or `end_s`); run-up bins are True.
    n_before : int
        Number of run-up bins; index `n_before` is bin 0, which starts at the set cue.
    bin_s : float
        Width of a bin (s).
    trial, unit : tuple of str
        Labels.
    set_s : ndarray (trial,)
        Time of the set cue (s).
    produced_s : ndarray (trial,)
        Produced interval (s), NaN where there was no response.
    sample_s : ndarray (trial,) or None
        Sample interval (s).
    context : tuple of str or None
        Context of each trial.
    target_s : ndarray (trial,) or None
        The interval asked for (s), NaN where not given.
    contexts : tuple of str
        All contexts of the session, sorted; empty where it has none.
    condition : ndarray of int (trial,)
        Index into `conditions`.
    conditions : tuple of (str or None, float or None)
        All pairs of context and sample interval of the session, sorted.
    sample_center, sample_scale : float
        Mean and standard deviation (over n) of the sample interval over the used trials of the session (s);
        0 and 1 where there is none, scale 1 where it does not vary.
    index : ndarray of int (trial,)
        Position among the used trials of the session, in session order.
    n_session : int
        Number of used trials of the session.
    session_span : tuple of float
        First and last set cue of the used trials of the session (s).
    units_left_out, trials_left_out : dict of str to str
        Reason by label.
    digest : str
        Digest of the session.

    Notes
    -----
    `trials[rows]` selects trials by position, boolean mask or slice. What describes the session (`contexts`,
    `conditions`, `sample_center`, `index`, …) survives the selection.
    """

    counts: np.ndarray
    mask: np.ndarray
    n_before: int
    bin_s: float
    trial: tuple[str, ...]
    unit: tuple[str, ...]
    set_s: np.ndarray
    produced_s: np.ndarray
    sample_s: np.ndarray | None
    context: tuple[str, ...] | None
    target_s: np.ndarray | None
    contexts: tuple[str, ...]
    condition: np.ndarray
    conditions: tuple[Condition, ...]
    sample_center: float
    sample_scale: float
    index: np.ndarray
    n_session: int
    session_span: tuple[float, float]
    units_left_out: dict[str, str]
    trials_left_out: dict[str, str]
    digest: str

    def __post_init__(self) -> None:
        for field in fields(self):
            value = getattr(self, field.name)
            if isinstance(value, np.ndarray):
                value.setflags(write=False)

    def __len__(self) -> int:
        return len(self.trial)

    def __getitem__(self, rows: ArrayLike | slice) -> Trials:
        """Select trials.

        Parameters
        ----------
        rows : array_like of int, array_like of bool (trial,), slice or int
            Which trials, in the order wanted.

        Raises
        ------
        IndexError
            If a row does not exist or a boolean mask has another length.
        """
        places = np.arange(len(self))
        picked = np.atleast_1d(places[rows if isinstance(rows, slice) else _as_index(rows)])
        return replace(
            self,
            counts=self.counts[picked],
            mask=self.mask[picked],
            trial=tuple(self.trial[row] for row in picked),
            set_s=self.set_s[picked],
            produced_s=self.produced_s[picked],
            sample_s=None if self.sample_s is None else self.sample_s[picked],
            context=None if self.context is None else tuple(self.context[row] for row in picked),
            target_s=None if self.target_s is None else self.target_s[picked],
            condition=self.condition[picked],
            index=self.index[picked],
        )

    @property
    def n_bins(self) -> np.ndarray:
        """Number of scored bins of each trial, those from the set cue on, (trial,)."""
        return self.mask[:, self.n_before :].sum(axis=1)

    @property
    def duration_s(self) -> np.ndarray:
        """Scored time of each trial (s), (trial,)."""
        return self.n_bins * self.bin_s

    @property
    def time_s(self) -> np.ndarray:
        """Start of each bin from the set cue (s), (time,); negative in the run-up."""
        return (np.arange(self.counts.shape[1]) - self.n_before) * self.bin_s

    @property
    def responded(self) -> np.ndarray:
        """Whether each trial has a response, (trial,)."""
        return np.isfinite(self.produced_s)


def _as_index(rows: ArrayLike) -> np.ndarray:
    index = np.asarray(rows)
    return index.astype(np.intp) if index.size == 0 and index.dtype != bool else index
