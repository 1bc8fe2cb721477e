"""Which accounts a contrast needs, and how nested fits are made to agree."""

from dataclasses import dataclass

import pytest

from portfire.accounts import Account
from portfire.comparison import climb, contrast_accounts

THREE = ("interval", "context", "trial")


@dataclass(frozen=True)
class Toy:
    """Stands for a fit: an account and where it ended."""

    account: Account
    value: float


def test_accounts_of_the_contrasts():
    texts = [str(account) for account in contrast_accounts(THREE, ("context", "trial"))]
    assert texts == [
        "interval=both,context=both,trial=both",
        "interval=both,context=none,trial=both",
        "interval=both,context=initial,trial=both",
        "interval=both,context=sustained,trial=both",
        "interval=both,context=both,trial=none",
        "interval=both,context=both,trial=initial",
        "interval=both,context=both,trial=sustained",
    ]
    assert [str(a) for a in contrast_accounts(("trial",), ())] == ["trial=both"]


def climb_toys(best, first_tries, agreement=0.1):
    """Refits end at the account's own maximum only when started from a fit that is high enough.

    ``best`` gives each account's maximum; ``first_tries`` where the first search ends.
    """
    accounts = contrast_accounts(("context", "trial"), ("context", "trial"))
    left = dict(first_tries)
    log = []

    def refit(account, start):
        log.append((str(account), str(start.account)))
        stuck = left.pop(str(account), None)
        reached = best[str(account)] if stuck is None else stuck
        # Started from a smaller account, a search never ends below it.
        return Toy(account, max(reached, start.value) if account.contains(start.account) else reached)

    full = str(accounts[0])
    start = Toy(accounts[0], left.pop(full, best[full]))
    return climb(start, accounts, refit, agreement), log


BEST = {
    "context=both,trial=both": 10.0,
    "context=none,trial=both": 4.0,
    "context=initial,trial=both": 9.0,
    "context=sustained,trial=both": 5.0,
    "context=both,trial=none": 1.0,
    "context=both,trial=initial": 9.5,
    "context=both,trial=sustained": 1.5,
}


def test_fits_that_agree_are_left_alone():
    ladder, log = climb_toys(BEST, {})
    assert ladder.agreed
    assert ladder.rounds == 0
    assert {account: fitted.value for account, fitted in ladder.fits.items()} == BEST
    assert len(log) == 6
    assert next(iter(ladder.fits)) == "context=both,trial=both"


def test_a_container_that_stopped_short_is_raised():
    """The full account stopped below two of those that it contains; it ends above both."""
    ladder, log = climb_toys(BEST, {"context=both,trial=both": 6.0})
    assert ladder.agreed
    assert ladder.rounds >= 1
    assert ladder.fits["context=both,trial=both"].value == 10.0
    assert ("context=both,trial=both", "context=both,trial=initial") in log


def test_what_a_raised_container_finds_is_handed_down():
    """An account that stopped early gets a new start once its container has risen."""
    ladder, _ = climb_toys(BEST, {"context=both,trial=both": 6.0, "context=initial,trial=both": 2.0})
    assert ladder.agreed
    assert ladder.fits["context=initial,trial=both"].value == 9.0


def test_small_disorder_is_within_the_agreement():
    ladder, log = climb_toys(BEST, {"context=both,trial=both": 9.45}, agreement=0.1)
    assert ladder.agreed
    assert ladder.rounds == 0
    assert len(log) == 6


def test_disorder_that_stays_is_said():
    accounts = contrast_accounts(("trial",), ("trial",))

    def refit(account, start):
        return Toy(account, 0.0 if account == accounts[0] else 1.0)

    assert not climb(Toy(accounts[0], 0.0), accounts, refit, 0.1).agreed


@pytest.mark.parametrize("agreement", [0.05, 0.5])
def test_no_fit_stands_above_one_that_contains_it(agreement):
    ladder, _ = climb_toys(BEST, {"context=both,trial=both": 1.0, "context=none,trial=both": 3.0}, agreement)
    for larger in ladder.fits.values():
        for smaller in ladder.fits.values():
            if larger.account.contains(smaller.account):
                assert smaller.value <= larger.value + agreement
