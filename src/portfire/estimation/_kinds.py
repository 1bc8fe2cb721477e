"""The kinds of dynamics that there are, by the name that model files give them."""

from __future__ import annotations

from portfire.accounts import Account
from portfire.dynamics import Setup
from portfire.estimation._kind import Kind
from portfire.estimation._linear_kind import Linear

KINDS: dict[str, Kind] = {"linear": Linear()}


def kind_of(setup: Setup) -> Kind:
    """The kind of dynamics of a setup."""
    return KINDS[setup.model.dynamics]


def count_route(account: Account, source: str, persistence_s: float, setup: Setup) -> int:
    """Free parameters of one route of a source."""
    return kind_of(setup).count_route(account, source, persistence_s, setup)
