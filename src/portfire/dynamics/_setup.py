"""What stays fixed while a model is fitted: sizes, time grid, bases."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from portfire.accounts import Column, make_design, push_kernel
from portfire.dynamics._spec import ModelFile
from portfire.session import Trials


@dataclass(frozen=True)
class Setup:
    """Sizes and constants of one model on one session; hashable, so that compiled code is kept by it.

    Parameters
    ----------
    model : ModelFile
    latent_dim, n_units : int
        D and N.
    bin_s : float
        Bin width Δ (s).
    n_before : int
        Run-up bins before the set cue.
    n_reference : int
        Bins of the session's median trial, over which push kernels sum to one.
    columns : tuple of Column
        Push columns of the full account.
    sources : tuple of str
        Sources that the session has.
    n_drift : int
        Basis functions of the slow drift (0: none).
    """

    model: ModelFile
    latent_dim: int
    n_units: int
    bin_s: float
    n_before: int
    n_reference: int
    columns: tuple[Column, ...]
    sources: tuple[str, ...]
    n_drift: int

    @property
    def initial_bins(self) -> int:
        """Bins over which noise accumulates before the set cue (for P00); at least one."""
        return max(1, round(self.model.initial_noise_s / self.bin_s))

    def kernels(self, n_time: int) -> np.ndarray:
        """Push kernels of the columns over bins 0 … n_time-1, shape (column, time)."""
        rows = [push_kernel(c.persistence_s, self.bin_s, self.n_reference, n_time) for c in self.columns]
        return np.array(rows).reshape(len(self.columns), n_time)

    def border_kernel(self, n_time: int) -> np.ndarray:
        """Kernel of the trial-to-trial sustained push, shape (time,)."""
        return push_kernel(float("inf"), self.bin_s, self.n_reference, n_time)

    def cue_basis(self, n_time: int) -> np.ndarray:
        """Raised cosines over the cue response, shape (bump, time); zero at bin 0 and after its end."""
        return cue_basis(self.model.n_bumps, self.model.cue_duration_s, self.bin_s, n_time)

    def drift_basis(self, trials: Trials) -> np.ndarray:
        """Drift basis of these trials, shape (trial, basis); coefficients have unit prior SD."""
        if self.n_drift == 0:
            return np.zeros((len(trials), 0))
        first, last = trials.session_span
        time = (trials.set_s - first) / max(last - first, 1e-9)
        return self.model.drift_sd * _drift_basis(time, self.n_drift, self.model.drift_timescale)

    def to_dict(self) -> dict[str, Any]:
        """A JSON-able copy."""
        return {
            "latent_dim": self.latent_dim,
            "n_units": self.n_units,
            "bin_s": self.bin_s,
            "n_before": self.n_before,
            "n_reference": self.n_reference,
            "columns": [
                [c.source, c.level, None if np.isinf(c.persistence_s) else c.persistence_s]
                for c in self.columns
            ],
            "sources": list(self.sources),
            "n_drift": self.n_drift,
        }


def cue_basis(n_bumps: int, duration_s: float, bin_s: float, n_time: int) -> np.ndarray:
    """Overlapping raised cosines that start at the cue and are over after ``duration_s`` seconds."""
    if n_bumps == 0 or duration_s <= 0:
        return np.zeros((0, n_time))
    spacing = duration_s / (n_bumps + 1)
    time = np.arange(n_time)[None] * bin_s
    centre = spacing * np.arange(1, n_bumps + 1)[:, None]
    phase = np.clip((time - centre) / spacing, -1.0, 1.0)
    basis = 0.5 * (1 + np.cos(np.pi * phase))
    basis[:, 0] = 0.0
    return basis


def n_drift_functions(timescale: float) -> int:
    """Basis functions that a squared-exponential drift of this length scale (share of session) needs."""
    return int(np.clip(np.ceil(1.2 / timescale), 2, 20))


def _drift_basis(time: np.ndarray, n_functions: int, timescale: float) -> np.ndarray:
    """Low-rank Gaussian process (inducing points on a grid): reverts to the mean outside its data."""
    grid = np.linspace(0.0, 1.0, n_functions)

    def kernel(a: np.ndarray, b: np.ndarray) -> np.ndarray:
        return np.exp(-0.5 * ((a[:, None] - b[None]) / timescale) ** 2)

    factor = np.linalg.cholesky(kernel(grid, grid) + 1e-6 * np.eye(n_functions))
    return np.linalg.solve(factor, kernel(grid, time)).T


def make_setup(
    trials: Trials, model: ModelFile, latent_dim: int, drift: bool, n_reference: int | None = None
) -> Setup:
    """The fixed part of a model for these trials.

    ``n_reference`` defaults to the median number of scored bins of ``trials``; give the session's
    where ``trials`` is a part of it.
    """
    design = make_design(trials)
    return Setup(
        model=model,
        latent_dim=latent_dim,
        n_units=len(trials.unit),
        bin_s=trials.bin_s,
        n_before=trials.n_before,
        n_reference=int(n_reference or max(1, round(float(np.median(trials.n_bins))))),
        columns=design.columns,
        sources=design.sources,
        n_drift=n_drift_functions(model.drift_timescale) if drift else 0,
    )
