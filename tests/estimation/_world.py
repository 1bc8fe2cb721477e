"""Small worlds with known truth, drawn in the terms of the fitted model itself; one shape for all tests.

Every trial lasts 12 to 16 bins whatever its path, so that nothing but the counts speaks of the state.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from portfire.accounts import Account, make_design
from portfire.dynamics import READOUTS, ModelFile, make_setup
from portfire.estimation import Fit, draw_paths, fit
from portfire.estimation._fit import describe_session
from portfire.session import Session, Trials

MODEL = ModelFile(name="small", drift="off", n_bumps=2, cue_duration_s=0.15)
BIN_S, N_TIME, N_REFERENCE, N_UNITS, LATENT_DIM = 0.03, 16, 14, 16, 2
SOURCES = ("interval", "context", "trial")
ALL_BOTH = "interval=both,context=both,trial=both"
RUN_UP_NOISE = 0.003


def blank_trials(n_trials: int, seed: int = 0, n_before: int = 0, n_units: int = N_UNITS) -> Trials:
    """Trials of two contexts and two sample intervals, still without spikes."""
    rng = np.random.default_rng([seed, 1])
    condition = rng.permutation(np.arange(n_trials) % 4)
    n_bins = rng.integers(N_TIME - 4, N_TIME + 1, n_trials)
    n_bins[0] = N_TIME
    set_s = 10.0 + 2.0 * np.arange(n_trials)
    table = {
        "set_s": set_s,
        "response_s": np.full(n_trials, np.nan),
        "end_s": set_s + BIN_S * (n_bins + 0.2),
        "sample_s": np.where(condition % 2, 0.9, 0.6),
        "context": np.where(condition < 2, "high", "low"),
    }
    few_spikes = {f"u{n}": set_s + 0.001 for n in range(n_units)}
    trials = Session.from_arrays(few_spikes, table).bin(BIN_S, n_before * BIN_S, min_rate_hz=0.0)
    return replace(trials, counts=np.zeros_like(trials.counts))


def make_truth(trials: Trials, account: str, seed: int, model: ModelFile = MODEL) -> Fit:
    """A slow and a fast latent dimension, turned at random; pushes of one size by every route allowed."""
    rng = np.random.default_rng([seed, 2])
    setup = make_setup(trials, model, LATENT_DIM, model.drift != "off", N_REFERENCE)
    routes = Account.parse(account).restrict(setup.sources)
    turn = np.linalg.qr(rng.standard_normal((2, 2)))[0]
    angle = rng.uniform(0, 2 * np.pi, len(setup.columns))
    size = np.array([0.45 if column.persistence_s == 0 else 1.6 for column in setup.columns])
    free = np.array([routes.allows(column.source, column.persistence_s) for column in setup.columns])
    params = {
        "readout": rng.uniform(-1.2, 1.2, (setup.n_units, 2)),
        "log_rate": np.log(25.0) + 0.3 * rng.standard_normal(setup.n_units),
        "drift": rng.standard_normal((setup.n_units, setup.n_drift)),
        "transition": turn @ np.diag([0.985, 0.9]) @ turn.T,
        "offset": turn @ np.array([0.05, 0.03]),
        "cue": 0.1 * rng.standard_normal((2, model.n_bumps)),
        "push": free * size * np.stack([np.cos(angle), np.sin(angle)]),
        "initial_factor": 0.6 * np.eye(2) * routes.allows("trial", 0.0),
        "sustained_factor": 1.2 * np.eye(2) * routes.allows("trial", np.inf),
        "noise": np.array(0.01),
    }
    if trials.n_before:
        params["log_run_up_noise"] = np.array(np.log(RUN_UP_NOISE))
    return Fit(
        setup=setup,
        account=routes,
        params=params,
        canonical=np.eye(2),
        value=0.0,
        trace=(0.0,),
        status="converged",
        seed=seed,
        session=describe_session(trials),
        drift=setup.n_drift > 0,
    )


def draw_counts(truth: Fit, trials: Trials, seed: int) -> tuple[Trials, np.ndarray]:
    """The trials with counts drawn from the truth, and the paths behind them (trial, time, D)."""
    rng = np.random.default_rng([seed, 3])
    before, p = trials.n_before, truth.params
    path = draw_paths(truth, make_design(trials).rows, trials.counts.shape[1] - before, rng)
    steps = np.sqrt(RUN_UP_NOISE) * rng.standard_normal((len(trials), before, LATENT_DIM))
    path = np.concatenate([(path[:, :1] + np.cumsum(steps, axis=1))[:, ::-1], path], axis=1)
    drift = truth.setup.drift_basis(trials) @ p["drift"].T
    rate = np.exp(path @ p["readout"].T + p["log_rate"] + drift[:, None])
    readout = READOUTS[truth.setup.model.readout]
    # Square roots are taken of Poisson counts.
    drawn = (readout if readout.of_counts else READOUTS["poisson"]).draw(p, trials.bin_s * rate, rng)
    counts = drawn * trials.mask[:, :, None]
    return replace(trials, counts=counts.astype(np.uint16)), path


def draw_world(
    account: str, seed: int, n_trials: int = 96, n_before: int = 0, model: ModelFile = MODEL
) -> tuple[Trials, Fit]:
    """A session drawn from a truth of this account."""
    blank = blank_trials(n_trials, seed, n_before)
    truth = make_truth(blank, account, seed, model)
    return draw_counts(truth, blank, seed)[0], truth


def fit_small(trials: Trials, account: str = ALL_BOTH, start: Fit | None = None, **options: object) -> Fit:
    """Fit the small model, or what ``start`` has; every fit has the same compiled shape."""
    model = start.setup.model if start else MODEL
    return fit(trials, model, account, LATENT_DIM, start=start, n_reference=N_REFERENCE, **options)
