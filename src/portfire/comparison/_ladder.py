"""The accounts that a contrast needs, and fits of them that agree with one another."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from ..accounts import ROUTES, Account
from ..estimation import Fit

_MAX_ROUNDS = 4

Refit = Callable[[Account, Fit], Fit]


def contrast_accounts(present: tuple[str, ...], sources: Sequence[str]) -> tuple[Account, ...]:
    """The full account, then for every contrasted source the three that take something from it."""
    full = Account.full(present)
    taken = [full.replace(source, route) for source in sources for route in ROUTES if route != "both"]
    return (full, *taken)


@dataclass(frozen=True)
class Ladder:
    """Fits of nested accounts on the same trials.

    Parameters
    ----------
    fits : dict of str to Fit
        By account; the full account first.
    rounds : int
        Rounds of refitting until they agreed.
    agreed : bool
        Whether no account is left by more than the agreement below one that it contains.
    """

    fits: dict[str, Fit]
    rounds: int
    agreed: bool


def climb(full: Fit, accounts: Sequence[Account], refit: Refit, agreement: float = 0.05) -> Ladder:
    """Fit nested accounts until none is below one that it contains, and none gains from its container.

    Parameters
    ----------
    full : Fit
        Of the account that contains all others.
    accounts : sequence of Account
        The full one first.
    refit : callable
        ``refit(account, start)`` fits an account from another account's fit.
    agreement : float, default 0.05
        Nats by which a smaller account may stand above one that contains it.

    Returns
    -------
    Ladder
    """
    fits: dict[str, Fit] = {str(accounts[0]): full}
    for account in sorted(accounts[1:], key=lambda account: -account.n_pushes()):
        # The lowest container is the nearest to what is left: it has already lost what matters.
        containers = [
            fits[str(other)] for other in accounts if str(other) in fits and other.contains(account)
        ]
        fits[str(account)] = refit(account, min(containers, key=lambda fitted: fitted.value))
    rounds = 0
    while rounds < _MAX_ROUNDS and (raised := _raise_containers(fits, accounts, refit, agreement)):
        rounds += 1
        for account in accounts:
            for larger in raised:
                if larger != account and larger.contains(account):
                    again = refit(account, fits[str(larger)])
                    if again.value > fits[str(account)].value:
                        fits[str(account)] = again
    in_order = {str(account): fits[str(account)] for account in accounts}
    return Ladder(in_order, rounds, not _behind(fits, accounts, agreement))


def _behind(
    fits: dict[str, Fit], accounts: Sequence[Account], agreement: float
) -> list[tuple[Account, Account]]:
    """Pairs of an account and a smaller one that stands higher."""
    return [
        (larger, smaller)
        for larger in accounts
        for smaller in accounts
        if larger != smaller
        and larger.contains(smaller)
        and fits[str(smaller)].value > fits[str(larger)].value + agreement
    ]


def _raise_containers(
    fits: dict[str, Fit], accounts: Sequence[Account], refit: Refit, agreement: float
) -> list[Account]:
    raised = []
    # From the smallest container up, so that a rise is handed on within one round.
    low = {larger for larger, _ in _behind(fits, accounts, agreement)}
    for larger in sorted(low, key=lambda account: (account.n_pushes(), str(account))):
        behind = _behind(fits, accounts, agreement)
        candidates = [fits[str(smaller)] for container, smaller in behind if container == larger]
        if not candidates:
            continue
        again = refit(larger, max(candidates, key=lambda fitted: fitted.value))
        if again.value > fits[str(larger)].value:
            fits[str(larger)] = again
            raised.append(larger)
    return raised
