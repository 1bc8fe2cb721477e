"""The fit in fits/reference still gives the numbers that it gave when it was made."""

from __future__ import annotations

import json
import runpy
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from portfire.estimation import Fit, load_fit
from portfire.session import Trials, read_session
from portfire.simulate import simulate_session


@pytest.fixture(scope="module")
def folder(checkout: Path) -> Path:
    return checkout / "fits" / "reference"


@pytest.fixture(scope="module")
def fitted(folder: Path) -> Fit:
    return load_fit(folder)


@pytest.fixture(scope="module")
def script(checkout: Path) -> dict[str, Any]:
    return runpy.run_path(str(checkout / "benchmarks" / "make_reference_fit.py"))


@pytest.fixture(scope="module")
def trials(script: dict[str, Any]) -> Trials:
    return script["reference_trials"]()


@pytest.fixture(scope="module")
def expected(folder: Path) -> dict[str, Any]:
    return json.loads((folder / "expected.json").read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def found(script: dict[str, Any], fitted: Fit, trials: Trials) -> dict[str, Any]:
    return script["measure"](fitted, trials)


def test_the_simulated_session_is_the_one_that_was_fitted(
    trials: Trials, fitted: Fit, expected: dict[str, Any]
) -> None:
    assert trials.digest == fitted.session["digest"] == expected["digest"]


def test_the_objective_and_its_gradient_are_as_they_were(
    found: dict[str, Any], fitted: Fit, expected: dict[str, Any]
) -> None:
    assert found["objective"] == pytest.approx(fitted.value, abs=1e-3)
    assert found["gradient_norm"] == pytest.approx(expected["gradient_norm"], rel=0.01, abs=0.01)


def test_scores_are_as_they_were(found: dict[str, Any], expected: dict[str, Any]) -> None:
    np.testing.assert_allclose(found["loglik"], expected["loglik"], atol=1e-3)


@pytest.mark.parametrize("name", ["initial", "sustained"])
def test_what_is_inferred_up_to_a_cutoff_is_as_it_was(
    name: str, found: dict[str, Any], expected: dict[str, Any]
) -> None:
    np.testing.assert_allclose(found[name], expected[name], atol=1e-3)


def test_the_fit_is_small(folder: Path) -> None:
    assert sum(path.stat().st_size for path in folder.iterdir()) < 60_000


def test_a_session_can_be_drawn_from_it(folder: Path, tmp_path: Path) -> None:
    simulate_session(folder, tmp_path / "drawn", n_trials=20, seed=1)
    drawn = read_session(tmp_path / "drawn")
    assert len(drawn.trials) == 20
    assert len(drawn.units) == 12
