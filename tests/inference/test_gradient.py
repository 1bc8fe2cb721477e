"""The objective's gradient against central differences, for every parameter."""

from __future__ import annotations

import numpy as np
import pytest

from portfire.dynamics import READOUTS
from portfire.inference import Path, laplace, laplace_gradient, start_path

from ._cases import Case, rich_case

pytestmark = pytest.mark.usefixtures("tight")

STEP = 1e-5


def evaluate(case: Case, path: Path) -> tuple[float, Path]:
    posterior = laplace(case.params, case.setup, case.chunk, path)
    correction = laplace_gradient(case.params, case.setup, case.chunk, posterior)[2]
    return float((posterior.value + correction) @ case.chunk.weight), posterior.mode


@pytest.mark.parametrize("n_before", [0, 3])
@pytest.mark.parametrize("readout", list(READOUTS))
def test_gradient_agrees_with_central_differences(readout: str, n_before: int) -> None:
    case = rich_case(readout, n_before, seed=3)
    # An empty lane must not count.
    case = case.with_chunk(weight=np.array([1.0, 1.0, 0.0]))
    posterior = laplace(case.params, case.setup, case.chunk, start_path(case.setup, case.chunk))
    gradient = laplace_gradient(case.params, case.setup, case.chunk, posterior)[0]
    assert set(gradient) == set(case.params)
    for name, value in case.params.items():
        value, found = np.asarray(value), np.asarray(gradient[name])
        assert found.shape == value.shape
        numeric = np.zeros_like(value)
        for at in np.ndindex(value.shape):
            ends = []
            for sign in (1, -1):
                moved = value.copy()
                moved[at] += sign * STEP
                ends.append(evaluate(case.with_params(**{name: moved}), posterior.mode)[0])
            numeric[at] = (ends[0] - ends[1]) / (2 * STEP)
        assert np.abs(numeric).max() > 1e-3, name
        np.testing.assert_allclose(found, numeric, rtol=2e-6, atol=2e-6, err_msg=name)


def test_gradient_by_the_course_of_a_push_with_kernels_of_its_own() -> None:
    """What parameters may add: kernels that are not those of the setup, and an input of every bin."""
    case = rich_case("poisson", 0, seed=4)
    rng = np.random.default_rng(0)
    n_columns, n_time = len(case.setup.columns), case.chunk.mask.shape[0]
    decay = rng.uniform(0.3, 1.0, n_columns + 1)
    course = 0.1 * rng.standard_normal((case.setup.latent_dim, n_columns, n_time))
    case = case.with_params(decay=decay, course=course)
    posterior = laplace(case.params, case.setup, case.chunk, start_path(case.setup, case.chunk))
    gradient = laplace_gradient(case.params, case.setup, case.chunk, posterior)[0]
    assert not np.any(gradient["decay"])
    for name in ("course", "push", "sustained_factor"):
        value, found = np.asarray(case.params[name]), np.asarray(gradient[name])
        for at in list(np.ndindex(value.shape))[::3]:
            ends = []
            for sign in (1, -1):
                moved = value.copy()
                moved[at] += sign * STEP
                ends.append(evaluate(case.with_params(**{name: moved}), posterior.mode)[0])
            assert found[at] == pytest.approx((ends[0] - ends[1]) / (2 * STEP), rel=2e-6, abs=2e-6), name
