"""Coordinates in which a unit step means about the same everywhere.

Parameters are grouped in blocks whose information, were the path known, is a small matrix; each block
is moved by the inverse of that matrix's Cholesky factor (quasi-Newton acceleration of EM: Jamshidian
and Jennrich 1997, J. R. Stat. Soc. B 59:569, from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import solve_triangular

from portfire.dynamics import Setup, spread_kernels
from portfire.estimation._freedom import Freedom
from portfire.inference import Moments, Packed, Path


def _factor(information: np.ndarray, floor: float) -> np.ndarray:
    size = len(information)
    information = information + (floor + 1e-9 * np.trace(information) / max(size, 1)) * np.eye(size)
    return np.linalg.cholesky(information)


@dataclass(frozen=True)
class Scaling:
    """Affine map between parameters and the flat vector that the optimiser moves.

    Parameters
    ----------
    centre : dict of arrays
        Parameters at the flat vector zero.
    freedom : Freedom
        What may move.
    units : array, shape (unit, k, k)
        Cholesky factors for readout row, log rate and drift of a unit.
    steps : array, shape (k, k)
        For a row of transition, offset, cue response and lasting pushes.
    prompt_left, prompt_right : arrays
        For the pushes at the set cue (state by column).
    initial, sustained : arrays, shape (D, D)
        Size of a unit step of the trial-to-trial factors.
    scalars : dict of float or array
        For the parameters left.
    """

    centre: dict[str, np.ndarray]
    freedom: Freedom
    units: np.ndarray
    steps: np.ndarray
    prompt_left: np.ndarray
    prompt_right: np.ndarray
    initial: np.ndarray
    sustained: np.ndarray
    scalars: dict[str, np.ndarray]

    def _sizes(self) -> list[tuple[str, tuple[int, ...]]]:
        d = len(self.prompt_left)
        sizes: list[tuple[str, tuple[int, ...]]] = [
            ("units", self.units.shape[:2]),
            ("steps", (d, len(self.steps))),
            ("prompt", (d, len(self.prompt_right))),
        ]
        if self.freedom.initial_factor:
            sizes.append(("initial", (d, d)))
        if self.freedom.sustained_factor:
            sizes.append(("sustained", (d, d)))
        return sizes + [(name, self.centre[name].shape) for name in self.scalars]

    @property
    def size(self) -> int:
        """Length of the flat vector."""
        return sum(int(np.prod(shape)) for _, shape in self._sizes())

    def _split(self, flat: np.ndarray) -> dict[str, np.ndarray]:
        parts, start = {}, 0
        for name, shape in self._sizes():
            stop = start + int(np.prod(shape))
            parts[name] = flat[start:stop].reshape(shape)
            start = stop
        return parts

    def parameters(self, flat: np.ndarray) -> dict[str, np.ndarray]:
        """Parameters at a flat vector."""
        out = {name: value.copy() for name, value in self.centre.items()}
        parts, free = self._split(flat), self.freedom
        d = len(self.prompt_left)
        moved = np.linalg.solve(self.units.transpose(0, 2, 1), parts["units"][:, :, None])[:, :, 0]
        out["readout"] += moved[:, :d]
        out["log_rate"] += moved[:, d]
        if free.drift:
            out["drift"] += moved[:, d + 1 :]
        rows = solve_triangular(self.steps, parts["steps"].T, lower=True, trans="T").T
        n_cue = out["cue"].shape[1]
        out["transition"] += rows[:, :d]
        out["offset"] += rows[:, d]
        out["cue"] += rows[:, d + 1 : d + 1 + n_cue]
        out["push"][:, free.lasting] += rows[:, d + 1 + n_cue :]
        if len(free.prompt):
            left = solve_triangular(self.prompt_left, parts["prompt"], lower=True, trans="T")
            out["push"][:, free.prompt] += solve_triangular(
                self.prompt_right, left.T, lower=True, trans="T"
            ).T
        if free.initial_factor:
            out["initial_factor"] += self.initial @ parts["initial"]
        if free.sustained_factor:
            out["sustained_factor"] += self.sustained @ parts["sustained"]
        for name, scale in self.scalars.items():
            out[name] = out[name] + scale * parts[name]
        return out

    def _rows(self, values: dict[str, np.ndarray]) -> np.ndarray:
        return np.concatenate(
            [
                values["transition"],
                values["offset"][:, None],
                values["cue"],
                values["push"][:, self.freedom.lasting],
            ],
            axis=1,
        )

    def pull_back(self, gradient: dict[str, np.ndarray]) -> np.ndarray:
        """Gradient by the flat vector from the gradient by the parameters."""
        free = self.freedom
        blocks = [gradient["readout"], gradient["log_rate"][:, None]]
        units = np.concatenate([*blocks, gradient["drift"]] if free.drift else blocks, axis=1)
        pieces = [np.linalg.solve(self.units, units[:, :, None]).ravel()]
        rows = self._rows(gradient)
        pieces.append(solve_triangular(self.steps, rows.T, lower=True).T.ravel())
        if len(free.prompt):
            left = solve_triangular(self.prompt_left, gradient["push"][:, free.prompt], lower=True)
            pieces.append(solve_triangular(self.prompt_right, left.T, lower=True).T.ravel())
        if free.initial_factor:
            pieces.append((self.initial.T @ gradient["initial_factor"]).ravel())
        if free.sustained_factor:
            pieces.append((self.sustained.T @ gradient["sustained_factor"]).ravel())
        pieces += [np.ravel(scale * gradient[name]) for name, scale in self.scalars.items()]
        return np.concatenate(pieces)


def make_scaling(
    centre: dict[str, np.ndarray],
    setup: Setup,
    freedom: Freedom,
    packed: Packed,
    posteriors: list[tuple[Path, Moments]],
    share: float,
) -> Scaling:
    """Scaling from the posterior at the starting values.

    Parameters
    ----------
    posteriors : list of (Path, Moments)
        Modes and covariances of the first chunks of ``packed``, as many as there are.
    share : float
        Share of the trials that these chunks hold; information is scaled up by its inverse.
    """
    d, before = setup.latent_dim, setup.n_before
    n_cue, lasting, prompt = setup.model.n_bumps, freedom.lasting, freedom.prompt
    k_unit, k_step = d + 1 + setup.n_drift * freedom.drift, d + 1 + n_cue + len(lasting)
    units = np.zeros((setup.n_units, k_unit, k_unit))
    steps = np.zeros((k_step, k_step))
    rows_gram = np.zeros((len(prompt), len(prompt)))
    for chunk, (mode, moments) in zip(packed.chunks, posteriors, strict=False):
        x, cov = np.asarray(mode.x), np.asarray(moments.covariance)
        mask, drift, rows = np.asarray(chunk.mask), np.asarray(chunk.drift), np.asarray(chunk.rows)
        n_time = len(x)
        at = np.nonzero(mask)
        spread = np.moveaxis(cov, -1, 1)[at]
        features = np.concatenate(
            [np.moveaxis(x, -1, 1)[at], np.ones((len(at[0]), 1)), drift.T[at[1], : k_unit - d - 1]], axis=1
        )
        eta = features[:, :d] @ centre["readout"].T + centre["log_rate"]
        eta = eta + features[:, d + 1 :] @ centre["drift"][:, : k_unit - d - 1].T
        if setup.model.readout == "gaussian":
            weight = np.broadcast_to(np.exp(-centre["log_variance"]), eta.shape)
        else:
            weight = setup.bin_s * np.exp(eta)
        outer = (features[:, :, None] * features[:, None, :]).reshape(len(features), -1)
        outer = outer.reshape(-1, k_unit, k_unit)
        outer[:, :d, :d] += spread
        units += (weight.T @ outer.reshape(len(features), -1)).reshape(units.shape)
        n_after = n_time - before
        kernels, cue = spread_kernels(centre, setup, n_after), setup.cue_basis(n_after)
        step, lane = np.nonzero(mask[before + 1 :] * mask[before:-1])
        pushes = rows[lasting][:, lane] * kernels[lasting][:, step + 1]
        z = np.concatenate(
            [
                np.moveaxis(x, -1, 1)[before + step, lane],
                np.ones((len(step), 1)),
                cue[:, step + 1].T,
                pushes.T,
            ],
            axis=1,
        )
        steps += z.T @ z
        steps[:d, :d] += np.moveaxis(cov, -1, 1)[before + step, lane].sum(axis=0)
        rows_gram += rows[prompt] @ rows[prompt].T
    noise = float(centre["noise"])
    n_trials = packed.n_trials
    transition = centre["transition"]
    start_cov = centre["initial_factor"] @ centre["initial_factor"].T
    cov = np.zeros((d, d))
    for _ in range(setup.initial_bins):
        cov = transition @ cov @ transition.T + noise * np.eye(d)
    initial_cov = cov + start_cov
    prior = np.diag([0.0] * (d + 1) + [1.0] * (k_unit - d - 1))
    scalars: dict[str, np.ndarray] = {}
    if "log_run_up_noise" in centre:
        scalars["log_run_up_noise"] = np.array(np.sqrt(2.0 / (n_trials * before * d)))
    if "log_variance" in centre:
        scalars["log_variance"] = np.full(setup.n_units, np.sqrt(2.0 / max(trials_bins(packed), 1)))
    lasting_size = np.sqrt(setup.n_reference * noise / (2 * n_trials))
    return Scaling(
        centre=centre,
        freedom=freedom,
        units=np.stack([_factor(unit / share + prior, 1.0) for unit in units]),
        steps=_factor(steps / (share * noise), 1.0),
        prompt_left=_factor(np.linalg.inv(initial_cov), 0.0),
        prompt_right=_factor(rows_gram / share, 1e-6) if len(prompt) else np.zeros((0, 0)),
        initial=np.linalg.cholesky(initial_cov) / np.sqrt(2 * n_trials),
        sustained=lasting_size * np.eye(d),
        scalars=scalars,
    )


def trials_bins(packed: Packed) -> float:
    """Observed bins of all trials."""
    return float(sum(float(np.sum(chunk.mask)) for chunk in packed.chunks))
