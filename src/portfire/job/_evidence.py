"""From ladders of fits to contrasts with verdicts, as they stand in the result."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from portfire.accounts import SOURCES, Account
from portfire.comparison import (
    Contrast,
    Scored,
    Verdict,
    carrying_time_constant,
    contrast_sources,
    describe_mimic,
    likelihood_ratio_p,
    overrule,
    reconcile,
)
from portfire.estimation import fit_from_parts
from portfire.job._findings import Findings
from portfire.job._lasting import describe_persistence, list_rivals_of, name_rival
from portfire.job._stages import ALL
from portfire.job._store import Store
from portfire.session import explain_by_time

CONFOUNDED = 0.5


@dataclass(frozen=True)
class Evidences:
    """Contrast rows of the result, the scores behind them, and warnings.

    Parameters
    ----------
    rows : tuple of dict
    scores : DataFrame
        A row a held-out trial, account and size.
    n_train : float
        Mean number of training trials of a fold.
    warnings : tuple of str
    """

    rows: tuple[dict[str, Any], ...]
    scores: pd.DataFrame
    n_train: float
    warnings: tuple[str, ...]


def collect_contrasts(findings: Findings, store: Store) -> Evidences:
    """Contrast every source at the chosen size, set beside one dimension fewer and more."""
    scored, scores, n_train, warnings = _score_held_out(findings, store)
    by_shift = {0: scored}
    for shift in sorted({shift for shift, _, _ in findings.ladders} - {0}):
        by_shift[shift], more = _score_in_sample(findings, store, shift)
        warnings += more
    sources = findings.job.compare.sources
    level, min_gain = findings.job.tests.level, findings.job.compare.min_gain
    rows: list[dict[str, Any]] = []
    if sources:
        contrasts = {
            shift: {
                c.source: c
                for c in contrast_sources(
                    s, sources, level, min_gain, {} if shift else _drawn(findings, store)
                )
            }
            for shift, s in by_shift.items()
        }
        n_draws = findings.job.tests.bootstrap
        if n_draws and 3 * len(sources) > level * (1 + n_draws):
            warnings.append(
                f"With {n_draws} bootstrap draws no p of {3 * len(sources)} entries can reach {level:g} "
                f"after adjustment; set [tests] bootstrap to {3 * len(sources) / level:.0f} or more."
            )
        for source in sources:
            rows.append(_row(findings, store, source, {s: found[source] for s, found in contrasts.items()}))
    return Evidences(tuple(rows), scores, n_train, tuple(warnings))


def _drawn(findings: Findings, store: Store) -> dict[tuple[str, str], float]:
    """Bootstrap p of every entry that has one; it takes the place of that of the likelihood ratio."""
    return {
        (source, name): float(tests["bootstrap"]["p"])
        for source, key in findings.tested.routes.items()
        for name, tests in store.read_meta(key).items()
        if name in ("initial_unique", "sustained_unique", "total") and "bootstrap" in tests
    }


def _score_in_sample(findings: Findings, store: Store, shift: int) -> tuple[Scored, list[str]]:
    """Accounts one dimension away, fitted to all trials and scored on them."""
    values: dict[str, float] = {}
    loglik: dict[str, np.ndarray] = {}
    setup, n_train, warnings = None, 0.0, []
    for source in findings.job.compare.sources:
        ladder = store.read_meta(findings.ladders[shift, ALL, source])
        warnings += _complaints(ladder, f"on all trials, for {source}", in_sample=True)
        n_train = float(ladder["n_train"])
        for account, entry in ladder["accounts"].items():
            # The full account stands in every source's ladder; the highest of its fits counts.
            if entry["value"] > values.get(account, -np.inf):
                content, arrays = store.read(entry["key"])
                values[account], loglik[account] = float(entry["value"]), arrays["loglik"]
                setup = setup or fit_from_parts(content, arrays).setup
    assert setup is not None
    return Scored(setup, values, loglik, n_train, findings.job.compare.folds, in_sample=True), warnings


def _score_held_out(findings: Findings, store: Store) -> tuple[Scored, pd.DataFrame, float, list[str]]:
    """Accounts at the chosen size, each trial scored by the fold that held it out."""
    trials, folds = findings.trials, findings.job.compare.folds
    whole = store.read_meta(findings.ladders[0, ALL, ""])
    accounts = list(whole["accounts"])
    loglik = {account: np.full(len(trials), np.nan) for account in accounts}
    frames, n_train, warnings = [], [], []
    before = trials.n_before
    n_spikes = trials.counts[:, before:].sum(axis=(1, 2)).astype(int)
    for fold in range(folds):
        ladder = store.read_meta(findings.ladders[0, fold, ""])
        n_train.append(ladder["n_train"])
        size = findings.sizes.chosen[fold]
        for account in accounts:
            _, arrays = store.read(ladder["accounts"][account]["key"])
            rows = arrays["rows"]
            loglik[account][rows] = arrays["loglik"]
            frames.append(
                pd.DataFrame(
                    {
                        "trial": [trials.trial[i] for i in rows],
                        "fold": fold,
                        "account": account,
                        "model": findings.job.model.names[size.model],
                        "latent_dim": ladder["latent_dim"],
                        "loglik": arrays["loglik"],
                        "loglik_se": arrays["loglik_se"],
                        "n_spikes": n_spikes[rows],
                        "n_bins": np.asarray(trials.n_bins)[rows].astype(int),
                    }
                )
            )
        warnings += _complaints(ladder, f"without fold {fold + 1}")
    warnings += _complaints(whole, "on all trials")
    start = store.read(next(iter(whole["accounts"].values()))["key"])
    setup = fit_from_parts(*start).setup
    values = {account: float(entry["value"]) for account, entry in whole["accounts"].items()}
    scored = Scored(setup, values, loglik, float(np.mean(n_train)), folds)
    return scored, pd.concat(frames, ignore_index=True), float(np.mean(n_train)), warnings


def _complaints(ladder: dict[str, Any], where: str, in_sample: bool = False) -> list[str]:
    """What a reader should know of fits that did not settle."""
    place = f"at {ladder['latent_dim']} latent dimensions, {where}"
    out = []
    if not ladder["agreed"] and not in_sample:
        out.append(
            f"After several rounds of refitting {place} an account still stood below one that it contains."
        )
    for account, entry in ladder["accounts"].items():
        if entry["status"] != "converged" and not (in_sample and entry["status"] == "iterations"):
            out.append(f"The fit of {account} {place} ended with status '{entry['status']}'.")
    return out


def _row(findings: Findings, store: Store, source: str, by_shift: dict[int, Contrast]) -> dict[str, Any]:
    here = by_shift[0]
    best = findings.sizes.chosen[ALL]
    at_dims: dict[int, Verdict] = {
        best.latent_dim + shift: found.verdict for shift, found in by_shift.items() if shift
    }
    ends_nats = {best.latent_dim + shift: found.end_difference for shift, found in sorted(by_shift.items())}
    verdict = reconcile(here.verdict, at_dims, best.latent_dim, ends_nats)
    mimic, time_constant = _look_for_mimic(findings, store, source, here, by_shift.get(1))
    confounded = _confounding(findings) if source == "context" else None
    if confounded is not None and confounded > CONFOUNDED:
        verdict = overrule(
            verdict, f"context is confounded with drift, since trial time explains {confounded:.0%} of it"
        )
    failed = store.read_meta(findings.tested.checks)["failed"] if findings.tested.checks else None
    if failed is not None and verdict.label != "undetermined":
        verdict = overrule(verdict, failed)
    row: dict[str, Any] = {"source": source, **here.scores}
    for name, entry in here.entries.items():
        row[name] = entry.evidence.to_row()
    row |= {
        "verdict": verdict.label,
        "words": verdict.words,
        "trials_to_close": verdict.trials_to_close,
        "lr": {
            name: {
                "stat": entry.statistic,
                "df": entry.n_fixed or entry.n_params,
                "boundary": bool(entry.cov_dims),
                "p_raw": entry.p_raw,
                "p_chi2": likelihood_ratio_p(entry.statistic, entry.n_fixed, entry.cov_dims),
            }
            for name, entry in here.entries.items()
        },
        "gain_k": {name: entry.cost for name, entry in here.entries.items()},
        "at_dims": {str(d): v.label for d, v in sorted(at_dims.items())},
        "ends_nats": {str(d): nats for d, nats in ends_nats.items()},
        "mimic": mimic,
        "carrying_mode": time_constant,
    }
    row |= describe_persistence(findings, store, source)
    rivals = list_rivals_of(findings, store, source)
    if rivals:
        row["rival"] = name_rival(rivals, verdict.label)
        if row["rival"] is not None:
            row["words"] += (
                f" But {row['rival']} describes these data better than the pushes of this verdict."
            )
    if source in findings.tested.routes:
        row["tests"] = store.read_meta(findings.tested.routes[source])
    if source == "context":
        row["time_r2"] = confounded
    if verdict.label == "undetermined":
        row["open"] = list(verdict.open)
    return row


def _look_for_mimic(
    findings: Findings, store: Store, source: str, here: Contrast, above: Contrast | None
) -> tuple[str | None, float | None]:
    """Where the accounts tie at one dimension more: the mode that carries the initial-only separation."""
    shift = 0 if above is None else 1
    contrast = here if above is None else above
    ladder = findings.ladders[shift, ALL, source if shift else ""]
    accounts = store.read_meta(ladder)["accounts"]
    present = Account.parse(next(iter(accounts)))
    fitted = fit_from_parts(*store.read(accounts[_with_route(present, source)]["key"]))
    time_constant = carrying_time_constant(fitted, source)
    min_gain = findings.job.compare.min_gain
    ties = all(
        contrast.entries[name].evidence.gain.nats_per_trial < min_gain
        for name in ("initial_unique", "sustained_unique")
    )
    pushed = contrast.entries["total"].evidence.p <= findings.job.tests.level
    sentence = None
    if ties and pushed and above is not None:
        trial_s = float(np.median(findings.trials.n_bins)) * findings.trials.bin_s
        sentence = describe_mimic(source, time_constant, trial_s)
    return sentence, time_constant if np.isfinite(time_constant) else None


def _with_route(full: Account, source: str) -> str:
    """The written form of the full account with this source by the initial route only."""
    present = tuple(name for name in SOURCES if full.route(name) == "both")
    return str(full.restrict(present).replace(source, "initial"))


def _confounding(findings: Findings) -> float | None:
    trials = findings.trials
    return None if trials.context is None else explain_by_time(trials.context, trials.set_s)
