"""The contrasts of a small session without processes or files: the same steps as in a run."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from portfire.accounts import Account
from portfire.comparison import (
    Contrast,
    Ladder,
    Scored,
    climb,
    contrast_accounts,
    contrast_sources,
    fold_of,
    training_rows,
)
from portfire.estimation import Fit
from portfire.session import Trials

from ..estimation._world import SOURCES, fit_small

LEVEL, MIN_GAIN = 0.05, 0.05


@dataclass(frozen=True)
class Light:
    """Contrasts by source, and the ladder of fits to all trials behind them."""

    contrasts: dict[str, Contrast]
    ladder: Ladder


def climb_small(
    trials: Trials, accounts: Sequence[Account], start: Fit | None = None, tolerance: float = 0.1
) -> Ladder:
    """Fits of these accounts, the full one first, until nested ones agree."""
    full = fit_small(trials, str(accounts[0]), start=start, tolerance=tolerance)

    def refit(account: Account, start: Fit) -> Fit:
        return fit_small(trials, str(account), start=start, tolerance=tolerance)

    return climb(full, accounts, refit, tolerance)


def contrast_small(trials: Trials, sources: Sequence[str] = SOURCES, n_folds: int = 3) -> Light:
    """Contrast sources at the true number of latent dimensions."""
    accounts = contrast_accounts(SOURCES, sources)
    whole = climb_small(trials, accounts)
    loglik = {str(account): np.full(len(trials), np.nan) for account in accounts}
    fold = fold_of(trials.index, trials.n_session, n_folds)
    n_train = []
    for j in range(n_folds):
        train = trials[training_rows(trials.index, trials.n_session, n_folds, {j})]
        held_out = np.flatnonzero(fold == j)
        ladder = climb_small(train, accounts, whole.fits[str(accounts[0])], 0.3)
        n_train.append(len(train))
        for account, fitted in ladder.fits.items():
            loglik[account][held_out] = fitted.score(trials[held_out])["loglik"]
    setup = whole.fits[str(accounts[0])].setup
    values = {account: fitted.value for account, fitted in whole.fits.items()}
    scored = Scored(setup, values, loglik, float(np.mean(n_train)), n_folds)
    found = contrast_sources(scored, sources, LEVEL, MIN_GAIN)
    return Light({contrast.source: contrast for contrast in found}, whole)
