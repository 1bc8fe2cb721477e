"""Ratios of running times, all measured in this run on this machine.

``python benchmarks/bench.py --json`` prints one JSON object; ``benchmarks/README.md`` says what each
figure means.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import sys
from collections.abc import Callable
from dataclasses import asdict, dataclass
from typing import Any

import jax
import numpy as np
import scipy
import statsmodels
from _fits import measure_fit, measure_growth
from _gaussian import measure_gaussian
from _jobs import measure_demo, measure_job
from _problem import Problem, Sizes, make_problem
from _sweep import measure_sweep

import portfire
from portfire.estimation._objective import n_threads


@dataclass(frozen=True)
class Plan:
    """Sizes and numbers of rounds of every measurement; `statsmodels_trials` are timed of all."""

    sizes: Sizes
    sweep_rounds: int
    statsmodels_trials: int
    gaussian_rounds: int
    fit_rounds: int
    growth_base: Sizes
    growth: dict[str, tuple[int, ...]]
    growth_rounds: int
    job: dict[str, Any]


FULL = Plan(
    sizes=Sizes(1000, 100, 100, 6),
    sweep_rounds=11,
    statsmodels_trials=50,
    gaussian_rounds=7,
    fit_rounds=1,
    growth_base=Sizes(512, 100, 100, 6),
    growth={"n_trials": (256, 512, 1024), "n_bins": (50, 100, 200), "n_units": (50, 100, 200)},
    growth_rounds=7,
    job={"n_trials": 600, "n_units": 80, "folds": 5, "latent_dims": [2, 3, 4, 5]},
)
_SMALL = Sizes(128, 24, 20, 2)
QUICK = Plan(
    sizes=_SMALL,
    sweep_rounds=3,
    statsmodels_trials=6,
    gaussian_rounds=3,
    fit_rounds=1,
    growth_base=_SMALL,
    growth={"n_trials": (64, 128, 192), "n_bins": (12, 24), "n_units": (10, 20)},
    growth_rounds=3,
    job={"n_trials": 120, "n_units": 20, "folds": 2, "latent_dims": [2]},
)


class Bench:
    """Measures what is asked for, and keeps it as one object of plain values.

    Parameters
    ----------
    plan : Plan
    """

    def __init__(self, plan: Plan) -> None:
        self.plan = plan
        self._problem: Problem | None = None
        self.ratios: dict[str, float] = {}
        self.spread: dict[str, dict[str, float]] = {}
        self.seconds: dict[str, Any] = {}
        self.sizes: dict[str, Any] = {}
        self.agreement: dict[str, float] = {}
        self.details: dict[str, Any] = {}

    def problem(self) -> Problem:
        """The trials that all but the growth are measured on, drawn when first asked for."""
        if self._problem is None:
            self._problem = make_problem(self.plan.sizes)
        return self._problem

    def _add(self, name: str, figure: dict[str, float]) -> None:
        self.ratios[name] = figure["median"]
        self.spread[name] = figure

    def sweep(self) -> None:
        """The floor, the Newton sweep, scipy's sweep."""
        rounds, agreement = measure_sweep(self.problem(), self.plan.sweep_rounds)
        self._add("newton_sweep_over_floor", rounds.ratio("newton_sweep", "floor_whole"))
        self._add("newton_sweep_over_floor_in_chunks", rounds.ratio("newton_sweep", "floor_in_chunks"))
        self._add("scipy_over_newton_sweep", rounds.ratio("scipy", "newton_sweep"))
        self.seconds["sweep"] = rounds.summary()
        self.agreement |= agreement
        self.sizes["sweep"] = asdict(self.plan.sizes)

    def gaussian(self) -> None:
        """Our Gaussian smoothing pass and statsmodels'."""
        n_timed = self.plan.statsmodels_trials
        rounds, agreement = measure_gaussian(self.problem(), n_timed, self.plan.gaussian_rounds)
        self._add("statsmodels_over_gaussian_pass", rounds.ratio("statsmodels", "gaussian_pass"))
        self.seconds["gaussian"] = rounds.summary()
        self.agreement |= agreement
        self.sizes["gaussian"] = {**asdict(self.plan.sizes), "statsmodels_trials_timed": n_timed}

    def fit(self) -> None:
        """A whole fit and the floor."""
        rounds, details = measure_fit(self.problem(), self.plan.fit_rounds)
        self._add("fit_over_floor", rounds.ratio("fit", "floor_whole"))
        self._add("fit_over_floor_in_chunks", rounds.ratio("fit", "floor_in_chunks"))
        self.seconds["fit"] = rounds.summary()
        self.details["fit"] = details
        self.sizes["fit"] = asdict(self.plan.sizes)

    def growth(self) -> None:
        """How the objective's cost grows with trials, bins and units."""
        found = measure_growth(self.plan.growth_base, self.plan.growth, self.plan.growth_rounds)
        for axis, row in found.items():
            self._add(f"cost_growth_{axis}", row.pop("growth"))
        self.details["growth"] = found
        self.sizes["growth"] = {
            **asdict(self.plan.growth_base),
            **{axis: list(v) for axis, v in self.plan.growth.items()},
        }

    def job(self) -> None:
        """The whole job as a command."""
        found = measure_job(**self.plan.job)
        spent = found.pop("spent")
        self.ratios |= {"job_s": spent.wall_s, "job_rss_mib": spent.rss_mib}
        self.details["job"] = found
        self.sizes["job"] = self.plan.job

    def demo(self) -> None:
        """The demo as a command."""
        found = measure_demo()
        spent = found.pop("spent")
        self.ratios |= {"demo_s": spent.wall_s, "demo_rss_mib": spent.rss_mib}
        self.details["demo"] = found

    def result(self) -> dict[str, Any]:
        """Everything measured so far."""
        return {
            **self.ratios,
            "sizes": self.sizes,
            "spread": self.spread,
            "seconds": self.seconds,
            "agreement": self.agreement,
            "details": self.details,
        }


MEASUREMENTS: dict[str, Callable[[Bench], None]] = {
    "sweep": Bench.sweep,
    "gaussian": Bench.gaussian,
    "fit": Bench.fit,
    "growth": Bench.growth,
    "job": Bench.job,
    "demo": Bench.demo,
}
JOBS = ("job", "demo")


def describe_machine(load_before: tuple[float, float, float]) -> dict[str, Any]:
    """What the figures were measured on; a load above zero before the start means company."""
    versions = {m.__name__: m.__version__ for m in (portfire, jax, np, scipy, statsmodels)}
    return {
        "cores": os.cpu_count(),
        "threads": n_threads(),
        "machine": platform.machine(),
        "python": platform.python_version(),
        "versions": versions,
        "load_before": load_before[0],
        "load_after": os.getloadavg()[0],
    }


def main() -> None:
    """Measure, and print the figures."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", action="store_true", help="print one JSON object")
    parser.add_argument(
        "--only", nargs="+", choices=MEASUREMENTS, metavar="NAME", help=f"of {', '.join(MEASUREMENTS)}"
    )
    parser.add_argument(
        "--quick",
        action="store_true",
        help="small sizes, and code compiled before: shows that it runs, not how fast",
    )
    parser.add_argument("--skip-jobs", action="store_true", help="leave out the job and the demo")
    options = parser.parse_args()
    # Compiling is measured, so nothing compiled may be left from before.
    jax.config.update("jax_enable_compilation_cache", options.quick)
    chosen = [name for name in options.only or MEASUREMENTS if not (options.skip_jobs and name in JOBS)]
    bench, load = Bench(QUICK if options.quick else FULL), os.getloadavg()
    for name in chosen:
        print(f"{name} …", file=sys.stderr, flush=True)
        MEASUREMENTS[name](bench)
    result = {
        **bench.result(),
        "machine": describe_machine(load),
        "not_run": [n for n in MEASUREMENTS if n not in chosen],
    }
    if options.json:
        print(json.dumps(result, indent=1, allow_nan=False))
        return
    for name, value in bench.ratios.items():
        spread = bench.spread.get(name)
        beside = f"  ({spread['min']:.3g} to {spread['max']:.3g})" if spread else ""
        print(f"{name:34}{'unknown' if value is None else f'{value:.4g}'}{beside}")


if __name__ == "__main__":
    main()
