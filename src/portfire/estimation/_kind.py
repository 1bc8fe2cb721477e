"""What a kind of dynamics has to state before the rest of the package can fit, score and use it."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Protocol

import numpy as np

from portfire.accounts import Account
from portfire.dynamics import Setup
from portfire.estimation._objective import Values
from portfire.inference import Packed
from portfire.session import Trials


@dataclass(frozen=True)
class Found:
    """Where a search ended.

    Parameters
    ----------
    params : dict of arrays
    canonical : array, shape (D, D)
        Map to the canonical coordinates of the state.
    value : float
        What was maximised (nats).
    trace : tuple of float
        The same after every iteration; its first entry belongs to the starting values.
    status : str
        A key of `STATUS_WORDS`.
    """

    params: Values
    canonical: np.ndarray
    value: float
    trace: tuple[float, ...]
    status: str


@dataclass(frozen=True)
class Inferred:
    """Posterior of states and pushes, in the coordinates of the fit; time includes the run-up.

    Parameters
    ----------
    state : array, shape (trial, time, D)
        NaN past the end of what was packed.
    state_cov : array, shape (trial, time, D, D)
    sustained : array, shape (trial, D)
        Push that lasts, of the trial's condition and its own together.
    sustained_cov : array, shape (trial, D, D)
    extra : dict
        What only this kind has: name to dimensions and values, e.g. ``("trial", "time", "regime")``.
        Values by time are blanked where the state is.
    """

    state: np.ndarray
    state_cov: np.ndarray
    sustained: np.ndarray
    sustained_cov: np.ndarray
    extra: dict[str, tuple[tuple[str, ...], np.ndarray]] = field(default_factory=dict)


@dataclass(frozen=True)
class Forward:
    """Paths drawn from the model itself, with the pushes behind them.

    Parameters
    ----------
    path : array, shape (trial, time, D)
        From the set cue on.
    initial, sustained : arrays, shape (trial, D)
        Pushes of the trial's condition and its own together; noise at the set cue is not in them.
    extra : dict
        What else was drawn, as in `Inferred`.
    """

    path: np.ndarray
    initial: np.ndarray
    sustained: np.ndarray
    extra: dict[str, tuple[tuple[str, ...], np.ndarray]] = field(default_factory=dict)


class Kind(Protocol):
    """A kind of dynamics. Parameters have the names and shapes of `dynamics.parameter_shapes`.

    Trials come packed (`inference.pack`), with the bins that may be used: a causal posterior is the
    posterior on trials packed with a narrower mask, so a kind need not know of cutoffs.

    Attributes
    ----------
    equations : str
        The model in the names of its parameters, for ``truth.json``.
    """

    equations: str

    def start_values(self, trials: Trials, setup: Setup, seed: int) -> Values:
        """Parameters to start from, found in the data; every push is free in them."""

    def project(self, params: Values, setup: Setup, account: Account, drift: bool = True) -> Values:
        """The parameters with every push that the account does not allow put to zero."""

    def evaluate(self, params: Values, setup: Setup, packed: Packed) -> tuple[float, Values]:
        """What is maximised (nats), and its gradient by every parameter (zero where one never moves)."""

    def search(
        self,
        trials: Trials,
        setup: Setup,
        account: Account,
        drift: bool,
        start: Values | None,
        tolerance: float,
        max_iterations: int,
        seed: int,
    ) -> Found:
        """Maximise for an account, from the data or from parameters of any account on this setup."""

    def loglik(
        self, params: Values, setup: Setup, packed: Packed, seed: int
    ) -> tuple[np.ndarray, np.ndarray]:
        """Log marginal likelihood of every trial and its Monte-Carlo standard error, (trial,) each, nats.

        Of all counts packed, run-up included, and never a bound. Random numbers hang on the seed and on
        the trial's place in its session only.
        """

    def posterior(self, params: Values, setup: Setup, packed: Packed) -> Inferred:
        """Posterior of state and pushes."""

    def causal_states(self, params: Values, setup: Setup, packed: Packed) -> np.ndarray:
        """State in every bin from the set cue on given the counts up to there, (trial, time, D)."""

    def draw_posterior(
        self, params: Values, setup: Setup, packed: Packed, n_draws: int, seed: int
    ) -> list[np.ndarray]:
        """Paths drawn from the posterior, a chunk an entry, shape (time, D, draw, lane)."""

    def draw_forward(
        self, params: Values, setup: Setup, rows: np.ndarray, n_time: int, rng: np.random.Generator
    ) -> Forward:
        """Paths from the model itself for design rows (trial, column)."""

    def local_transition(self, params: Values, setup: Setup) -> np.ndarray:
        """The linear map of a bin that the dynamics amount to about the mean initial state, (D, D)."""

    def count_route(self, account: Account, source: str, persistence_s: float, setup: Setup) -> int:
        """Free parameters of one route of a source."""
