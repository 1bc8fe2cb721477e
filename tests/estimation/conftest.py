"""One small session and its full fit, made once for all tests of fits."""

from __future__ import annotations

import pytest

from portfire.estimation import Fit
from portfire.session import Trials

from ._world import draw_world, fit_small


@pytest.fixture(scope="session")
def world() -> tuple[Trials, Fit]:
    """Trials and the truth behind them."""
    return draw_world("interval=sustained,context=initial,trial=initial", seed=1)


@pytest.fixture(scope="session")
def full(world: tuple[Trials, Fit]) -> Fit:
    """The full account, fitted from the data alone."""
    return fit_small(world[0])
