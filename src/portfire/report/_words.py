"""Numbers and verdicts in words."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from typing import Any

from portfire.report._folder import RunFolder

MINUS = "−"
GAP = "\u00a0"  # a space at which no line breaks
SUBJECTS = {
    "interval": "the sample interval",
    "context": "the context",
    "trial": "what differs between trials of one condition",
}
ENTRIES = {
    "total": "total: both routes taken away",
    "initial_unique": "initial, unique",
    "sustained_unique": "sustained, unique",
}


def write_number(value: Any, digits: int = 2) -> str:
    """Return a number with a fixed number of decimals and a proper minus; "not given" for none."""
    if value is None or not math.isfinite(float(value)):
        return "not given"
    text = f"{float(value):.{digits}f}"
    if float(text) == 0:
        text = text.lstrip("-")
    return text.replace("-", MINUS)


def write_short(value: Any, figures: int = 3) -> str:
    """Return a number with a few significant figures."""
    if value is None or not math.isfinite(float(value)):
        return "not given"
    return f"{float(value):.{figures}g}".replace("-", MINUS)


def write_interval(bounds: Any, digits: int = 2) -> str:
    """Return "a to b"."""
    if not bounds or any(b is None for b in bounds):
        return "not given"
    return f"{write_number(bounds[0], digits)} to {write_number(bounds[1], digits)}"


def write_p(p: Any) -> str:
    """Return "p = …", or "p < 0.001", as one unbroken piece."""
    value = write_p_value(p)
    if p is None:
        return f"p {value}"
    return f"p{GAP}{value}" if value.startswith("<") else f"p{GAP}={GAP}{value}"


def write_p_value(p: Any) -> str:
    """Return a p value as a table shows it."""
    if p is None:
        return "not given"
    if p < 0.001:
        return f"<{GAP}0.001"
    return f"{p:.3f}" if p < 0.1 else f"{p:.2f}"


def join_words(parts: Iterable[str], last: str = "and") -> str:
    """Return "a", "a and b", "a, b and c"."""
    parts = list(parts)
    if len(parts) < 2:
        return "".join(parts)
    return ", ".join(parts[:-1]) + f" {last} " + parts[-1]


def begin_sentence(text: str) -> str:
    """Return text with a capital first letter."""
    return text[:1].upper() + text[1:]


def count_words(n: int, noun: str) -> str:
    """Return "1 trial", "2 trials"."""
    return f"{n} {noun}" if n == 1 else f"{n} {noun}s"


def open_routes(contrast: Mapping[str, Any]) -> list[str]:
    """Return the routes that an undetermined contrast leaves open."""
    routes = contrast.get("open") or []
    return [routes] if isinstance(routes, str) else [str(r) for r in routes]


def state_verdict(contrast: Mapping[str, Any], min_gain: float) -> str:
    """Return one sentence: what pushes the state, and how."""
    source = str(contrast.get("source"))
    subject = SUBJECTS.get(source, source)
    verdict = contrast.get("verdict")
    sentences = {
        "initial": f"{subject} pushes the latent state once, at the set cue (an initial push).",
        "sustained": f"{subject} pushes the latent state by an input that acts until the response "
        "(a sustained push).",
        "both": f"{subject} pushes the latent state by both routes: once at the set cue, and by an "
        "input that acts until the response.",
        "neither": f"{subject} gives the latent state no push worth having: by both routes together the gain "
        f"is below {write_short(min_gain)} nats a trial.",
        "undetermined": f"these data cannot tell how {subject} pushes the latent state.",
    }
    return begin_sentence(sentences.get(str(verdict), f"{subject}: {verdict}."))


def state_open(contrast: Mapping[str, Any], n_used: int | None) -> str | None:
    """Return a sentence that names the open routes and what would close them; None where nothing is open."""
    if contrast.get("verdict") != "undetermined":
        return None
    routes = open_routes(contrast)
    if routes:
        noun = "route" if len(routes) == 1 else "routes"
        verb = "is" if len(routes) == 1 else "are"
        sentence = f"The {join_words(routes)} {noun} {verb} open"
    else:
        sentence = "The result names no open route"
    n_trials = contrast.get("trials_to_close")
    if n_trials is None:
        return f"{sentence}; no number of trials that would close this is given."
    have = f" (this session has {n_used})" if n_used else ""
    return f"{sentence}; roughly {round_trials(int(n_trials))} trials would close this{have}."


def round_trials(n: int) -> str:
    """Return a number of trials with two significant figures: it is an extrapolation."""
    if n < 100:
        return str(n)
    step = 10 ** (len(str(n)) - 2)
    return f"{math.ceil(n / step) * step:,}"


def state_evidence(contrast: Mapping[str, Any]) -> str:
    """Return the numbers behind a verdict as a sentence: that of the result, or else one made here."""
    if contrast.get("words"):
        return str(contrast["words"])
    parts = []
    lead = {
        "initial_unique": "without the initial route",
        "sustained_unique": "without the sustained route",
        "total": "without either",
    }
    for key, words in lead.items():
        entry = contrast.get(key)
        if isinstance(entry, Mapping):
            value = write_number(entry.get("nats_per_trial"))
            interval = write_interval(entry.get("ci95"))
            parts.append(f"{value} nats {words} (95{GAP}% CI {interval}; {write_p(entry.get('p'))})")
    return f"Held out, a trial loses {join_words(parts)}." if parts else ""


def state_dims(contrast: Mapping[str, Any]) -> str | None:
    """Return what the verdict is with one latent dimension fewer and more; None where not given."""
    at_dims = contrast.get("at_dims")
    if not isinstance(at_dims, Mapping) or not at_dims:
        return None
    parts = [f"{dim}: {verdict}" for dim, verdict in sorted(at_dims.items(), key=lambda kv: int(kv[0]))]
    agree = all(verdict == contrast.get("verdict") for verdict in at_dims.values())
    return f"With other numbers of latent dimensions ({'; '.join(parts)}) the verdict " + (
        "is the same." if agree else "is not the same throughout."
    )


def explain_untested(run: RunFolder) -> list[str]:
    """Return a sentence for every source that has no contrast, with the reason."""
    tested = {str(c.get("source")) for c in run.rows("contrasts")}
    asked = run.setting("compare", "sources", list(SUBJECTS))
    sentences = []
    for source, subject in SUBJECTS.items():
        if source in tested:
            continue
        if source == "context" and run.trials is not None and len(run.contexts) < 2:
            reason = f"the session has {'one context' if run.contexts else 'no context column'}"
        elif source == "interval" and run.trials is not None and len(run.samples) < 2:
            reason = f"the session has {'one sample interval' if run.samples else 'no sample intervals'}"
        elif source not in asked:
            reason = "the job does not list this source"
        else:
            reason = "the result holds no contrast for it"
        sentences.append(f"{begin_sentence(subject)} was not tested: {reason}.")
    return sentences


def state_decode(run: RunFolder, features: str = "state") -> str:
    """Return whether the single-trial state predicts the produced interval, as a sentence or two."""
    rows = [r for r in run.rows("decode") if r.get("variant", "all") == "all"]
    chosen = [r for r in rows if r.get("features") == features]
    if not chosen:
        return f"No prediction of the produced interval: {explain_no_decode(run)}."
    passed = [r for r in chosen if r.get("p") is not None and r["p"] <= run.level]
    best = max(chosen, key=lambda r: _or_low(r.get("r2_within_condition")))
    numbers = describe_row(best)
    cutoffs = join_words([f"{write_short(r['cutoff_s'])}{GAP}s" for r in passed])
    if not passed:
        return (
            "The single-trial state does not predict the produced interval within a condition better than "
            f"its null at any cutoff (p above {write_short(run.level)}); the largest is {numbers}. A p "
            "above the level is no evidence of absence."
        )
    counts = [r for r in rows if r.get("features") == "counts" and r.get("cutoff_s") == best.get("cutoff_s")]
    yardstick = ""
    if counts:
        value = write_number(counts[0].get("r2_within_condition"))
        yardstick = f" The yardstick, one raw count a unit over the same window, reaches {value}."
    return (
        "The single-trial state predicts the produced interval within a condition, with spikes up to "
        f"{cutoffs} after the set cue: {numbers}.{yardstick}"
    )


def describe_row(row: Mapping[str, Any]) -> str:
    """Return the numbers of a decode row."""
    return (
        f"R² {write_number(row.get('r2_within_condition'))} at {write_short(row.get('cutoff_s'))} s "
        f"(95{GAP}% CI {write_interval(row.get('ci95'))}; null {write_interval(row.get('null95'))}; "
        f"{write_p(row.get('p'))})"
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
