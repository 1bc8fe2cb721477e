"""Which trials are scored by which fold, and which may train it."""

from __future__ import annotations

from collections.abc import Collection

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ..errors import InputError

N_EDGE = 2


def _check_folds(n: int, n_folds: int) -> None:
    if n_folds < 2:
        raise InputError(f"the number of folds is {n_folds}; it must be 2 or more")
    if n < 2 * n_folds:
        raise InputError(
            f"{n} trials are too few for {n_folds} folds; use {2 * n_folds} trials or more, or fewer folds"
        )


def block_size(n: int, n_folds: int) -> int:
    """Trials in one block of the session: ``min(25, max(1, n // (2 n_folds)))``."""
    _check_folds(n, n_folds)
    return min(25, max(1, n // (2 * n_folds)))


def block_of(index: ArrayLike, n: int, n_folds: int) -> NDArray[np.int64]:
    """Block of each trial; the last block of a session may be shorter than the others.

    Parameters
    ----------
    index : (trial,) int
        Positions among the used trials of the session, in session order.
    n : int
        Used trials of the whole session.
    n_folds : int
        Folds J.

    Returns
    -------
    (trial,) int
        ``index // block_size(n, n_folds)``.

    Raises
    ------
    InputError
        If there are fewer than two folds, fewer than two trials a fold, or a position outside the session.
    """
    position = np.asarray(index, dtype=np.int64)
    size = block_size(n, n_folds)
    if position.size and (position.min() < 0 or position.max() >= n):
        raise InputError(
            f"trial positions run from {position.min()} to {position.max()}; "
            f"a session of {n} trials has positions 0 to {n - 1}"
        )
    return np.asarray(position // size, dtype=np.int64)


def fold_of(index: ArrayLike, n: int, n_folds: int) -> NDArray[np.int64]:
    """Fold that holds out each trial: blocks are dealt to the folds in turn.

    Parameters
    ----------
    index : (trial,) int
        Positions among the used trials of the session, in session order.
    n : int
        Used trials of the whole session.
    n_folds : int
        Folds J.

    Returns
    -------
    (trial,) int
        ``block_of(index, n, n_folds) % n_folds``.

    Raises
    ------
    InputError
        As :func:`block_of`.
    """
    return np.asarray(block_of(index, n, n_folds) % n_folds, dtype=np.int64)


def inner_sets(n: int, n_folds: int) -> list[tuple[tuple[int, ...], int | None]]:
    """Splits inside the training sets: folds held out together, and with two folds a part of what is left.

    With three folds or more, each is held out together with the next, so that its training set is split
    twice. With two, nothing would be left: the training half itself is cut in two parts.

    Parameters
    ----------
    n : int
        Used trials of the whole session.
    n_folds : int
        Folds J.

    Returns
    -------
    list of (tuple of int, int or None)
        Folds held out, and the part of the training half that is held out with them.
    """
    _check_folds(n, n_folds)
    if n_folds > 2:
        return [(tuple(sorted((fold, (fold + 1) % n_folds))), None) for fold in range(n_folds)]
    return [((fold,), part) for fold in range(n_folds) for part in (0, 1)]


def count_fewest(n: int, n_folds: int) -> int:
    """Trials of the smallest training set that a session of ``n`` trials comes down to."""
    fewest = n
    for held, part in inner_sets(n, n_folds):
        rows = training_rows(np.arange(n), n, n_folds, held)
        if part is not None:
            if len(rows) < 4:
                return 0
            rows = training_rows(np.arange(len(rows)), len(rows), 2, {part})
        fewest = min(fewest, len(rows))
    return fewest


def training_rows(index: ArrayLike, n: int, n_folds: int, held_out: Collection[int]) -> NDArray[np.intp]:
    """Rows that may train a fit that is scored on the folds held out.

    Two trials of the session are dropped at each edge of every held-out block, so that slow changes
    shared by neighbouring trials do not carry over from training to scoring.

    Parameters
    ----------
    index : (trial,) int
        Positions among the used trials of the session; any selection in any order.
    n : int
        Used trials of the whole session.
    n_folds : int
        Folds J.
    held_out : collection of int
        Folds held out; an inner split holds out two. Empty: every row trains.

    Returns
    -------
    (row,) int
        Positions in `index`, ascending.

    Raises
    ------
    InputError
        As :func:`block_of`, or if a held-out fold does not exist.
    """
    held = frozenset(int(fold) for fold in held_out)
    unknown = sorted(held - set(range(n_folds)))
    if unknown:
        raise InputError(f"fold {unknown[0]} does not exist; {n_folds} folds are numbered 0 to {n_folds - 1}")
    position = np.asarray(index, dtype=np.int64)
    fold_of(position, n, n_folds)
    scored = np.isin(fold_of(np.arange(n), n, n_folds), sorted(held))
    barred = scored.copy()
    for step in range(1, N_EDGE + 1):
        barred[step:] |= scored[:-step]
        barred[:-step] |= scored[step:]
    return np.flatnonzero(~barred[position])
