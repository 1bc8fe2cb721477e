"""What the tests of the inference engine share."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from portfire.inference import _smoother, laplace


@pytest.fixture(scope="module")
def tight() -> Iterator[None]:
    """Newton runs on to rounding, so that a Laplace value is that of the exact mode."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(_smoother, "DECREMENT_TOLERANCE", 1e-14)
        laplace.clear_cache()
        yield
    laplace.clear_cache()
