"""Design rows: how the conditions of a trial enter its pushes."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from portfire.session import Trials

PERSISTENCES = (0.0, float("inf"))


class Column(NamedTuple):
    """One column of push coefficients: a source, its level, and how long the push lasts (s)."""

    source: str
    level: str
    persistence_s: float


@dataclass(frozen=True)
class Design:
    """The design of one set of trials.

    Parameters
    ----------
    columns : tuple of Column
        Every push that the full account has; an account frees some of them.
    rows : array, shape (trial, column)
        Sample interval centred and divided by its SD over the session's used trials (degree 1);
        contexts as sum-to-zero contrasts.
    sources : tuple of str
        The sources this session has.
    """

    columns: tuple[Column, ...]
    rows: np.ndarray
    sources: tuple[str, ...]


def session_sources(trials: Trials) -> tuple[str, ...]:
    """The sources that the session of these trials has (of the whole session, not of the selection)."""
    intervals = {interval for _, interval in trials.conditions if interval is not None}
    present = []
    if len(intervals) > 1:
        present.append("interval")
    if len(trials.contexts) > 1:
        present.append("context")
    return (*present, "trial")


def make_design(trials: Trials) -> Design:
    """Design rows of these trials for the full account of their session."""
    sources = session_sources(trials)
    blocks: list[tuple[str, str, np.ndarray]] = []
    if "interval" in sources:
        assert trials.sample_s is not None
        blocks.append(("interval", "sample", (trials.sample_s - trials.sample_center) / trials.sample_scale))
    if "context" in sources:
        assert trials.context is not None
        labels = np.asarray(trials.context, dtype=object)
        last = (labels == trials.contexts[-1]).astype(float)
        blocks += [("context", level, (labels == level) - last) for level in trials.contexts[:-1]]
    columns = tuple(Column(source, level, h) for h in PERSISTENCES for source, level, _ in blocks)
    values = [block for _ in PERSISTENCES for _, _, block in blocks]
    rows = np.stack(values, axis=1) if values else np.zeros((len(trials), 0))
    return Design(columns, rows.astype(float), sources)
