"""False alarms and power of the decode on simulated features and intervals, without a fit.

Run as ``python benchmarks/decode_alarms.py [--sessions 1000]``; prints one JSON object a line.
"""

from __future__ import annotations

import argparse
import json
import time

import numpy as np

from portfire.timing import decode

N_TRIALS = 200
N_FOLDS = 5


def draw_drift(kind: str, n: int, rng: np.random.Generator) -> np.ndarray:
    """Slow path of unit variance: none, a first-order process of 50 trials, or a random walk."""
    if kind == "none":
        return np.zeros(n)
    if kind == "walk":
        path = rng.normal(size=n).cumsum()
    else:
        keep = np.exp(-1.0 / 50.0)
        path = np.empty(n)
        path[0] = rng.normal()
        for t in range(1, n):
            path[t] = keep * path[t - 1] + np.sqrt(1 - keep**2) * rng.normal()
        return path
    return (path - path.mean()) / path.std()


def draw_session(scenario: dict, rng: np.random.Generator) -> dict:
    """Features and intervals of one session; `corr` is their correlation within a condition."""
    n, n_conditions = N_TRIALS, scenario.get("conditions", 3)
    if scenario.get("blocked"):
        condition = (np.arange(n) // 40) % n_conditions
    else:
        condition = rng.integers(n_conditions, size=n)
    n_features, drift = scenario.get("features", 6), scenario.get("drift", "none")
    slow = scenario.get("slow_share", 0.5) if drift != "none" else 0.0
    noise = rng.normal(size=n)
    z = np.sqrt(1 - slow) * noise + np.sqrt(slow) * draw_drift(drift, n, rng)
    x = np.sqrt(1 - slow) * rng.normal(size=(n, n_features))
    x += np.sqrt(slow) * np.stack([draw_drift(drift, n, rng) for _ in range(n_features)], axis=1)
    corr = scenario.get("corr", 0.0)
    x[:, 0] = corr * z + np.sqrt(1 - corr**2) * x[:, 0]
    x += rng.normal(size=(n_conditions, n_features))[condition]
    if scenario.get("counts"):
        x = rng.poisson(np.exp(0.3 * x - 0.5)).astype(float)
    log_s = np.log(0.5) + 0.1 * condition + 0.15 * z
    produced = np.exp(log_s)
    cutoff = 0.1
    if scenario.get("ended"):
        cutoff = float(np.quantile(produced, scenario["ended"]))
    return {"features": {"x": x}, "produced_s": produced, "condition": condition, "cutoff_s": cutoff}


def measure(scenario: dict, n_sessions: int, seed: int) -> dict:
    """Share of sessions with p at most 0.05, and the median R²."""
    p, r2 = np.empty(n_sessions), np.empty(n_sessions)
    start = time.perf_counter()
    for s in range(n_sessions):
        session = draw_session(scenario, np.random.default_rng([seed, s]))
        (row,) = decode(
            **session,
            index=np.arange(N_TRIALS),
            n_session=N_TRIALS,
            n_folds=N_FOLDS,
            bin_s=0.001,
            variant=scenario.get("variant", "all"),
        )
        p[s], r2[s] = row.p, row.r2
    rate = float((p <= 0.05).mean())
    return {
        **scenario,
        "n_sessions": n_sessions,
        "alarms": round(rate, 4),
        "se": round(float(np.sqrt(rate * (1 - rate) / n_sessions)), 4),
        "r2_median": round(float(np.median(r2)), 4),
        "ms_per_session": round(1000 * (time.perf_counter() - start) / n_sessions, 1),
    }


SCENARIOS = [
    {"name": "independent"},
    {"name": "independent, a fifth ended", "ended": 0.2},
    {"name": "independent, a fifth ended, late", "ended": 0.2, "variant": "late"},
    {"name": "independent, a twentieth ended, late", "ended": 0.05, "variant": "late"},
    {"name": "independent, 9 conditions", "conditions": 9},
    {"name": "independent, 40 counts", "features": 40, "counts": True},
    {"name": "drift", "drift": "process"},
    {"name": "drift, a fifth ended", "drift": "process", "ended": 0.2},
    {"name": "drift, 40 counts", "drift": "process", "features": 40, "counts": True},
    {"name": "random walk", "drift": "walk"},
    {"name": "random walk, a fifth ended", "drift": "walk", "ended": 0.2},
    {"name": "drift, 9 conditions", "drift": "process", "conditions": 9},
    {"name": "drift, conditions in blocks", "drift": "process", "blocked": True},
    {"name": "strong drift", "drift": "process", "slow_share": 0.8},
    {"name": "power, r = 0.3", "corr": 0.3},
    {"name": "power, r = 0.3, a fifth ended", "corr": 0.3, "ended": 0.2},
    {"name": "power, r = 0.3, drift", "corr": 0.3, "drift": "process"},
    {"name": "power, r = 0.3, one feature", "corr": 0.3, "features": 1},
]


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sessions", type=int, default=1000)
    parser.add_argument("--seed", type=int, default=0)
    options = parser.parse_args()
    for scenario in SCENARIOS:
        print(json.dumps(measure(scenario, options.sessions, options.seed)), flush=True)


if __name__ == "__main__":
    main()
