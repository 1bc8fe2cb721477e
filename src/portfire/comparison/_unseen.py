"""Leave a condition out: does an account speak for a pair of interval and context that it never saw?"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..accounts import Account, make_design
from ..estimation import Fit
from ..session import Trials


@dataclass(frozen=True)
class UnseenCondition:
    """Scores of one condition by fits to the trials of all others.

    Parameters
    ----------
    condition : int
    rows : array of int, shape (trial,)
        Its trials.
    loglik : dict of str to array, shape (trial,)
        By account (nats).
    """

    condition: int
    rows: NDArray[np.int64]
    loglik: dict[str, NDArray[np.float64]]


def separable_conditions(trials: Trials) -> list[int]:
    """Conditions without which every push of the full account is still determined by the others."""
    rows = make_design(trials).rows
    half = rows[:, : rows.shape[1] // 2]
    out = []
    for c in np.unique(trials.condition):
        rest = np.column_stack([np.ones(np.sum(trials.condition != c)), half[trials.condition != c]])
        if len(rest) and np.linalg.matrix_rank(rest) == rest.shape[1]:
            out.append(int(c))
    return out if rows.shape[1] else []


def leave_out(
    trials: Trials, condition: int, accounts: Sequence[Account], refit: Callable[[Account, Trials], Fit]
) -> UnseenCondition:
    """Fit accounts to all other conditions and score this one.

    Parameters
    ----------
    trials : Trials
    condition : int
    accounts : sequence of Account
    refit : callable
        ``refit(account, training trials)``.
    """
    rows = np.flatnonzero(trials.condition == condition)
    train, test = trials[np.flatnonzero(trials.condition != condition)], trials[rows]
    loglik = {str(a): refit(a, train).score(test)["loglik"].to_numpy() for a in accounts}
    return UnseenCondition(condition, rows, loglik)


def compare_unseen(found: Sequence[UnseenCondition], full: str) -> list[dict[str, float | str | int | None]]:
    """Each account's mean score on unseen conditions, and its difference to the full account.

    The standard error of the difference is over conditions, since trials of one share its error.
    """
    out: list[dict[str, float | str | int | None]] = []
    for account in found[0].loglik:
        n = sum(len(one.rows) for one in found)
        by_condition = np.array([float((one.loglik[account] - one.loglik[full]).mean()) for one in found])
        spread = float(by_condition.std(ddof=1) / np.sqrt(len(found))) if len(found) > 1 else None
        out.append(
            {
                "account": account,
                "loglik_per_trial": float(sum(one.loglik[account].sum() for one in found) / n),
                "less_full": float(by_condition.mean()),
                "less_full_se": spread,
                "conditions": len(found),
                "n_trials": n,
            }
        )
    return out
