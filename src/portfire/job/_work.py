"""What runs in worker processes: fits, ladders of accounts, features, and descriptions of a fit.

Every function has the signature that `Task` asks for, reads fits from the store, and writes one entry.
"""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from portfire.accounts import Account
from portfire.comparison import climb, contrast_accounts, fold_of, training_rows
from portfire.estimation import (
    Fit,
    causal_mask,
    causal_states,
    fit,
    fit_from_parts,
    fit_hazard,
    infer_trials,
    predict_rates,
    with_hazard,
)
from portfire.job._shared import read_trials
from portfire.job._store import Store, task_key
from portfire.session import Trials

RATE_DRAWS = 20
# A worker's memory up to which it keeps compiled code of several sizes: fits of small sessions take less
# time than loading that code anew, and code of all sizes of a large one would add up to gigabytes.
ROOM_MIB = 600.0


def read_fit(store: Path, key: str) -> Fit:
    """Read a stored fit."""
    return fit_from_parts(*Store(store).read(key))


_seen: list[int] = []


def _let_go(latent_dim: int) -> None:
    """Drop compiled code of another size where memory grows: it stays on disk, but loads in seconds."""
    if _seen and _seen[-1] != latent_dim and _resident_mib() > ROOM_MIB:
        import jax

        jax.clear_caches()
    _seen[:] = [latent_dim]


def _resident_mib() -> float:
    """Memory of this process; without bound where the system does not tell."""
    try:
        pages = int(Path("/proc/self/statm").read_text(encoding="ascii").split()[1])
    except OSError:
        return float("inf")
    return pages * os.sysconf("SC_PAGE_SIZE") / 2**20


def _train_and_test(trials: Trials, kwargs: dict[str, Any]) -> tuple[Trials, np.ndarray]:
    """Training trials, and the rows that are scored."""
    n, folds = trials.n_session, int(kwargs["folds"])
    held = frozenset(int(fold) for fold in kwargs["held_out"])
    train = training_rows(trials.index, n, folds, held)
    inner = kwargs.get("inner")
    if inner is not None:
        # With two folds nothing is left when two are held out: split the training half itself.
        part = fold_of(np.arange(len(train)), len(train), 2)
        test = train[part == inner]
        return trials[train[training_rows(np.arange(len(train)), len(train), 2, {inner})]], test
    test = np.flatnonzero(np.isin(fold_of(trials.index, n, folds), sorted(held)))
    return trials[train], test


def _score(fitted: Fit, trials: Trials, rows: np.ndarray) -> dict[str, np.ndarray]:
    if not len(rows):
        return {"rows": rows, "loglik": np.zeros(0), "loglik_se": np.zeros(0)}
    table = fitted.score(trials[rows])
    return {"rows": rows, "loglik": table["loglik"].to_numpy(), "loglik_se": table["loglik_se"].to_numpy()}


def fit_full(
    store: Path, data: Path, kwargs: dict[str, Any], deps: tuple[str, ...], key: str
) -> dict[str, float]:
    """Fit the full account to a training set and score it on what was held out."""
    _let_go(int(kwargs["latent_dim"]))
    trials = read_trials(data)
    train, test = _train_and_test(trials, kwargs)
    fitted = fit(
        train,
        kwargs["model"],
        None,
        int(kwargs["latent_dim"]),
        int(kwargs["seed"]),
        start=read_fit(store, deps[0]) if deps else None,
        drift=bool(kwargs["drift"]),
        n_reference=int(kwargs["n_reference"]),
        tolerance=float(kwargs["tolerance"]),
    )
    scored = _score(fitted, trials, test)
    content = {**fitted.to_dict(), "n_train": len(train)}
    Store(store).write(key, content, {**fitted.arrays(), **scored})
    return {"nats": fitted.value, "iterations": len(fitted.trace)}


def fit_ladder(
    store: Path, data: Path, kwargs: dict[str, Any], deps: tuple[str, ...], key: str
) -> dict[str, float]:
    """Fit every account that the contrasts need, until nested ones agree, and score them held out."""
    _let_go(int(kwargs["latent_dim"]))
    trials = read_trials(data)
    train, test = _train_and_test(trials, kwargs)
    seed, tolerance = int(kwargs["seed"]), float(kwargs["tolerance"])
    drift = bool(kwargs["drift"])

    def refit(account: Account, start: Fit) -> Fit:
        return fit(
            train,
            start.setup.model,
            account,
            seed=seed,
            start=start,
            drift=drift,
            tolerance=tolerance,
            max_iterations=int(kwargs["max_iterations"]),
        )

    if kwargs["score_training"]:
        test = np.arange(len(trials))
    start = read_fit(store, deps[0])
    accounts = contrast_accounts(start.setup.sources, kwargs["sources"])
    ladder = climb(refit(accounts[0], start), accounts, refit, tolerance)
    entries = {}
    for account, fitted in ladder.fits.items():
        own = task_key(ladder=key, account=account)
        scored = _score(fitted, trials, test)
        Store(store).write(own, {**fitted.to_dict(), "n_train": len(train)}, {**fitted.arrays(), **scored})
        entries[account] = {"key": own, "value": fitted.value, "status": fitted.status}
    content = {
        "accounts": entries,
        "rounds": ladder.rounds,
        "agreed": ladder.agreed,
        "latent_dim": start.latent_dim,
        "n_train": len(train),
    }
    Store(store).write(key, content, {})
    return {"accounts": len(entries), "rounds": ladder.rounds}


def infer_features(
    store: Path, data: Path, kwargs: dict[str, Any], deps: tuple[str, ...], key: str
) -> dict[str, float]:
    """Causal features of all trials at every cutoff, from one fit."""
    trials = read_trials(data)
    fitted = read_fit(store, deps[0])
    arrays = {}
    for position, cutoff in enumerate(kwargs["cutoffs_s"]):
        posterior = infer_trials(fitted, trials, float(cutoff))
        mask = causal_mask(trials, float(cutoff))
        last = max(int(np.flatnonzero(mask.any(axis=0)).max()), trials.n_before)
        arrays[f"initial_{position}"] = posterior["initial"].to_numpy()
        arrays[f"sustained_{position}"] = posterior["sustained"].to_numpy()
        arrays[f"state_{position}"] = posterior["state"].to_numpy()[:, last]
    Store(store).write(key, {"cutoffs_s": list(kwargs["cutoffs_s"])}, arrays)
    return {"cutoffs": len(kwargs["cutoffs_s"])}


def infer_causal(
    store: Path, data: Path, kwargs: dict[str, Any], deps: tuple[str, ...], key: str
) -> dict[str, float]:
    """Causal state at the end of every bin of a part of the trials."""
    trials = read_trials(data)
    rows = np.arange(len(trials))[int(kwargs["part"]) :: int(kwargs["n_parts"])]
    state = causal_states(read_fit(store, deps[0]), trials[rows])
    Store(store).write(key, {"part": kwargs["part"]}, {"rows": rows, "state": state})
    return {"trials": len(rows)}


def describe_fit(
    store: Path, data: Path, kwargs: dict[str, Any], deps: tuple[str, ...], key: str
) -> dict[str, float]:
    """Smoothed states and pushes, the response hazard, and the rates that the model predicts."""
    trials = read_trials(data)
    fitted = read_fit(store, deps[0])
    hazard = fit_hazard(fitted, trials)
    if hazard is not None:
        fitted = with_hazard(fitted, hazard)
    posterior = infer_trials(fitted, trials)
    names: Sequence[str] = ("state", "initial", "sustained", "initial_cov", "sustained_cov")
    arrays = {f"smooth_{name}": posterior[name].to_numpy() for name in names}
    rates, running = predict_rates(fitted, trials, RATE_DRAWS, int(kwargs["seed"]))
    arrays |= {"predicted_rates": rates, "predicted_running": running}
    Store(store).write(key, fitted.to_dict(), {**fitted.arrays(), **arrays})
    return {"latents": fitted.latent_dim}
