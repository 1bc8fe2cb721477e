"""A latent system with known parameters, in the terms of the fitted model."""

from __future__ import annotations

from dataclasses import dataclass
from typing import cast

import numpy as np

from portfire.accounts import Account, Column
from portfire.dynamics import Setup
from portfire.session import Trials
from portfire.simulate._timer import noise_at_cue


@dataclass(frozen=True)
class Boundary:
    """A response comes a motor delay after ``weights·x`` first reaches ``threshold``.

    Parameters
    ----------
    weights : array, shape (D,)
    threshold : float
    delay_s, delay_sd_s : float
        Motor delay, and its SD (s).
    """

    weights: np.ndarray
    threshold: float
    delay_s: float
    delay_sd_s: float


@dataclass(frozen=True)
class ResponseHazard:
    """A response comes in a bin with probability sigmoid(level + weights·x).

    Parameters
    ----------
    level : float
    weights : array, shape (D,)
    """

    level: float
    weights: np.ndarray


@dataclass(frozen=True)
class Condition:
    """One combination of context and sample interval.

    Parameters
    ----------
    context : str or None
    sample_s : float or None
    target_s : float or None
        The interval asked for (s).
    aimed_s : float or None
        The mean produced interval that the pushes were solved for (s).
    """

    context: str | None
    sample_s: float | None
    target_s: float | None = None
    aimed_s: float | None = None


@dataclass(frozen=True)
class System:
    """Parameters, conditions and the rule of the response; everything that a session is drawn from.

    Parameters
    ----------
    setup : Setup
    account : Account
    params : dict of arrays
        As `dynamics.parameter_shapes` names them, and ``log_run_up_noise``.
    units : tuple of str
    conditions : tuple of Condition
    rows : array, shape (condition, column)
        Design rows.
    response : Boundary or ResponseHazard
    reach_s : float
        Trials without a response so long after the set cue have none (s).
    sample_center, sample_scale : float
        What a sample interval of z = 0 is, and one of z = 1 above it (s).
    """

    setup: Setup
    account: Account
    params: dict[str, np.ndarray]
    units: tuple[str, ...]
    conditions: tuple[Condition, ...]
    rows: np.ndarray
    response: Boundary | ResponseHazard
    reach_s: float
    sample_center: float
    sample_scale: float

    @property
    def initial_covariance(self) -> np.ndarray:
        """P0: noise that every account has at the set cue, and the trial's own initial push, (D, D)."""
        own = self.params["initial_factor"] @ self.params["initial_factor"].T
        noise = float(self.params["noise"])
        return noise_at_cue(self.params["transition"], noise, self.setup.initial_bins) + own

    def drift(self, set_s: np.ndarray) -> np.ndarray:
        """Slow change of log rates, (trial, unit); the first and last set cue span the session."""
        clock = cast(Trials, _Clock(set_s, (float(set_s[0]), float(set_s[-1]))))
        return self.setup.drift_basis(clock) @ self.params["drift"].T


@dataclass(frozen=True)
class _Clock:
    """What the drift basis needs to know of trials."""

    set_s: np.ndarray
    session_span: tuple[float, float]

    def __len__(self) -> int:
        return len(self.set_s)


def list_columns(
    contexts: tuple[str, ...], sample_s: tuple[float, ...]
) -> tuple[tuple[Column, ...], tuple[str, ...]]:
    """Push columns of the full account and sources of a session with these levels."""
    names = sorted(contexts)
    blocks = [("interval", "sample")] if len(sample_s) > 1 else []
    if len(names) > 1:
        blocks += [("context", name) for name in names[:-1]]
    columns = tuple(Column(source, level, h) for h in (0.0, float("inf")) for source, level in blocks)
    sources = dict.fromkeys([source for source, _ in blocks] + ["trial"])
    return columns, tuple(sources)


def design_rows(
    conditions: tuple[Condition, ...], columns: tuple[Column, ...], center: float, scale: float
) -> np.ndarray:
    """Design rows of conditions, (condition, column); contexts as sum-to-zero contrasts."""
    levels = sorted({c.context for c in conditions if c.context is not None})
    rows = np.zeros((len(conditions), len(columns)))
    for place, condition in enumerate(conditions):
        for k, column in enumerate(columns):
            if column.source == "interval":
                assert condition.sample_s is not None
                rows[place, k] = (condition.sample_s - center) / scale
            else:
                last = float(condition.context == levels[-1])
                rows[place, k] = float(condition.context == column.level) - last
    return rows


def path_inputs(params: dict[str, np.ndarray], setup: Setup, rows: np.ndarray, n_time: int) -> np.ndarray:
    """Known inputs into every bin from the set cue on: offset, cue response and pushes, (row, time, D)."""
    inputs = np.einsum("dc,ct,rc->rtd", params["push"], setup.kernels(n_time), rows)
    constant = (params["cue"] @ setup.cue_basis(n_time)).T + params["offset"]
    inputs[:, 1:] += constant[1:]
    return inputs


def carry(params: dict[str, np.ndarray], setup: Setup, inputs: np.ndarray) -> np.ndarray:
    """The path that inputs make, (row, time, D)."""
    path = inputs.copy()
    for t in range(1, inputs.shape[1]):
        path[:, t] += path[:, t - 1] @ params["transition"].T
    return path
