"""The variational bound: below the likelihood, and its gradient against central differences."""

from __future__ import annotations

import numpy as np
import pytest

from portfire.dynamics import READOUTS
from portfire.inference import _variational, bound_gradient, fit_bound, start_guess

from ._cases import Case, rich_case

STEP = 1e-5


@pytest.fixture(scope="module", autouse=True)
def settled():
    """The search runs on to rounding, so that the bound is at its maximum."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(_variational, "DECREMENT_TOLERANCE", 1e-16)
        fit_bound.clear_cache()
        yield
    fit_bound.clear_cache()


def evaluate(case: Case, guess):
    bound = fit_bound(case.params, case.setup, case.chunk, guess)
    return float(bound.value @ case.chunk.weight), bound


@pytest.mark.parametrize("readout", list(READOUTS))
def test_gradient_agrees_with_central_differences(readout: str) -> None:
    case = rich_case(readout, 3, seed=3)
    case = case.with_chunk(weight=np.array([1.0, 1.0, 0.0]))
    _, bound = evaluate(case, start_guess(case.setup, case.chunk))
    gradient = bound_gradient(case.params, case.setup, case.chunk, bound)
    assert set(gradient) == set(case.params)
    for name, value in case.params.items():
        value, found = np.asarray(value), np.asarray(gradient[name])
        numeric = np.zeros_like(value)
        for at in np.ndindex(value.shape):
            ends = []
            for sign in (1, -1):
                moved = value.copy()
                moved[at] += sign * STEP
                ends.append(evaluate(case.with_params(**{name: moved}), bound.guess)[0])
            numeric[at] = (ends[0] - ends[1]) / (2 * STEP)
        assert np.abs(numeric).max() > 1e-3, name
        np.testing.assert_allclose(found, numeric, rtol=1e-5, atol=1e-5, err_msg=name)
