"""Invented run folders: every number below is drawn from a seeded generator, none was recorded or fitted."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass, replace
from itertools import product
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
import xarray as xr

FEATURES = ("initial", "sustained", "initial+sustained", "state", "counts")
ROUTES = ("none", "initial", "sustained", "both")


@dataclass(frozen=True)
class Invention:
    """What an invented run folder holds."""

    contexts: tuple[str, ...] = ("high", "low", "mid")
    samples: tuple[float, ...] = (0.5, 0.7, 0.9)
    n_per_condition: int = 60
    n_latents: int = 3
    n_units: int = 40
    cutoffs: tuple[float, ...] = (0.1, 0.2, 0.3)
    sources: tuple[str, ...] = ("interval", "context", "trial")
    models: tuple[str, ...] = ("linear",)
    unit_names: tuple[str, ...] = ()
    target: bool = True
    responses: bool = True
    late: bool = True
    seed: int = 0


def invent_trials(rng: np.random.Generator, what: Invention) -> pd.DataFrame:
    conditions = list(product(what.contexts or (None,), what.samples or (None,)))
    index = np.tile(np.arange(len(conditions)), what.n_per_condition)
    rng.shuffle(index)
    rows = []
    for i, c in enumerate(index):
        context, sample = conditions[c]
        add = 0.15 * what.contexts.index(context) if context is not None else 0.0
        mean = 0.2 + 0.75 * (sample or 0.7) + 0.9 * add
        produced = mean * np.exp(0.11 * rng.standard_normal())
        rows.append(
            {
                "trial": str(i),
                "condition": int(c),
                "context": context,
                "sample_s": sample if sample is not None else np.nan,
                "produced_s": produced if what.responses else np.nan,
                "target_s": (sample or 0.7) + add if what.target else np.nan,
                "set_s": 3.0 * i + 1.0,
                "n_bins": int(produced / 0.02),
                "fold": (i // 25) % 5,
            }
        )
    return pd.DataFrame(rows)


def invent_latents(rng: np.random.Generator, what: Invention, trials: pd.DataFrame) -> xr.Dataset:
    n, d = len(trials), what.n_latents
    time = np.arange(int(trials["n_bins"].max())) * 0.02
    speed = (trials["n_bins"] * 0.02).to_numpy()
    context = trials["context"].map({c: k for k, c in enumerate(what.contexts)}).fillna(0).to_numpy(float)
    initial = 0.25 * rng.standard_normal((n, d))
    initial[:, 0] += 0.5 * context - 0.5 - 0.8 * (speed - speed.mean())
    sustained = 0.01 * rng.standard_normal((n, d))
    sustained[:, -1] -= 0.05 * (speed - speed.mean())
    scale = 0.8 ** np.arange(d)
    phase = time[None, :, None] / speed[:, None, None]
    state = initial[:, None, :] * np.exp(-time / 0.3)[None, :, None]
    state = state + np.sin(np.pi * phase + np.arange(d)) * scale
    state = state + 0.1 * rng.standard_normal(state.shape).cumsum(1) * 0.3
    state[np.arange(len(time))[None] >= trials["n_bins"].to_numpy()[:, None]] = np.nan
    eye = np.broadcast_to(np.eye(d), (n, d, d))
    return xr.Dataset(
        {
            "state": (("trial", "time", "latent"), state),
            "state_causal": (("trial", "time", "latent"), state + 0.1),
            "initial": (("trial", "latent"), initial),
            "sustained": (("trial", "latent"), sustained),
            "initial_cov": (("trial", "latent", "latent2"), 0.02 * eye),
            "sustained_cov": (("trial", "latent", "latent2"), 5e-5 * eye),
        },
        coords={"trial": trials["trial"].to_numpy(dtype=object), "time": time},
    )


def invent_rates(rng: np.random.Generator, what: Invention, trials: pd.DataFrame) -> xr.Dataset:
    conditions = trials.groupby("condition")
    n_c, time = trials["condition"].nunique(), np.arange(int(trials["n_bins"].max())) * 0.02
    running = np.stack(
        [(g["n_bins"].to_numpy()[:, None] > np.arange(len(time))).sum(0) for _, g in conditions]
    )
    base = rng.gamma(2.0, 5.0, what.n_units)
    base[3] = 30.0  # the unit that the model misses
    wave = rng.standard_normal((3, what.n_units)) * 0.5
    shift = rng.standard_normal((n_c, 1, what.n_units)) * 0.2
    path = np.stack([np.sin(3 * time), np.cos(2 * time), time - 0.5])
    model = base * np.exp((path.T @ wave)[None] + shift)
    truth = model * (1 + 0.4 * (np.arange(what.n_units) == 3) * np.sin(20 * time)[:, None])
    shown = np.maximum(running, 1)[:, :, None]
    recorded = rng.poisson(truth * 0.02 * shown) / (0.02 * shown)
    few = running < 5
    recorded[few], model[few] = np.nan, np.nan
    units = what.unit_names or tuple(f"u{k}" for k in range(what.n_units))
    first = conditions.first()
    coords: dict[str, Any] = {"time": time, "unit": np.array(units, dtype=object)}
    if what.contexts:
        coords["context"] = ("condition", first["context"].to_numpy(dtype=object))
    if what.samples:
        coords["sample_s"] = ("condition", first["sample_s"].to_numpy())
    share = np.array([0.42, 0.2, 0.11, 0.06, 0.04, 0.03, 0.02, 0.015, 0.01, 0.008])
    return xr.Dataset(
        {
            "recorded": (("condition", "time", "unit"), recorded),
            "model": (("condition", "time", "unit"), model),
            "n_running": (("condition", "time"), running),
            "pc_variance": (("component",), share),
        },
        coords=coords,
    )


def name_accounts(sources: tuple[str, ...]) -> list[tuple[str, dict[str, str]]]:
    full = dict.fromkeys(sources, "both")
    routes = [full] + [full | {s: r} for s in sources for r in ("sustained", "initial", "none")]
    return [(",".join(f"{s}={r}" for s, r in one.items()), one) for one in routes]


def invent_scores(rng: np.random.Generator, what: Invention, trials: pd.DataFrame) -> pd.DataFrame:
    cost = {
        "interval": {"both": 0, "sustained": 0.02, "initial": 0.9, "none": 2.9},
        "context": {"both": 0, "sustained": 1.4, "initial": 0.06, "none": 2.2},
        "trial": {"both": 0, "sustained": 0.12, "initial": 0.1, "none": 7.5},
    }
    base = -820 + 60 * rng.standard_normal(len(trials))
    frames = []
    for m, model in enumerate(what.models):
        for account, routes in name_accounts(what.sources):
            loss = sum(cost[s][r] for s, r in routes.items()) + 0.8 * m
            frames.append(
                pd.DataFrame(
                    {
                        "trial": trials["trial"],
                        "fold": trials["fold"],
                        "account": account,
                        "model": model,
                        "latent_dim": what.n_latents,
                        "loglik": base - loss + (0.3 + 0.5 * loss) * rng.standard_normal(len(trials)),
                        "loglik_se": 0.05,
                        "n_spikes": 250,
                        "n_bins": trials["n_bins"],
                    }
                )
            )
    return pd.concat(frames, ignore_index=True)


def invent_decode(what: Invention) -> list[dict[str, Any]]:
    best = {"initial": 0.04, "sustained": 0.12, "initial+sustained": 0.15, "state": 0.18, "counts": 0.11}
    n = len(what.contexts or (0,)) * len(what.samples or (0,)) * what.n_per_condition
    rows = []
    for variant in ("all", "late") if what.late else ("all",):
        for k, cutoff in enumerate(what.cutoffs):
            for features in FEATURES:
                r2 = best[features] * (k + 0.4) / max(1, len(what.cutoffs) - 0.6)
                r2 *= 0.7 if variant == "late" else 1.0
                running = n - 9 * k
                late = 14 * (k + 1) if variant == "late" else 0
                rows.append(
                    {
                        "cutoff_s": cutoff,
                        "features": features,
                        "variant": variant,
                        "n_trials": running - late,
                        "running": running,
                        "n_used": running - late,
                        "r2_within_condition": r2,
                        "ci95": [r2 - 0.05, r2 + 0.05],
                        "p": 0.001 if r2 > 0.05 else 0.21,
                        "null95": [-0.03, 0.02],
                        "r2_window": r2 - 0.01,
                        "null_draws": 320,
                    }
                )
    return rows


def invent_contrasts(what: Invention) -> list[dict[str, Any]]:
    def entry(value: float, half: float, p: float) -> dict[str, Any]:
        return {"nats_per_trial": value, "ci95": [value - half, value + half], "p": p}

    known = {
        "interval": {
            "initial_unique": entry(0.01, 0.03, 0.6),
            "sustained_unique": entry(0.93, 0.25, 0.001),
            "total": entry(2.95, 0.5, 0.001),
            "verdict": "sustained",
        },
        "context": {
            "initial_unique": entry(1.42, 0.3, 0.001),
            "sustained_unique": entry(0.06, 0.09, 0.13),
            "total": entry(2.21, 0.4, 0.001),
            "verdict": "undetermined",
            "open": ["sustained"],
            "trials_to_close": 1400,
            "words": "Between contexts, these data cannot tell: a sustained push gains 0.06 nats a trial and "
            "stays open; about 1367 trials would settle it if the gain stays as it is.",
            "mimic": "A slow mode (time constant 1.9 s) can carry an initial push almost to the response, "
            "where it looks like a sustained one.",
        },
        "trial": {
            "initial_unique": entry(0.15, 0.05, 0.001),
            "sustained_unique": entry(0.13, 0.06, 0.004),
            "total": entry(7.6, 0.9, 0.001),
            "verdict": "both",
        },
    }
    more = {
        "at_dims": {"2": "undetermined", "4": "sustained"},
        "ends_nats": {"2": 3.0, "3": 41.2, "4": 12.6},
        "carrying_mode": 1.9,
        "lr": {
            r: {"stat": 31.2, "df": 3, "p_raw": 0.0004}
            for r in ("initial_unique", "sustained_unique", "total")
        },
        "gain_k": {"initial_unique": 3, "sustained_unique": 3, "total": 6},
    }
    grid = [0.0, 0.05, 0.1, 0.2, 0.4, 0.8, 1.6, None]
    rising, falling = (
        [0.0, 2.1, 4.0, 7.5, 11.0, 14.0, 16.0, 17.2],
        [40.1, 31.0, 20.0, 9.0, 3.0, 0.8, 0.1, 0.0],
    )
    lasts = {"interval": (falling, None, [0.9, None]), "context": (rising, 0.0, [0.0, 0.04])}
    n_levels = max(1, len(what.contexts) - 1)
    for source, (losses, estimate, interval) in lasts.items():
        known[source] |= {
            "persistence_s": {
                "estimate": estimate,
                "ci95": interval,
                "at_next_dim": {"estimate": estimate, "ci95": interval, "two_pushes": False},
                "at_previous_dim": None,
            },
            "persistence_words": f"the push of the {source} lasts as it was invented",
            "persistence_profile": [
                {
                    "latent_dim": what.n_latents + shift,
                    "grid_s": grid,
                    "loss_nats": [(2 + shift) * x for x in losses],
                }
                for shift in (-1, 0, 1)
            ],
            "course": {
                "levels": ["sample"] if source == "interval" else list(what.contexts[:-1]) or ["only"],
                "edges_s": [0.02, 0.12, 0.3, 0.6],
                "at_cue": [0.4] * n_levels,
                "at_cue_se": [0.1] * n_levels,
                "rate": [[1.0, 0.9, 1.1]] * n_levels,
                "rate_low": [[0.5, 0.4, 0.4]] * n_levels,
                "rate_high": [[1.5, 1.4, 1.8]] * n_levels,
            },
        }
    known["trial"] |= {
        "persistence_s": None,
        "persistence_words": "two pushes: one alone stays 9.1 nats behind",
        "persistence_profile": [{"latent_dim": what.n_latents, "grid_s": grid, "loss_nats": rising}],
        "course": None,
    }
    drawn = {"p": 0.012, "se": 0.004, "draws": 199}
    more["tests"] = {
        entry: {"blocks": drawn, "bootstrap": drawn, "labels": drawn if entry == "total" else None}
        for entry in ("initial_unique", "sustained_unique", "total")
    }
    scores = {"none": -823.1, "initial": -821.0, "sustained": -820.2, "both": -820.1}
    return [{"source": s} | scores | known[s] | more for s in what.sources]


def invent_choice(what: Invention) -> dict[str, Any]:
    size = {"model": what.models[0], "latent_dim": what.n_latents, "drift": True}
    smaller = size | {"latent_dim": what.n_latents - 1}
    return size | {
        "by_fold": [size, size, smaller, size, size],
        "candidates": [
            smaller | {"deficit_nats_per_trial": 2.345, "deficit_se": 0.21},
            size | {"deficit_nats_per_trial": 0.0, "deficit_se": 0.0},
        ],
    }


def invent_predictions(rng: np.random.Generator, what: Invention, trials: pd.DataFrame) -> pd.DataFrame:
    log_s = np.log(trials["produced_s"])
    baseline = log_s.groupby(trials["condition"]).transform("mean")
    rows = [
        trials[["trial", "condition", "fold", "produced_s"]].assign(
            cutoff_s=cutoff,
            features=features,
            baseline_s=np.exp(baseline),
            predicted_s=np.exp(baseline + 0.2 * (log_s - baseline) + 0.02 * rng.standard_normal(len(trials))),
            variant="all",
        )
        for cutoff, features in product(what.cutoffs, FEATURES)
    ]
    return pd.concat(rows, ignore_index=True)


def invent_result(what: Invention, trials: pd.DataFrame, scores: pd.DataFrame) -> dict[str, Any]:
    conditions = []
    for _, g in trials.groupby("condition"):
        if what.responses:
            row = g.iloc[0]
            conditions.append(
                {
                    "context": row["context"],
                    "sample_s": None if np.isnan(row["sample_s"]) else float(row["sample_s"]),
                    "n": len(g),
                    "mean_s": float(g["produced_s"].mean()),
                    "sd_s": float(g["produced_s"].std()),
                    "target_s": float(g["target_s"].mean()) if what.target else None,
                    "bias_s": float((g["produced_s"] - g["target_s"]).mean()) if what.target else None,
                }
            )
    accounts = [
        {
            "account": account,
            "model": model,
            "latent_dim": what.n_latents,
            "loglik_per_trial": float(g["loglik"].mean()),
            "loglik_se": 0.05,
            "bits_per_spike": 0.21,
            "n_trials": len(trials),
        }
        for (model, account), g in scores.groupby(["model", "account"], sort=False)
    ]
    return {
        "portfire": "0.1.0",
        "seed": 7,
        "session": {
            "units_used": what.n_units,
            "units_left_out": {"u99": "0.1 spikes/s, below 0.5"},
            "trials_used": len(trials),
            "trials_left_out": {"12": "no response and no end_s", "88": "a lapse: 3.4 s, over 3 times 0.7 s"},
            "conditions": int(trials["condition"].nunique()),
            "digest": "sha256:" + "0123456789abcdef" * 4,
        },
        "behaviour": {"conditions": conditions, "weber_fraction": 0.11 if what.responses else None},
        "chosen": invent_choice(what),
        "accounts": accounts,
        "contrasts": invent_contrasts(what),
        "decode": invent_decode(what) if what.responses else [],
        "yardsticks": {
            "condition_rate_bits_per_spike": 0.123,
            "unseen_units_bits_per_spike": 0.187,
            "unseen_units_groups": 4,
        },
        "unseen_conditions": [
            {"account": accounts[0]["account"], "loglik_per_trial": -820.4, "less_full": 0.0, "conditions": 9}
        ],
        "rivals": [
            {
                "rival": "a change of speed",
                "source": "interval",
                "parameters": 1,
                "ahead_nats": {"neither": 9.0, "initial": 6.0, "sustained": -12.3, "both": -11.0},
                "beats": ["neither", "initial"],
                "beside_nats": 0.4,
                "p": 0.37,
            }
        ],
        "checks": [
            {
                "check": "rates",
                "p": 0.41,
                "recorded": 0.3,
                "drawn": 0.31,
                "difference": 0.02,
                "matters": 0.15,
                "failed": False,
            }
        ],
        "warnings": ["Trial time predicts the rate of 3 units (R² above 0.3)."],
        "settings": {
            "window": {"bin_s": 0.02, "before_set_s": 0.0, "min_rate_hz": 0.5},
            "compare": {"sources": list(what.sources), "folds": 5, "min_gain": 0.05},
            "decode": {"cutoffs_s": list(what.cutoffs), "draws": 1000},
            "tests": {"level": 0.05},
        },
        "versions": {"python": "3.11", "numpy": "2.4"},
        "not_run": ["The persistence of each push was not estimated."],
    }


def write_invented(out: Path, what: Invention) -> Path:
    """Write an invented run folder; `log.txt` and `fits/` are left out, the report reads neither."""
    rng = np.random.default_rng(what.seed)
    trials = invent_trials(rng, what)
    scores = invent_scores(rng, what, trials)
    result = invent_result(what, trials, scores)
    out.mkdir(parents=True, exist_ok=True)
    (out / "result.json").write_text(json.dumps(result), encoding="utf-8")
    trials.to_parquet(out / "trials.parquet")
    scores.to_parquet(out / "scores.parquet")
    invent_predictions(rng, what, trials).to_parquet(out / "decode.parquet")
    invent_latents(rng, what, trials).to_netcdf(out / "latents.nc", engine="h5netcdf")
    invent_rates(rng, what, trials).to_netcdf(out / "rates.nc", engine="h5netcdf")
    return out


SMALL: dict[str, Any] = {
    "contexts": ("high", "low"),
    "samples": (0.5, 0.9),
    "n_per_condition": 12,
    "n_units": 6,
    "n_latents": 2,
    "cutoffs": (0.1, 0.2),
}


@pytest.fixture
def invent(tmp_path: Path) -> Callable[..., Path]:
    """Return a function that writes an invented run folder, given what differs from the usual one."""
    return lambda name="run", **changes: write_invented(tmp_path / name, replace(Invention(), **changes))


@pytest.fixture
def small(invent: Callable[..., Path]) -> Callable[..., Path]:
    """Return a function that writes a small invented run folder."""
    return lambda name="run", **changes: invent(name, **(SMALL | changes))


@pytest.fixture(scope="module")
def invent_small(tmp_path_factory: pytest.TempPathFactory) -> Callable[[str], Path]:
    """Return a function that writes a small invented run folder that the tests of a file share."""
    return lambda name: write_invented(tmp_path_factory.mktemp(name), replace(Invention(), **SMALL))


@pytest.fixture
def result_only(small: Callable[..., Path]) -> Callable[[], Path]:
    """Return a function that writes an invented run folder that holds `result.json` and nothing else."""

    def write() -> Path:
        out = small()
        for path in out.iterdir():
            if path.name != "result.json":
                path.unlink()
        return out

    return write


def edit_result(out: Path, **changes: Any) -> None:
    path = out / "result.json"
    path.write_text(json.dumps(json.loads(path.read_text(encoding="utf-8")) | changes), encoding="utf-8")


@pytest.fixture
def amend() -> Callable[..., None]:
    """Return a function that changes keys of a run folder's `result.json`."""
    return edit_result
