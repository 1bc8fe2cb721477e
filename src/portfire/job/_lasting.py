"""How long pushes last and what rivals them, as it stands in a contrast's row."""

from __future__ import annotations

from typing import Any

import numpy as np

from portfire.comparison import UnseenCondition, compare_unseen, condition_rate_by_unit, null_by_unit
from portfire.job._findings import Findings
from portfire.job._stages import ALL
from portfire.job._store import Store


def describe_persistence(findings: Findings, store: Store, source: str) -> dict[str, Any]:
    """Keys of a contrast's row on the persistence of its source's push; empty where it was not profiled."""
    by_shift = {
        shift: store.read_meta(key) for (shift, of), key in findings.tested.profiles.items() if of == source
    }
    if 0 not in by_shift:
        return {}
    here = by_shift[0]
    chosen = findings.sizes.chosen[ALL].latent_dim
    summary = None
    if not here["two_pushes"]:
        summary = {
            "estimate": here["estimate_s"],
            "ci95": here["ci95_s"],
            "at_next_dim": _neighbour(by_shift.get(1)),
            "at_previous_dim": _neighbour(by_shift.get(-1)),
        }
    return {
        "persistence_s": summary,
        "persistence_words": say_persistence(here, by_shift.get(1)),
        "persistence_profile": [
            {
                "latent_dim": chosen + shift,
                "grid_s": found["grid_s"],
                "loss_nats": (np.max(found["values"]) - np.array(found["values"])).tolist(),
                "behind_both_nats": found["behind_both"],
                "two_pushes": found["two_pushes"],
            }
            for shift, found in sorted(by_shift.items())
        ],
        "course": here["course"],
    }


def _neighbour(found: dict[str, Any] | None) -> dict[str, Any] | None:
    if found is None:
        return None
    return {
        "estimate": found["estimate_s"],
        "ci95": found["ci95_s"],
        "two_pushes": found["two_pushes"],
    }


def say_persistence(here: dict[str, Any], above: dict[str, Any] | None) -> str:
    """The persistence in a sentence or two."""
    if here["two_pushes"]:
        return (
            f"two pushes: the best single push stays {here['behind_both']:.1f} nats behind an initial and a "
            "sustained push together, so that no one persistence describes them"
        )
    low, high = here["ci95_s"]
    interval = f"95 % interval {low:.2g} s " + ("or more" if high is None else f"to {high:.2g} s")
    words = f"the push lasts {_say_time(here['estimate_s'])} ({interval})"
    if low == 0 and high is None:
        words += ": these data say nothing on how long it lasts"
    elif low == 0:
        words += ": an initial push is not excluded, a sustained one is"
    elif high is None:
        words += ": a sustained push is not excluded, an initial one is"
    else:
        words += ": it is neither initial nor sustained, but dies away in between"
    if above is not None and not _overlap(here["ci95_s"], above["ci95_s"]):
        words += "; with one latent dimension more the interval is another one, so that it hangs on the size"
    return words


def _say_time(seconds: float | None) -> str:
    return "to the response" if seconds is None else f"{seconds:.2g} s"


def _overlap(first: list[float | None], second: list[float | None]) -> bool:
    (a, b), (c, d) = ([np.inf if x is None else x for x in pair] for pair in (first, second))
    return bool(a <= d and c <= b)


def list_rivals_of(findings: Findings, store: Store, source: str) -> list[dict[str, Any]]:
    """Rows of the result on the rivals of one source's pushes."""
    if source not in findings.tested.rivals:
        return []
    rows: list[dict[str, Any]] = store.read_meta(findings.tested.rivals[source])["rivals"]
    return rows


def name_rival(rows: list[dict[str, Any]], verdict: str) -> str | None:
    """The rival that beats a verdict by most; None where none does."""
    better = [row for row in rows if verdict in row.get("beats", [])]
    return max(better, key=lambda row: row["ahead_nats"][verdict])["rival"] if better else None


def describe_yardsticks(findings: Findings, store: Store) -> dict[str, Any] | None:
    """Bits a spike by the condition's mean rate, and of units predicted from the others; None without."""
    if not findings.tested.yardsticks:
        return None
    trials, folds = findings.trials, findings.job.compare.folds
    null, rate = null_by_unit(trials, folds), condition_rate_by_unit(trials, folds)
    n_spikes = trials.counts[:, trials.n_before :].sum()
    unseen = np.zeros(len(trials))
    for key in findings.tested.yardsticks:
        arrays = store.read(key)[1]
        unseen[arrays["rows"]] = arrays["loglik"].sum(axis=1)

    def bits(above: np.ndarray) -> float:
        return float(above.sum() / (n_spikes * np.log(2)))

    return {
        "condition_rate_bits_per_spike": bits(rate - null),
        "unseen_units_bits_per_spike": bits(unseen - null.sum(axis=1)),
        "unseen_units_groups": len(store.read_meta(findings.tested.yardsticks[0])["groups"]),
    }


def list_unseen(findings: Findings, store: Store) -> list[dict[str, Any]]:
    """A row an account: its scores of conditions that its fit never saw."""
    found = []
    for condition, key in sorted(findings.tested.unseen.items()):
        content, arrays = store.read(key)
        loglik = {account: arrays[f"loglik_{k}"] for k, account in enumerate(content["accounts"])}
        found.append(UnseenCondition(condition, arrays["rows"], loglik))
    if not found:
        return []
    rows: list[dict[str, Any]] = compare_unseen(found, next(iter(found[0].loglik)))
    for row in rows:
        row["by_condition"] = [
            {
                "condition": one.condition,
                "n": len(one.rows),
                "loglik_per_trial": float(one.loglik[row["account"]].mean()),
            }
            for one in found
        ]
    return rows
