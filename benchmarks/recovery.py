"""Recovery of verdicts: sessions of known truth, contrasted at the true number of latent dimensions.

    python benchmarks/recovery.py --sessions 20 --seed 1 --out recovery.jsonl

Each session lets every source push by a route drawn at random. A line is written for each as it is done, and
what a file already holds is not done again. The table counts verdicts by true route, with the share of wrong
ones (Clopper-Pearson 95 % interval; undetermined is not wrong).
"""

from __future__ import annotations

import argparse
import json
import os
import sys
import time
from pathlib import Path

# Before NumPy is loaded: threads for tiny matrices only wait for one another.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
from scipy import stats

from portfire.accounts import ROUTES, SOURCES, Account
from portfire.comparison import (
    Scored,
    climb,
    contrast_accounts,
    contrast_sources,
    fold_of,
    training_rows,
)
from portfire.dynamics import ModelFile
from portfire.estimation import Fit, fit
from portfire.session import Session, Trials
from portfire.simulate import Scenario, draw_session

MODEL = ModelFile(name="recovery", drift="off", n_bumps=2, cue_duration_s=0.15)
BIN_S, WINDOW_BINS, N_REFERENCE = 0.03, 25, 22
LATENT_DIM, N_UNITS, N_FOLDS = 2, 24, 4
LEVEL, MIN_GAIN = 0.05, 0.05
LABEL = {"none": "neither", "initial": "initial", "sustained": "sustained", "both": "both"}
VERDICTS = ("neither", "initial", "sustained", "both", "undetermined")


def draw_routes(seed: int) -> dict[str, str]:
    """One route for every source."""
    rng = np.random.default_rng([seed, 7])
    return {source: str(rng.choice(ROUTES)) for source in SOURCES}


def draw_trials(routes: dict[str, str], seed: int, n_trials: int) -> Trials:
    """A simulated session, of which no trial is observed for longer than 0.75 s: one length for all."""
    scenario = Scenario(
        model=MODEL,
        account=Account.parse(routes),
        n_trials=n_trials,
        n_units=N_UNITS,
        latent_dim=LATENT_DIM,
        sample_s=(0.5, 0.7),
        contexts=("high", "low"),
        extra_s=(0.2, 0.0),
        mean_rate_hz=25.0,
        drift_sd=0.0,
        share_aborted=0.0,
        share_missed=0.0,
        bin_s=BIN_S,
    )
    _, drawn = draw_session(scenario, seed)
    table = drawn.trials[["trial", "set_s", "response_s", "sample_s", "context"]].copy()
    end = table["set_s"] + WINDOW_BINS * BIN_S
    late = ~(table["response_s"] <= end)
    table["end_s"] = np.where(late, end, np.nan)
    table.loc[late, "response_s"] = np.nan
    return Session.from_arrays(drawn.spike_times, table).bin(BIN_S, min_rate_hz=0.0)


def contrast(trials: Trials) -> dict[str, dict[str, object]]:
    """Verdict, gains and likelihood ratios of every source, as a run makes them at one size."""
    accounts = contrast_accounts(SOURCES, SOURCES)
    full = str(accounts[0])

    def ladder(part: Trials, start: Fit | None, tolerance: float) -> dict[str, Fit]:
        def refit(account: Account, start: Fit | None) -> Fit:
            return fit(
                part, MODEL, account, LATENT_DIM, start=start, n_reference=N_REFERENCE, tolerance=tolerance
            )

        return climb(refit(accounts[0], start), accounts, refit, tolerance).fits

    whole = ladder(trials, None, 0.1)
    loglik = {account: np.full(len(trials), np.nan) for account in whole}
    fold = fold_of(trials.index, trials.n_session, N_FOLDS)
    n_train = []
    for j in range(N_FOLDS):
        train = trials[training_rows(trials.index, trials.n_session, N_FOLDS, {j})]
        rows = np.flatnonzero(fold == j)
        n_train.append(len(train))
        for account, fitted in ladder(train, whole[full], 0.3).items():
            loglik[account][rows] = fitted.score(trials[rows])["loglik"]
    values = {account: fitted.value for account, fitted in whole.items()}
    scored = Scored(whole[full].setup, values, loglik, float(np.mean(n_train)), N_FOLDS)
    return {
        found.source: {
            "verdict": found.verdict.label,
            "entries": {
                name: {
                    "gain": entry.evidence.gain.nats_per_trial,
                    "ci95": list(entry.evidence.gain.ci95),
                    "p_raw": entry.p_raw,
                }
                for name, entry in found.entries.items()
            },
        }
        for found in contrast_sources(scored, SOURCES, LEVEL, MIN_GAIN)
    }


def read_done(out: Path) -> dict[int, dict[str, object]]:
    """Sessions that a file holds, by seed."""
    if not out.exists():
        return {}
    rows = [json.loads(line) for line in out.read_text(encoding="utf-8").splitlines() if line]
    return {row["seed"]: row for row in rows}


def share(hits: int, n: int) -> str:
    """A share with its Clopper-Pearson 95 % interval."""
    low = stats.beta.ppf(0.025, hits, n - hits + 1) if hits else 0.0
    high = stats.beta.ppf(0.975, hits + 1, n - hits) if hits < n else 1.0
    return f"{hits}/{n} = {hits / n:.0%} ({low:.0%} to {high:.0%})"


def print_table(rows: list[dict]) -> None:
    """Verdicts by true route, for each source and for all."""
    for source in (*SOURCES, "all"):
        print(f"\n| true route of {source} | {' | '.join(VERDICTS)} | wrong |")
        print("|---" * (len(VERDICTS) + 2) + "|")
        for route in ROUTES:
            found = [
                row["contrasts"][s]["verdict"]
                for row in rows
                for s in SOURCES
                if source in (s, "all") and row["routes"][s] == route
            ]
            if not found:
                continue
            counts = [found.count(verdict) for verdict in VERDICTS]
            wrong = len(found) - found.count(LABEL[route]) - found.count("undetermined")
            print(f"| {route} | {' | '.join(map(str, counts))} | {share(wrong, len(found))} |")
    idle = [
        row["contrasts"][s]["entries"]["total"] for row in rows for s in SOURCES if row["routes"][s] == "none"
    ]
    if idle:
        gains = np.array([entry["gain"] for entry in idle])
        alarms = sum(entry["p_raw"] <= LEVEL for entry in idle)
        print(f"\nsources that do not push: raw p of the total at most {LEVEL}: {share(alarms, len(idle))};")
        print(f"gain of the total {gains.mean():.4f} nats a trial (SD over sessions {gains.std():.4f})")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("--sessions", type=int, default=20)
    parser.add_argument("--trials", type=int, default=240)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path, default=Path("recovery.jsonl"))
    arguments = parser.parse_args()
    done = read_done(arguments.out)
    seeds = [1000 * arguments.seed + k for k in range(arguments.sessions)]
    for seed in seeds:
        if seed in done:
            continue
        start = time.perf_counter()
        routes = draw_routes(seed)
        found = contrast(draw_trials(routes, seed, arguments.trials))
        done[seed] = {"seed": seed, "trials": arguments.trials, "routes": routes, "contrasts": found}
        with arguments.out.open("a", encoding="utf-8") as file:
            file.write(json.dumps(done[seed]) + "\n")
        said = ", ".join(f"{s} {routes[s]} -> {found[s]['verdict']}" for s in SOURCES)
        print(f"{seed}: {said} ({time.perf_counter() - start:.0f} s)", file=sys.stderr, flush=True)
    print_table([done[seed] for seed in seeds])


if __name__ == "__main__":
    main()
