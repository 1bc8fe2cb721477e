"""What tests of every layer share."""

from __future__ import annotations

import os
from pathlib import Path

# Before NumPy is loaded: threads for tiny matrices only wait for one another.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import pytest

CHECKOUT = Path(__file__).resolve().parents[1]


@pytest.fixture(scope="session")
def checkout() -> Path:
    """The top folder of the source tree."""
    return CHECKOUT


@pytest.fixture(scope="session")
def recordings() -> Path:
    """The folder with the recorded sessions ``foreperiod-a`` and ``foreperiod-b``.

    ``PORTFIRE_RECORDINGS`` names it; without that it is looked for beside the checkout, and the test is
    skipped where it is absent.
    """
    named = os.environ.get("PORTFIRE_RECORDINGS")
    if named is not None:
        folder = Path(named)
        assert folder.is_dir(), f"PORTFIRE_RECORDINGS is {named}, which is not a folder"
        return folder
    folder = CHECKOUT.parent / "shared" / "recordings"
    if not folder.is_dir():
        pytest.skip("no recorded sessions: set PORTFIRE_RECORDINGS to the folder that holds them")
    return folder
