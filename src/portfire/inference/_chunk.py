"""Trials packed for the compiled kernels: lanes of similar length, padded and masked."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from portfire.accounts import make_design
from portfire.dynamics import READOUTS, Setup
from portfire.session import Trials

_LANES = (16, 64)
# Short sessions are padded to one length: compiling for others would cost more than it saves.
_LENGTH_SHARES, _FEW_TRIALS = (0.5, 0.7, 1.0), 400


class Chunk(NamedTuple):
    """Trials side by side; the last axis runs over lanes, of which some may be empty.

    Attributes
    ----------
    counts : array, shape (unit, time, lane)
        What the readout models; zero where masked.
    mask : array, shape (time, lane)
        One where the bin was observed.
    rows : array, shape (column, lane)
        Design rows.
    drift : array, shape (basis, lane)
    weight : array, shape (lane,)
        One for a trial, zero for an empty lane.
    constant : array, shape (lane,)
        Log-likelihood terms that no parameter touches (nats).
    place : array of int, shape (lane,)
        Position of the trial in its session (random numbers hang on it).
    """

    counts: jax.Array
    mask: jax.Array
    rows: jax.Array
    drift: jax.Array
    weight: jax.Array
    constant: jax.Array
    place: jax.Array


@dataclass(frozen=True)
class Packed:
    """All chunks of a set of trials, and which trial sits in which lane.

    Parameters
    ----------
    chunks : tuple of Chunk
    members : tuple of int arrays
        For each chunk, the rows of the trials in its first lanes.
    n_trials, n_time : int
    """

    chunks: tuple[Chunk, ...]
    members: tuple[np.ndarray, ...]
    n_trials: int
    n_time: int

    def gather(self, per_chunk: list[np.ndarray], fill: float = np.nan) -> np.ndarray:
        """Put lane-last results of every chunk (…, lane) in trial order, shape (trial, …)."""
        first = np.asarray(per_chunk[0])
        out = np.full((self.n_trials, *first.shape[:-1]), fill)
        for rows, values in zip(self.members, per_chunk, strict=True):
            out[rows] = np.moveaxis(np.asarray(values)[..., : len(rows)], -1, 0)
        return out

    def gather_time(self, per_chunk: list[np.ndarray], fill: float = np.nan) -> np.ndarray:
        """Like `gather` for results (time, …, lane) of unequal lengths, shape (trial, time, …)."""
        first = np.asarray(per_chunk[0])
        out = np.full((self.n_trials, self.n_time, *first.shape[1:-1]), fill)
        for rows, values in zip(self.members, per_chunk, strict=True):
            values = np.moveaxis(np.asarray(values)[..., : len(rows)], -1, 0)[:, : self.n_time]
            out[rows, : values.shape[1]] = values
        return out


def _round_up(value: int, grid: tuple[int, ...]) -> int:
    larger = [int(g) for g in grid if g >= value]
    return larger[0] if larger else int(value)


def pack(trials: Trials, setup: Setup, mask: np.ndarray | None = None) -> Packed:
    """Sort trials by length, cut them into chunks of lanes and pad.

    Parameters
    ----------
    trials : Trials
    setup : Setup
    mask : array of bool, shape (trial, time), optional
        Bins to use; defaults to all observed bins. Narrow it for a causal posterior.
    """
    mask = trials.mask if mask is None else mask & trials.mask
    design = np.concatenate([make_design(trials).rows, setup.drift_basis(trials)], axis=1)
    ends = np.where(mask.any(axis=1), mask.shape[1] - np.argmax(mask[:, ::-1], axis=1), 1)
    order = np.argsort(ends, kind="stable")
    lanes = _round_up(min(len(trials), _LANES[-1]), _LANES)
    # Lengths hang on the session's longest trial, so that parts of a session share compiled code.
    longest = trials.counts.shape[1] - setup.n_before
    shares = _LENGTH_SHARES if trials.n_session > _FEW_TRIALS else (1.0,)
    lengths = tuple(max(2, int(np.ceil(share * longest))) for share in shares)
    chunks, members = [], []
    for part in _cut(order, lanes):
        n_time = setup.n_before + _round_up(max(2, int(ends[part].max()) - setup.n_before), lengths)
        chunks.append(_fill(trials, setup, mask, design, part, lanes, n_time))
        members.append(part)
    return Packed(tuple(chunks), tuple(members), len(trials), trials.counts.shape[1])


def _cut(order: np.ndarray, lanes: int) -> Iterator[np.ndarray]:
    for start in range(0, len(order), lanes):
        yield order[start : start + lanes]


def _fill(
    trials: Trials,
    setup: Setup,
    mask: np.ndarray,
    design: np.ndarray,
    part: np.ndarray,
    lanes: int,
    n_time: int,
) -> Chunk:
    n, keep = len(part), min(n_time, trials.counts.shape[1])
    readout = READOUTS[setup.model.readout]
    counts = np.zeros((setup.n_units, n_time, lanes))
    seen = np.zeros((n_time, lanes))
    used = mask[part, :keep]
    values = readout.transform(trials.counts[part, :keep].astype(float)) * used[:, :, None]
    counts[:, :keep, :n] = values.transpose(2, 1, 0)
    seen[:keep, :n] = used.T
    constant = np.zeros(lanes)
    constant[:n] = (readout.constant(values, setup.bin_s) * used[:, :, None]).sum(axis=(1, 2))
    table = np.zeros((design.shape[1], lanes))
    table[:, :n] = design[part].T
    weight = np.zeros(lanes)
    weight[:n] = 1.0
    place = np.zeros(lanes, dtype=np.int32)
    place[:n] = trials.index[part]
    n_columns = len(setup.columns)
    entries = (counts, seen, table[:n_columns], table[n_columns:], weight, constant, place)
    return Chunk(*map(jnp.asarray, entries))
