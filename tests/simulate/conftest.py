"""The demo session and small scenarios, drawn once."""

from __future__ import annotations

import pytest

from portfire.accounts import Account
from portfire.session import Session
from portfire.simulate import Drawn, Scenario, demo_scenario, draw_session


@pytest.fixture(scope="session")
def demo() -> tuple[Session, Drawn]:
    return draw_session(demo_scenario(), seed=0)


@pytest.fixture(scope="session")
def everything() -> tuple[Session, Drawn]:
    """A session in which every source pushes by both routes."""
    account = Account.parse("interval=both,context=both,trial=both")
    return draw_session(Scenario(account=account, n_trials=500, n_units=30, drift_sd=0.15), seed=3)
