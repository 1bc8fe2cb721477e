"""What the tests of the inference engine share."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from portfire.inference import _smoother, _variational, fit_bound, laplace


@pytest.fixture(scope="module")
def tight() -> Iterator[None]:
    """Searches run on to rounding: a Laplace value is that of the exact mode, and a bound the best."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(_smoother, "DECREMENT_TOLERANCE", 1e-14)
        patch.setattr(_variational, "DECREMENT_TOLERANCE", 1e-13)
        laplace.clear_cache()
        fit_bound.clear_cache()
        yield
    laplace.clear_cache()
    fit_bound.clear_cache()
