"""The benchmarks run, agree with what they compare to, and print what they promise."""

from __future__ import annotations

import importlib.util
import json
import math
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest

RATIOS = (
    "newton_sweep_over_floor",
    "newton_sweep_over_floor_in_chunks",
    "scipy_over_newton_sweep",
    "statsmodels_over_gaussian_pass",
    "fit_over_floor",
    "fit_over_floor_in_chunks",
    "cost_growth_n_trials",
    "cost_growth_n_bins",
    "cost_growth_n_units",
)


def run_bench(checkout: Path, *words: str) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "benchmarks/bench.py", *words]
    return subprocess.run(command, cwd=checkout, capture_output=True, text=True, check=False)


@pytest.fixture(scope="module")
def figures(checkout: Path) -> dict[str, Any]:
    done = run_bench(checkout, "--quick", "--skip-jobs", "--json")
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout, parse_constant=pytest.fail)


@pytest.fixture(scope="module")
def jobs(checkout: Path) -> ModuleType:
    spec = importlib.util.spec_from_file_location("_jobs", checkout / "benchmarks" / "_jobs.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    with pytest.MonkeyPatch.context() as patch:
        patch.setitem(sys.modules, "_jobs", module)
        spec.loader.exec_module(module)
    return module


def numbers(value: object) -> Iterator[float]:
    if isinstance(value, dict):
        for part in value.values():
            yield from numbers(part)
    elif isinstance(value, list):
        for part in value:
            yield from numbers(part)
    elif isinstance(value, int | float):
        yield value


def test_every_ratio_is_there_with_its_sizes_and_its_spread(figures: dict[str, Any]) -> None:
    for name in RATIOS:
        assert figures[name] > 0, name
        spread = figures["spread"][name]
        assert spread["min"] <= spread["median"] == figures[name] <= spread["max"], name
    assert set(figures["sizes"]) == {"sweep", "gaussian", "fit", "growth"}
    assert figures["sizes"]["sweep"] == {"n_trials": 128, "n_bins": 24, "n_units": 20, "latent_dim": 2}
    assert figures["not_run"] == ["job", "demo"]


def test_all_numbers_are_finite(figures: dict[str, Any]) -> None:
    found = list(numbers(figures))
    assert len(found) > 100
    assert all(math.isfinite(value) for value in found)


def test_what_is_timed_gives_the_same_numbers(figures: dict[str, Any]) -> None:
    assert set(figures["agreement"]) == {"scipy_step", "statsmodels_mean", "statsmodels_covariance"}
    assert all(0 <= apart < 1e-8 for apart in figures["agreement"].values())


def test_the_fit_that_is_timed_reaches_the_truth(figures: dict[str, Any]) -> None:
    assert figures["details"]["fit"]["status"] == "converged"
    # A maximum lies above the parameters that the trials were drawn from.
    assert figures["details"]["fit"]["nats_per_trial_above_truth"] > 0


def test_the_ratios_are_those_of_the_times(figures: dict[str, Any]) -> None:
    seconds, ratio = figures["seconds"]["sweep"], figures["spread"]["newton_sweep_over_floor"]
    fastest = seconds["newton_sweep"]["min"] / seconds["floor_whole"]["min"]
    assert ratio["of_fastest"] == pytest.approx(fastest)


@pytest.mark.skipif(not Path("/proc/self/statm").exists(), reason="memory is read from /proc")
def test_memory_of_all_processes_of_a_command_is_seen(jobs: ModuleType, tmp_path: Path) -> None:
    hold = "import time; held = b'x' * (100 * 2**20); time.sleep(1.2)"
    program = (
        f"import subprocess, sys; subprocess.Popen([sys.executable, '-c', {hold!r}]); {hold}; time.sleep(0.5)"
    )
    spent = jobs.watch([sys.executable, "-c", program], tmp_path, tmp_path)
    assert spent.wall_s > 1.7
    assert 200 < spent.rss_mib < 300


def test_a_command_that_fails_is_an_error_with_its_last_words(jobs: ModuleType, tmp_path: Path) -> None:
    command = [sys.executable, "-m", "portfire", "run", "nowhere", "--out", "out", "--quiet"]
    with pytest.raises(SystemExit, match=r"ended with 2: .*nowhere"):
        jobs.watch(command, tmp_path, tmp_path)
