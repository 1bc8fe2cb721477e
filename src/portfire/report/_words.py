"""Numbers and verdicts in words."""

from __future__ import annotations

import math
import re
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


def pick_digits(*values: Any) -> int:
    """Return how many decimals tell small gains apart: 3 where all are below 0.1, else 2."""
    known = [abs(float(v)) for v in values if v is not None]
    return 3 if known and max(known) < 0.1 else 2


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


def name_source(contrast: Mapping[str, Any]) -> str:
    """Return the source of a contrast, after its session where the result holds several."""
    source = str(contrast.get("source"))
    return f"{contrast['session']}: {source}" if contrast.get("session") else source


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


def state_reason(contrast: Mapping[str, Any]) -> str | None:
    """Return why a verdict is undetermined, in the words of the result; None for other verdicts."""
    words = contrast.get("words")
    if contrast.get("verdict") != "undetermined" or not words:
        return None
    # The headline says that these data cannot tell, and the sentence on open routes says what would.
    words = re.sub(r"^Between [^,:]+, these data cannot tell: ", "", str(words))
    return begin_sentence(re.sub(r"; about \d+ trials would settle it[^.;]*", "", words))


def round_trials(n: int) -> str:
    """Return a number of trials with two significant figures: it is an extrapolation."""
    if n < 100:
        return str(n)
    step = 10 ** (len(str(n)) - 2)
    return f"{math.ceil(n / step) * step:,}"


def state_evidence(contrast: Mapping[str, Any], min_gain: float) -> str | None:
    """Return the numbers behind a verdict as a sentence or two, the needed route first."""
    lead = {
        "initial_unique": "without the initial route",
        "sustained_unique": "without the sustained route",
        "total": "without either",
    }
    verdict = contrast.get("verdict")
    order = sorted(lead, key=lambda key: key != f"{verdict}_unique")
    parts = []
    for key in order:
        entry = contrast.get(key)
        if isinstance(entry, Mapping) and entry.get("nats_per_trial") is not None:
            digits = pick_digits(entry["nats_per_trial"], *(entry.get("ci95") or []))
            value = write_number(entry["nats_per_trial"], digits)
            interval = write_interval(entry.get("ci95"), digits)
            parts.append(f"{value} nats {lead[key]} (95{GAP}% CI {interval}; {write_p(entry.get('p'))})")
    if not parts:
        return str(contrast["words"]) if contrast.get("words") and verdict != "undetermined" else None
    text = f"Held out, a trial loses {join_words(parts)}."
    other = {"initial": "sustained", "sustained": "initial"}.get(str(verdict))
    bounds = (contrast.get(f"{other}_unique") or {}).get("ci95") if other else None
    if bounds and bounds[1] is not None and bounds[1] < min_gain:
        most = write_number(max(bounds[1], 0.0), 3)
        text += (
            f" The {other} route is not needed beside it: it adds at most {most} nats a trial, less than "
            f"{write_short(min_gain)}."
        )
    return text


def state_dims(contrast: Mapping[str, Any], latent_dim: int | None) -> str | None:
    """Return what the verdict is with one latent dimension fewer and more, and why it stands all the same."""
    at_dims = contrast.get("at_dims")
    if not isinstance(at_dims, Mapping):
        return None
    verdict = contrast.get("verdict")
    others = sorted(at_dims.items(), key=lambda kv: int(kv[0]))
    alike = join_words([f"with {dim}" for dim, found in others if found == verdict])
    found_at = [(alike, "the same")] if alike else []
    found_at += [(f"with {dim}", str(found)) for dim, found in others if found != verdict]
    unlike = len(found_at) > bool(alike)
    parts = [
        f"{where} {'latent dimensions the verdict' if k == 0 else 'it'} is {found}"
        for k, (where, found) in enumerate(found_at)
    ]
    text = f"{begin_sentence(', '.join(parts))}." if parts else ""
    if latent_dim is None:
        return text or None
    above = str(latent_dim + 1)
    if above not in at_dims:
        return f"{text} It was not checked with {above} latent dimensions.".strip()
    if at_dims[above] != verdict and verdict != "undetermined":
        text += f" {_explain_standing(contrast, latent_dim)}"
    elif unlike and verdict != "undetermined":
        text += f" It stands, because it holds with {above}; fewer are reported and do not overrule."
    return text.strip()


def _explain_standing(contrast: Mapping[str, Any], latent_dim: int) -> str:
    ends = contrast.get("ends_nats") or {}
    here, above = (ends.get(str(d)) for d in (latent_dim, latent_dim + 1))
    ahead, behind = ("initial", "sustained")
    if contrast.get("verdict") == "sustained":
        ahead, behind = behind, ahead
    sign = 1 if ahead == "sustained" else -1
    named = contrast.get("verdict") == ahead
    if not named or here is None or above is None or min(sign * here, sign * above) <= 0:
        return "The result does not say why it stands."
    return (
        f"It stands, because at {latent_dim} and at {latent_dim + 1} the account with the {ahead} push alone "
        f"is ahead of the one with the {behind} push alone, by {abs(here):.0f} and {abs(above):.0f} nats on "
        "all trials."
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
            reason = f"the session has {'one sample interval' if run.samples else 'no sample_s column'}"
        elif source not in asked:
            reason = "the job does not list this source"
        else:
            reason = "the result holds no contrast for it"
        sentences.append(f"{begin_sentence(subject)} was not tested: {reason}.")
    return sentences


def state_time(run: RunFolder) -> str | None:
    """Return how well trial time explains the context; None where the result does not say."""
    for contrast in run.rows("contrasts"):
        if contrast.get("time_r2") is not None:
            share = write_number(100 * contrast["time_r2"], 0)
            return (
                f"Trial time explains {share}{GAP}% of the context; above 50{GAP}% the context counts as "
                "confounded with drift."
            )
    return None


def state_by_fold(run: RunFolder) -> str | None:
    """Return what was chosen inside each training set; None where the result does not say."""
    by_fold = [size for size in run.part("chosen").get("by_fold") or [] if isinstance(size, Mapping)]
    if not by_fold:
        return None
    keys = ("model", "latent_dim", "drift")
    chosen = [tuple(size.get(key) for key in keys) for size in by_fold]
    whole = tuple(run.part("chosen").get(key) for key in keys)
    if set(chosen) == {whole}:
        return f"Inside each of the {len(chosen)} training sets the choice is the same."
    same = [str(fold) for fold, size in enumerate(chosen, start=1) if size == whole]
    parts = [f"without fold {join_words(same, 'or')} it is the same"] if same else []
    parts += [
        f"without fold {fold} it is {model} with {dim} latent dimensions{'' if drift else ', no drift'}"
        for fold, (model, dim, drift) in enumerate(chosen, start=1)
        if (model, dim, drift) != whole
    ]
    return f"The choice inside the training sets: {'; '.join(parts)}."
