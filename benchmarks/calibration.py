"""Calibration: false alarms of every entry, and coverage of the persistence interval, on small sessions.

    python benchmarks/calibration.py alarms --sessions 1000 --seed 1 --out alarms.jsonl
    python benchmarks/calibration.py persistence --sessions 1000 --seed 1 --out persistence.jsonl

Every session has parameters of its own, drawn anew, and is drawn from the fitted model itself (two latent
dimensions, 12 units, 100 trials of 12 to 16 bins). A line is written for each session as it is done, and what
the file already holds is not done again. Shares have their Clopper-Pearson 95 % interval.

The bootstrap is calibrated by one draw a session, pooled over sessions (Giacomini, Politis and White 2013,
Econom. Theory 29:567, from memory): the share of sessions whose statistic exceeds the pooled 95 % quantile.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

# Before NumPy is loaded: threads for tiny matrices only wait for one another.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
from scipy import stats

from portfire.accounts import ROUTES, SOURCES, Account, make_design
from portfire.comparison import (
    likelihood_ratio_p,
    profile_persistence,
    randomise_source,
    robust_p,
    score_statistic,
    summarise_profile,
)
from portfire.dynamics import ModelFile, decay_of, make_setup
from portfire.estimation import Fit, draw_trials, fit, make_efficient, push_directions
from portfire.session import Session, Trials

MODEL = ModelFile(name="calibration", drift="off")
BIN_S, N_TIME, N_REFERENCE, LATENT_DIM, N_UNITS, N_TRIALS = 0.03, 16, 14, 2, 12, 100
REMOVED = {"initial_unique": "sustained", "sustained_unique": "initial", "total": "none"}
FULL = Account.full(SOURCES)
LEVEL, BLOCK = 0.05, 4
LASTING_S = (0.0, 0.2, float("inf"))


def blank_trials(seed: int) -> Trials:
    """Two contexts by two sample intervals at random, still without spikes."""
    rng = np.random.default_rng([seed, 1])
    condition = rng.permutation(np.arange(N_TRIALS) % 4)
    n_bins = rng.integers(N_TIME - 4, N_TIME + 1, N_TRIALS)
    n_bins[0] = N_TIME
    set_s = 10.0 + 2.0 * np.arange(N_TRIALS)
    table = {
        "set_s": set_s,
        "response_s": np.full(N_TRIALS, np.nan),
        "end_s": set_s + BIN_S * (n_bins + 0.2),
        "sample_s": np.where(condition % 2, 0.9, 0.6),
        "context": np.where(condition < 2, "high", "low"),
    }
    spikes = {f"u{n}": set_s + 0.001 for n in range(N_UNITS)}
    return Session.from_arrays(spikes, table).bin(BIN_S, min_rate_hz=0.0)


def draw_truth(trials: Trials, routes: dict[str, str], seed: int, lasting: dict[str, float]) -> Fit:
    """A truth with parameters of its own; ``lasting`` gives the persistence of sources' lasting pushes."""
    rng = np.random.default_rng([seed, 2])
    start = fit(trials, MODEL, None, LATENT_DIM, n_reference=N_REFERENCE, max_iterations=1, tolerance=1e9)
    setup = make_setup(trials, MODEL, LATENT_DIM, False, N_REFERENCE)
    account = Account.parse(routes)
    turn = np.linalg.qr(rng.standard_normal((2, 2)))[0]
    columns = setup.columns
    angle = rng.uniform(0, 2 * np.pi, len(columns))
    size = np.array([0.35 if c.persistence_s == 0 else 1.0 for c in columns]) * rng.uniform(
        0.7, 1.3, len(columns)
    )
    free = np.array([account.allows(c.source, c.persistence_s) for c in columns])
    decay = [decay_of(lasting.get(c.source, np.inf) if c.persistence_s else 0.0, BIN_S) for c in columns]
    radius = [rng.uniform(0.95, 0.995), rng.uniform(0.8, 0.92)]
    params = {
        "readout": rng.uniform(-0.8, 0.8, (N_UNITS, 2)),
        "log_rate": np.log(20.0) + 0.3 * rng.standard_normal(N_UNITS),
        "drift": np.zeros((N_UNITS, 0)),
        "transition": turn @ np.diag(radius) @ turn.T,
        "offset": 0.05 * rng.standard_normal(2),
        "cue": 0.1 * rng.standard_normal((2, MODEL.n_bumps)),
        "push": free * size * np.stack([np.cos(angle), np.sin(angle)]),
        "initial_factor": 0.4 * np.eye(2) * account.allows("trial", 0.0),
        "sustained_factor": 1.0 * np.eye(2) * account.allows("trial", np.inf),
        "noise": np.array(0.01),
        "decay": np.array([*decay, decay_of(lasting.get("trial", np.inf), BIN_S)]),
    }
    return replace(start, setup=setup, account=account, params=params, drift=False)


def fit_account(trials: Trials, account: Account, start: Fit | None) -> Fit:
    return fit(
        trials, MODEL, account, LATENT_DIM, start=start, n_reference=N_REFERENCE, tolerance=0.05, drift=False
    )


def plain(fitted: Fit) -> Fit:
    """The truth as a start: kernels back to the setup's own."""
    return replace(fitted, params={k: v for k, v in fitted.params.items() if k != "decay"})


def test_alarms(seed: int) -> dict[str, Any]:
    """Every entry whose restricted account is true, by every test."""
    rng = np.random.default_rng([seed, 7])
    routes = {source: str(rng.choice(ROUTES)) for source in SOURCES}
    blank = blank_trials(seed)
    truth = draw_truth(blank, routes, seed, {})
    trials = draw_trials(truth, blank, np.random.default_rng([seed, 3]))
    full = fit_account(trials, FULL, plain(truth))
    rows, out = make_design(trials).rows, {}
    for source in SOURCES:
        for entry, route in REMOVED.items():
            if not Account.parse({source: route}).contains(Account.parse({source: routes[source]})):
                continue
            small = FULL.replace(source, route)
            restricted = fit_account(trials, small, full)
            again = fit_account(trials, FULL, restricted)
            statistic = max(0.0, 2 * (max(full.value, again.value) - restricted.value))
            directions = push_directions(FULL, small, restricted.params, restricted.setup, rows)
            efficient = make_efficient(restricted, trials, directions, np.random.default_rng([seed, 5]))
            cones = directions.cones
            drawn = draw_trials(restricted, trials, np.random.default_rng([seed, 6]))
            found = {
                "lr": statistic,
                "p_lr": likelihood_ratio_p(statistic, 0 if cones else directions.size, cones),
                "score": score_statistic(efficient.score(trials), efficient.information, cones),
                "drawn": score_statistic(efficient.score(drawn), efficient.information, cones),
                "p_blocks": robust_p(efficient, trials, np.arange(N_TRIALS) // BLOCK, 199, seed).p,
            }
            found["p_score"] = likelihood_ratio_p(found["score"], 0 if cones else directions.size, cones)
            if entry == "total" and source != "trial":
                found["p_labels"] = randomise_source(restricted, trials, source, draws=199, seed=seed).p
            out[f"{source} {entry}"] = found
    return {"routes": routes, "entries": out}


def test_persistence(seed: int) -> dict[str, Any]:
    """Whether the interval of one source's persistence holds the truth."""
    rng = np.random.default_rng([seed, 8])
    source = str(rng.choice(SOURCES))
    truth_s = float(rng.choice(LASTING_S))
    routes = {s: str(rng.choice(ROUTES)) for s in SOURCES}
    routes[source] = "initial" if truth_s == 0 else "sustained"
    blank = blank_trials(seed)
    truth = draw_truth(blank, routes, seed, {source: truth_s or np.inf})
    trials = draw_trials(truth, blank, np.random.default_rng([seed, 3]))
    full = fit_account(trials, FULL, plain(truth))
    ends = {"both": full}
    for route in ("initial", "sustained"):
        ends[route] = fit_account(trials, FULL.replace(source, route), full)
    found = summarise_profile(profile_persistence(source, ends, lambda a, s: fit_account(trials, a, s)))
    low, high = found.ci95_s
    return {
        "source": source,
        "truth_s": None if np.isinf(truth_s) else truth_s,
        "estimate_s": None if np.isinf(found.estimate_s) else found.estimate_s,
        "ci95_s": [low, None if np.isinf(high) else high],
        "covers": bool(low <= truth_s <= high),
        "two_pushes": found.two_pushes,
    }


def share(hits: int, n: int) -> str:
    """A share with its Clopper-Pearson 95 % interval."""
    low = stats.beta.ppf(0.025, hits, n - hits + 1) if hits else 0.0
    high = stats.beta.ppf(0.975, hits + 1, n - hits) if hits < n else 1.0
    return f"{hits}/{n} = {hits / n:.1%} ({low:.1%} to {high:.1%})"


def print_alarms(rows: list[dict[str, Any]]) -> None:
    """False alarms at the 5 % level by entry and test."""
    names = [f"{source} {entry}" for source in SOURCES for entry in REMOVED]
    print("| entry | likelihood ratio | score | bootstrap | blocks | labels |\n|---|---|---|---|---|---|")
    for name in names:
        found = [row["entries"][name] for row in rows if name in row["entries"]]
        if not found:
            continue
        cut = np.quantile([f["drawn"] for f in found], 1 - LEVEL)
        cells = [share(sum(f[key] <= LEVEL for f in found), len(found)) for key in ("p_lr", "p_score")]
        cells.append(share(sum(f["score"] > cut for f in found), len(found)))
        cells.append(share(sum(f["p_blocks"] <= LEVEL for f in found), len(found)))
        dealt = [f["p_labels"] for f in found if "p_labels" in f]
        cells.append(share(sum(p <= LEVEL for p in dealt), len(dealt)) if dealt else "")
        print(f"| {name} | {' | '.join(cells)} |")


def print_persistence(rows: list[dict[str, Any]]) -> None:
    """Coverage by source and true persistence, and how often two pushes are said of one."""
    print("| source | true persistence (s) | covered | said to be two pushes |\n|---|---|---|---|")
    for source in (*SOURCES, "all"):
        for truth in (0.0, 0.2, None):
            mine = [r for r in rows if source in (r["source"], "all") and r["truth_s"] == truth]
            if mine:
                label = "to the response" if truth is None else f"{truth:g}"
                two = share(sum(r["two_pushes"] for r in mine), len(mine))
                print(f"| {source} | {label} | {share(sum(r['covers'] for r in mine), len(mine))} | {two} |")


STUDIES: dict[str, tuple[Callable[[int], dict[str, Any]], Callable[[list[dict[str, Any]]], None]]] = {
    "alarms": (test_alarms, print_alarms),
    "persistence": (test_persistence, print_persistence),
}


def read_done(out: Path) -> dict[int, dict[str, Any]]:
    """Sessions that a file holds, by seed; a line cut short by a stop is left out."""
    done: dict[int, dict[str, Any]] = {}
    for line in out.read_text(encoding="utf-8").splitlines() if out.exists() else []:
        try:
            row = json.loads(line)
        except json.JSONDecodeError:
            continue
        done[row["seed"]] = row
    return done


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("study", choices=STUDIES)
    parser.add_argument("--sessions", type=int, default=20)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument(
        "--part", type=int, nargs=2, default=(0, 1), metavar=("K", "N"), help="every Nth from K"
    )
    parser.add_argument("--out", type=Path)
    arguments = parser.parse_args()
    run, show = STUDIES[arguments.study]
    out = arguments.out or Path(f"{arguments.study}.jsonl")
    done = read_done(out)
    k, n = arguments.part
    seeds = [100_000 * arguments.seed + s for s in range(arguments.sessions)]
    for seed in seeds[k::n]:
        if seed in done:
            continue
        start = time.perf_counter()
        done[seed] = {"seed": seed, **run(seed)}
        with out.open("a", encoding="utf-8") as file:
            file.write(json.dumps(done[seed]) + "\n")
        print(f"{seed}: {time.perf_counter() - start:.1f} s", file=sys.stderr, flush=True)
    show([done[seed] for seed in seeds if seed in done])


if __name__ == "__main__":
    main()
