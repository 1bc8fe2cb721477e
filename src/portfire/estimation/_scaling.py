"""Coordinates in which a unit step means about the same everywhere.

Parameters are grouped in blocks whose information, were the path known, is a small matrix; each block
is moved by the inverse of that matrix's Cholesky factor (quasi-Newton acceleration of EM: Jamshidian
and Jennrich 1997, J. R. Stat. Soc. B 59:569, from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from portfire.dynamics import READOUTS, Setup, spread_kernels
from portfire.estimation._freedom import Freedom
from portfire.estimation._stretch import n_stretches, pull_through, stretch, stretch_map
from portfire.inference import Moments, Packed, Path

_SCALING_TRIALS = 192
_MAX_STRETCH = 0.3


def _unit_move(information: np.ndarray, floor: float) -> np.ndarray:
    """L⁻ᵀ for the Cholesky factor L of an information matrix: its columns are moves of one unit."""
    size = len(information)
    information = information + (floor + 1e-9 * np.trace(information) / max(size, 1)) * np.eye(size)
    return np.linalg.inv(np.linalg.cholesky(information)).T


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
        Unit moves, as columns, of readout row, log rate and drift of a unit.
    steps : array, shape (k, k)
        Of a row of transition, offset, cue response and lasting pushes.
    prompt_left, prompt_right : arrays
        Of the pushes at the set cue (state by column).
    initial, sustained : arrays, shape (D, D)
        Size of a unit step of the trial-to-trial factors.
    scalars : dict of float or array
        For the parameters left.
    stretches : array, shape (D(D+1)/2, D(D+1)/2 or 0)
        Moves of the latent space as a whole, a column a coordinate; none while the ascent is far off.
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
    stretches: np.ndarray

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
        sizes += [(name, self.centre[name].shape) for name in self.scalars]
        return [*sizes, ("stretches", self.stretches.shape[1:])]

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
        moved = np.einsum("nij,nj->ni", self.units, parts["units"])
        out["readout"] += moved[:, :d]
        out["log_rate"] += moved[:, d]
        if free.drift:
            out["drift"] += moved[:, d + 1 :]
        rows = parts["steps"] @ self.steps.T
        n_cue = out["cue"].shape[1]
        out["transition"] += rows[:, :d]
        out["offset"] += rows[:, d]
        out["cue"] += rows[:, d + 1 : d + 1 + n_cue]
        out["push"][:, free.lasting] += rows[:, d + 1 + n_cue :]
        if len(free.prompt):
            out["push"][:, free.prompt] += self.prompt_left @ parts["prompt"] @ self.prompt_right.T
        if free.initial_factor:
            out["initial_factor"] += self.initial @ parts["initial"]
        if free.sustained_factor:
            out["sustained_factor"] += self.sustained @ parts["sustained"]
        for name, scale in self.scalars.items():
            out[name] = out[name] + scale * parts[name]
        return stretch(out, self.stretches @ parts["stretches"]) if self.stretches.size else out

    def frame(self, flat: np.ndarray) -> np.ndarray:
        """Map of the latent space that the stretches in a flat vector make, shape (D, D)."""
        return stretch_map(self.stretches @ self._split(flat)["stretches"], len(self.prompt_left))

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

    def longest(self, direction: np.ndarray) -> float:
        """Share of a step, at most one, that stretches no axis of the latent space too far at once."""
        along = float(np.linalg.norm(self.stretches @ self._split(direction)["stretches"]))
        return min(1.0, _MAX_STRETCH / max(along, 1e-300))

    def pull_back(self, gradient: dict[str, np.ndarray], flat: np.ndarray | None = None) -> np.ndarray:
        """Gradient by the flat vector, at ``flat`` (default: zero), from that by the parameters."""
        free = self.freedom
        by_stretch = np.zeros(0)
        if self.stretches.size:
            flat = np.zeros(self.size) if flat is None else flat
            along = self.stretches @ self._split(flat)["stretches"]
            gradient, by_stretch = pull_through(self.parameters(flat), along, gradient)
            by_stretch = self.stretches.T @ by_stretch
        blocks = [gradient["readout"], gradient["log_rate"][:, None]]
        units = np.concatenate([*blocks, gradient["drift"]] if free.drift else blocks, axis=1)
        pieces = [np.einsum("nij,ni->nj", self.units, units).ravel()]
        pieces.append((self._rows(gradient) @ self.steps).ravel())
        if len(free.prompt):
            prompt = self.prompt_left.T @ gradient["push"][:, free.prompt] @ self.prompt_right
            pieces.append(prompt.ravel())
        if free.initial_factor:
            pieces.append((self.initial.T @ gradient["initial_factor"]).ravel())
        if free.sustained_factor:
            pieces.append((self.sustained.T @ gradient["sustained_factor"]).ravel())
        pieces += [np.ravel(scale * gradient[name]) for name, scale in self.scalars.items()]
        return np.concatenate([*pieces, by_stretch])


def make_scaling(
    centre: dict[str, np.ndarray],
    setup: Setup,
    freedom: Freedom,
    packed: Packed,
    posteriors: list[tuple[Path, Moments]],
) -> Scaling:
    """Scaling from the posterior at the starting values.

    Parameters
    ----------
    posteriors : list of (Path, Moments)
        Modes and covariances of every chunk of ``packed``.
    """
    stride = max(1, packed.n_trials // _SCALING_TRIALS)
    share = sum(len(rows[::stride]) for rows in packed.members) / packed.n_trials
    d, before = setup.latent_dim, setup.n_before
    n_cue, lasting, prompt = setup.model.n_bumps, freedom.lasting, freedom.prompt
    k_unit, k_step = d + 1 + setup.n_drift * freedom.drift, d + 1 + n_cue + len(lasting)
    units = np.zeros((setup.n_units, k_unit, k_unit))
    steps = np.zeros((k_step, k_step))
    rows_gram = np.zeros((len(prompt), len(prompt)))
    readout, own_information = READOUTS[setup.model.readout], dict[str, np.ndarray]()
    for chunk, (mode, moments) in zip(packed.chunks, posteriors, strict=True):
        # Lanes are sorted by length, then by session time: every so many of them cover both.
        x, cov = np.asarray(mode.x)[..., ::stride], np.asarray(moments.covariance)[..., ::stride]
        mask, drift = np.asarray(chunk.mask)[:, ::stride], np.asarray(chunk.drift)[:, ::stride]
        rows = np.asarray(chunk.rows)[:, ::stride]
        n_time = len(x)
        at = np.nonzero(mask)
        spread = np.moveaxis(cov, -1, 1)[at]
        features = np.concatenate(
            [np.moveaxis(x, -1, 1)[at], np.ones((len(at[0]), 1)), drift.T[at[1], : k_unit - d - 1]], axis=1
        )
        eta = features[:, :d] @ centre["readout"].T + centre["log_rate"]
        eta = eta + features[:, d + 1 :] @ centre["drift"][:, : k_unit - d - 1].T
        weight, own = readout.information(centre, eta, setup.bin_s)
        for name, seen in own.items():
            own_information[name] = own_information.get(name, 0.0) + seen / share
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
    scalars |= {name: 1.0 / np.sqrt(seen) for name, seen in own_information.items()}
    lasting_size = np.sqrt(setup.n_reference * noise / (2 * n_trials))
    return Scaling(
        centre=centre,
        freedom=freedom,
        units=np.stack([_unit_move(unit / share + prior, 1.0) for unit in units]),
        steps=_unit_move(steps / (share * noise), 1.0),
        prompt_left=_unit_move(np.linalg.inv(initial_cov), 0.0),
        prompt_right=_unit_move(rows_gram / share, 1e-6) if len(prompt) else np.zeros((0, 0)),
        initial=np.linalg.cholesky(initial_cov) / np.sqrt(2 * n_trials),
        sustained=lasting_size * np.eye(d),
        scalars=scalars,
        stretches=np.zeros((n_stretches(d), 0)),
    )
