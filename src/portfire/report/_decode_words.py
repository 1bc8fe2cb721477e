"""The prediction of the produced interval in words."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from portfire.report._folder import RunFolder
from portfire.report._words import GAP, join_words, write_interval, write_number, write_p, write_short


def state_decode(run: RunFolder, features: str = "state") -> list[str]:
    """Return whether the single-trial state predicts the produced interval, as sentences."""
    rows = [r for r in run.rows("decode") if r.get("variant", "all") == "all"]
    chosen = [r for r in rows if r.get("features") == features]
    if not chosen:
        return [f"No prediction of the produced interval: {explain_no_decode(run)}."]
    passed = [r for r in chosen if r.get("p") is not None and r["p"] <= run.level]
    best = max(passed or chosen, key=lambda r: _or_low(r.get("r2_within_condition")))
    if not passed:
        counts = [r for r in rows if r.get("features") == "counts" and features != "counts"]
        foretold = [r for r in counts if r.get("p") is not None and r["p"] <= run.level]
        also = []
        if foretold:
            cutoffs = join_words([f"{write_short(r['cutoff_s'])}{GAP}s" for r in foretold])
            values = join_words([write_number(r.get("r2_within_condition")) for r in foretold])
            also = [
                "The yardstick, one raw count a unit over the same window, does predict it, with spikes up "
                f"to {cutoffs} (R² {values}): the fitted state leaves out what foretells the interval."
            ]
        return [
            "The single-trial state does not predict the produced interval within a condition better than "
            f"its null at any cutoff (p above {write_short(run.level)}).",
            f"The largest: {describe_row(best)} A p above the level is no evidence of absence.",
            *also,
        ]
    cutoffs = join_words([f"{write_short(r['cutoff_s'])}{GAP}s" for r in passed])
    counts = [r for r in rows if r.get("features") == "counts" and r.get("cutoff_s") == best.get("cutoff_s")]
    yardstick = ""
    if counts and features != "counts":
        value = write_number(counts[0].get("r2_within_condition"))
        yardstick = f" The yardstick, one raw count a unit over the same window, reaches {value}."
    return [
        "The single-trial state predicts the produced interval within a condition, with spikes up to "
        f"{cutoffs} after the set cue.",
        describe_row(best) + yardstick,
    ]


def describe_row(row: Mapping[str, Any]) -> str:
    """Return the numbers of a decode row: R² over all trials, then the test in its window."""
    text = (
        f"R² {write_number(row.get('r2_within_condition'))} at {write_short(row.get('cutoff_s'))}{GAP}s over "
        f"all held-out trials (95{GAP}% CI {write_interval(row.get('ci95'))})"
    )
    if row.get("r2_window") is None or not row.get("null95"):
        return f"{text}; {write_p(row.get('p'))}."
    n_draws = row.get("null_draws")
    shifts = f"; {n_draws} shifts" if n_draws else ""
    least = ""
    if n_draws and row.get("p") is not None and row["p"] <= 1.0001 / (1 + n_draws):
        least = ", the least that so many shifts allow"
    return (
        f"{text}. The test, over the middle 60{GAP}% of the trials: R²{GAP}{write_number(row['r2_window'])} "
        f"against a null of {write_interval(row['null95'])} (95{GAP}%{shifts}), {write_p(row.get('p'))}"
        f"{least}."
    )


def explain_no_decode(run: RunFolder) -> str:
    """Return why the result has no decode rows."""
    if run.trials is not None and not run.has_responses:
        return "no used trial has a response"
    if run.setting("decode", "cutoffs_s", None) == []:
        return "the job lists no cutoffs"
    return "the result holds no rows for it"


def _or_low(value: Any) -> float:
    return -math.inf if value is None else float(value)
