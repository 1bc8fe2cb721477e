"""What a run leaves in its out folder: result.json, tables, latent states and rates."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from scipy.special import gammaln

from portfire.accounts import Account
from portfire.comparison import choose_smallest, fold_of, training_rows
from portfire.dynamics import READOUTS, ModelFile
from portfire.job._atomic import write_dataset_atomic, write_json_atomic, write_table_atomic
from portfire.job._evidence import Evidences
from portfire.job._findings import Findings
from portfire.job._lasting import describe_yardsticks, list_rivals_of, list_unseen
from portfire.job._result import RESULT
from portfire.job._stages import ALL, Size
from portfire.job._store import Store
from portfire.job._version import library_versions
from portfire.job._workspace import Workspace
from portfire.session import Trials
from portfire.timing import summarise_behaviour

LEAST_RUNNING = 5
N_COMPONENTS = 10
SMOOTHING_S = 0.025


def write_outputs(
    findings: Findings, evidence: Evidences, models: Sequence[ModelFile], workspace: Workspace
) -> None:
    """Write everything but the report; ``result.json`` comes last, so that it marks a whole folder."""
    out, store = workspace.out, workspace.store
    trials = findings.trials
    others = _other_models(findings, store)
    scores = pd.concat([evidence.scores, *others], ignore_index=True)
    write_table_atomic(out / "scores.parquet", scores)
    write_table_atomic(out / "decode.parquet", _decode_table(findings))
    write_table_atomic(out / "trials.parquet", _trial_table(findings))
    write_dataset_atomic(out / "latents.nc", _latents(findings, store))
    write_dataset_atomic(
        out / "rates.nc", _rates(trials, store.read(findings.describe)[1]["predicted_rates"])
    )
    behaviour = summarise_behaviour(trials, seed=findings.job.seed).to_dict()
    warnings = [*evidence.warnings, *findings.warnings]
    if trials.context is not None:
        for row in evidence.rows:
            if row["source"] == "context" and row["time_r2"] is not None and row["time_r2"] > 0.5:
                warnings.append("Context is confounded with trial time; its verdict is undetermined.")
    from portfire import __version__

    result: dict[str, Any] = {
        "portfire": __version__,
        "seed": findings.job.seed,
        "session": {
            "units_used": len(trials.unit),
            "units_left_out": dict(trials.units_left_out),
            "trials_used": len(trials),
            "trials_left_out": dict(trials.trials_left_out),
            "conditions": len(trials.conditions),
            "digest": trials.digest,
        },
        "behaviour": behaviour,
        "chosen": _chosen(findings),
        "accounts": _account_rows(findings, evidence, others, READOUTS[models[0].readout].of_counts),
        "contrasts": list(evidence.rows),
        "rivals": [
            row for source in findings.job.compare.sources for row in list_rivals_of(findings, store, source)
        ],
        "yardsticks": describe_yardsticks(findings, store),
        "unseen_conditions": list_unseen(findings, store),
        "checks": store.read_meta(findings.tested.checks)["checks"] if findings.tested.checks else [],
        "decode": [found.to_row() for found in findings.decodings],
        "settings": findings.job.to_dict(),
        "versions": library_versions(),
        "not_run": [*findings.not_run, *_absent_checks(findings, store)],
        "warnings": warnings,
    }
    write_json_atomic(out / RESULT, result)


def _named(findings: Findings, size: Size) -> dict[str, Any]:
    names = findings.job.model.names
    return {"model": names[size.model], "latent_dim": size.latent_dim, "drift": size.drift}


def _chosen(findings: Findings) -> dict[str, Any]:
    sizes = findings.sizes
    candidates, choice = sizes.choices[ALL]
    return {
        **_named(findings, sizes.chosen[ALL]),
        "by_fold": [_named(findings, sizes.chosen[f]) for f in range(findings.job.compare.folds)],
        "candidates": [
            {**_named(findings, size), "deficit_nats_per_trial": d.nats_per_trial, "deficit_se": d.se}
            for size, d in zip(candidates, choice.deficits, strict=True)
        ],
    }


def _other_models(findings: Findings, store: Store) -> list[pd.DataFrame]:
    """Held-out scores of the full account under each model file not chosen, at its best size."""
    trials, sizes = findings.trials, findings.sizes
    best = sizes.chosen[ALL]
    candidates, _ = sizes.choices[ALL]
    frames = []
    for model in sorted({size.model for size in candidates} - {best.model}):
        own = [size for size in candidates if size.model == model]
        tables = []
        for size in own:
            values = np.full((2, len(trials)), np.nan)
            folds = np.full(len(trials), -1)
            for fold in range(findings.job.compare.folds):
                _, arrays = store.read(sizes.fits[size, fold])
                values[:, arrays["rows"]] = arrays["loglik"], arrays["loglik_se"]
                folds[arrays["rows"]] = fold
            tables.append((values, folds))
        pick = choose_smallest([values[0] for values, _ in tables], findings.job.compare.min_gain).chosen
        values, folds = tables[pick]
        frames.append(
            pd.DataFrame(
                {
                    "trial": list(trials.trial),
                    "fold": folds,
                    "account": str(Account.full(_sources(findings))),
                    "model": findings.job.model.names[model],
                    "latent_dim": own[pick].latent_dim,
                    "loglik": values[0],
                    "loglik_se": values[1],
                    "n_spikes": trials.counts[:, trials.n_before :].sum(axis=(1, 2)).astype(int),
                    "n_bins": np.asarray(trials.n_bins).astype(int),
                }
            )
        )
    return frames


def _absent_checks(findings: Findings, store: Store) -> list[str]:
    absent = store.read_meta(findings.tested.checks)["absent"] if findings.tested.checks else None
    return [] if absent is None else [f"No predictive checks: {absent}."]


def _sources(findings: Findings) -> tuple[str, ...]:
    from portfire.accounts import make_design

    return make_design(findings.trials).sources


def null_loglik(trials: Trials, n_folds: int) -> np.ndarray:
    """Held-out log-likelihood of a constant rate for each unit, taken from the training trials (nats)."""
    before = trials.n_before
    counts = trials.counts[:, before:].astype(float)
    mask = trials.mask[:, before:]
    totals, bins = counts.sum(axis=1), mask.sum(axis=1)
    constant = -gammaln(counts + 1.0).sum(axis=(1, 2))
    fold = fold_of(trials.index, trials.n_session, n_folds)
    out = np.empty(len(trials))
    for j in range(n_folds):
        train = training_rows(trials.index, trials.n_session, n_folds, {j})
        test = fold == j
        # Half a spike keeps a unit that is silent in training from an infinite loss.
        expected = (totals[train].sum(axis=0) + 0.5) / bins[train].sum()
        out[test] = totals[test] @ np.log(expected) - bins[test] * expected.sum() + constant[test]
    return out


def _account_rows(
    findings: Findings, evidence: Evidences, others: Sequence[pd.DataFrame], counts: bool
) -> list[dict[str, Any]]:
    trials = findings.trials
    null = pd.Series(null_loglik(trials, findings.job.compare.folds), index=list(trials.trial))
    dims = {findings.job.model.names[findings.sizes.chosen[ALL].model]: findings.sizes.chosen[ALL].latent_dim}
    rows = []
    for table in (evidence.scores, *others):
        for (account, model), group in table.groupby(["account", "model"], sort=False):
            above = group["loglik"].to_numpy() - null.loc[list(group["trial"])].to_numpy()
            spikes = int(group["n_spikes"].sum())
            bits = float(above.sum() / (spikes * np.log(2))) if spikes and counts else None
            rows.append(
                {
                    "account": account,
                    "model": model,
                    "latent_dim": dims.get(model, int(group["latent_dim"].iloc[0])),
                    "loglik_per_trial": float(group["loglik"].mean()),
                    "loglik_se": float(np.sqrt((group["loglik_se"] ** 2).sum()) / len(group)),
                    "bits_per_spike": bits,
                    "n_trials": len(group),
                }
            )
    return rows


def _decode_table(findings: Findings) -> pd.DataFrame:
    frames = [found.to_table(findings.trials.trial) for found in findings.decodings if found.variant == "all"]
    if frames:
        return pd.concat(frames, ignore_index=True)
    names = (
        "trial",
        "condition",
        "fold",
        "cutoff_s",
        "features",
        "produced_s",
        "baseline_s",
        "predicted_s",
        "variant",
    )
    return pd.DataFrame({name: pd.Series(dtype=float) for name in names})


def _trial_table(findings: Findings) -> pd.DataFrame:
    trials = findings.trials
    n = len(trials)
    return pd.DataFrame(
        {
            "trial": list(trials.trial),
            "condition": np.asarray(trials.condition),
            "context": list(trials.context) if trials.context is not None else [None] * n,
            "sample_s": trials.sample_s if trials.sample_s is not None else np.full(n, np.nan),
            "produced_s": trials.produced_s,
            "target_s": trials.target_s if trials.target_s is not None else np.full(n, np.nan),
            "set_s": trials.set_s,
            "n_bins": np.asarray(trials.n_bins).astype(int),
            "fold": fold_of(trials.index, trials.n_session, findings.job.compare.folds),
        }
    )


def _latents(findings: Findings, store: Store) -> xr.Dataset:
    trials = findings.trials
    _, arrays = store.read(findings.describe)
    smooth = arrays["smooth_state"][:, trials.n_before :]
    causal = np.full(smooth.shape, np.nan)
    for key in findings.causal:
        _, part = store.read(key)
        causal[part["rows"]] = part["state"]
    smooth = np.where(trials.mask[:, trials.n_before :, None], smooth, np.nan)
    pushes = {
        name: arrays[f"smooth_{name}"] for name in ("initial", "sustained", "initial_cov", "sustained_cov")
    }
    return xr.Dataset(
        {
            "state": (("trial", "time", "latent"), smooth),
            "state_causal": (("trial", "time", "latent"), causal),
            "initial": (("trial", "latent"), pushes["initial"]),
            "sustained": (("trial", "latent"), pushes["sustained"]),
            "initial_cov": (("trial", "latent", "latent2"), pushes["initial_cov"]),
            "sustained_cov": (("trial", "latent", "latent2"), pushes["sustained_cov"]),
        },
        coords={
            "trial": list(trials.trial),
            "time": np.arange(smooth.shape[1]) * trials.bin_s,
            "latent": np.arange(smooth.shape[2]),
        },
    )


def _rates(trials: Trials, predicted: np.ndarray) -> xr.Dataset:
    before, n_conditions = trials.n_before, len(trials.conditions)
    counts, mask = trials.counts[:, before:], trials.mask[:, before:]
    n_time = mask.shape[1]
    recorded = np.full((n_conditions, n_time, len(trials.unit)), np.nan)
    running = np.zeros((n_conditions, n_time), dtype=int)
    for c in range(n_conditions):
        mine = trials.condition == c
        running[c] = mask[mine].sum(axis=0)
        enough = running[c] >= LEAST_RUNNING
        recorded[c, enough] = counts[mine].sum(axis=0)[enough] / (running[c, enough, None] * trials.bin_s)
    model = np.where(np.isfinite(recorded), predicted, np.nan)
    shares = component_shares(recorded, trials.bin_s)
    return xr.Dataset(
        {
            "recorded": (("condition", "time", "unit"), recorded),
            "model": (("condition", "time", "unit"), model),
            "n_running": (("condition", "time"), running),
            "pc_variance": (("component",), shares),
        },
        coords={
            "condition": np.arange(n_conditions),
            "time": np.arange(n_time) * trials.bin_s,
            "unit": list(trials.unit),
            "context": ("condition", ["" if c is None else c for c, _ in trials.conditions]),
            "sample_s": ("condition", [np.nan if s is None else s for _, s in trials.conditions]),
        },
    )


def component_shares(rates: np.ndarray, bin_s: float) -> np.ndarray:
    """Share of the variance of trial-averaged rates in each of the first ten principal components.

    Rates are smoothed (Gaussian, SD 25 ms) where trials still run.
    """
    from scipy.ndimage import gaussian_filter1d

    seen = np.isfinite(rates).all(axis=2)
    parts = [
        gaussian_filter1d(rates[c, seen[c]], SMOOTHING_S / bin_s, axis=0, mode="nearest")
        for c in range(len(rates))
        if seen[c].any()
    ]
    shares = np.zeros(N_COMPONENTS)
    if parts:
        flat = np.concatenate(parts)
        values = np.linalg.svd(flat - flat.mean(axis=0), compute_uv=False) ** 2
        total = values.sum()
        k = min(N_COMPONENTS, len(values))
        shares[:k] = values[:k] / total if total > 0 else 0.0
    return shares
