"""Tables of the page: rows of text, with every column explained."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from portfire.report._accounts import compare_scores, shorten_account, tabulate_contrasts
from portfire.report._decode import distinct_rows
from portfire.report._folder import RunFolder
from portfire.report._pushes import relate_within
from portfire.report._words import (
    MINUS,
    name_source,
    write_interval,
    write_number,
    write_p_value,
    write_short,
)

N_OPEN = 20


@dataclass(frozen=True)
class Table:
    """A table: columns with their explanations, rows of text; `n_words` first columns hold words."""

    caption: str
    columns: tuple[tuple[str, str], ...]
    rows: list[list[str]]
    n_words: int = 1
    folded: bool = field(default=False)


def list_accounts(run: RunFolder) -> Table | None:
    """Return the accounts with their held-out scores."""
    if not run.rows("accounts"):
        return None
    compared = compare_scores(run)
    differences = {} if compared is None else {(r.model, r.account): r for r in compared.itertuples()}
    rows = []
    for entry in run.rows("accounts"):
        paired = differences.get((str(entry.get("model")), str(entry.get("account"))))
        if paired is None:
            difference = "not given"
        elif paired.is_reference:
            difference = "0"
        else:
            difference = f"{write_number(paired.difference, 3)} ± {write_number(paired.se, 3)}"
        rows.append(
            [
                shorten_account(entry.get("account", "")),
                str(entry.get("model")),
                str(entry.get("latent_dim")),
                write_number(entry.get("loglik_per_trial")),
                _write_error(entry.get("loglik_se")),
                difference,
                write_number(entry.get("bits_per_spike"), 3),
                str(entry.get("n_trials")),
            ]
        )
    return Table(
        "Accounts, scored on held-out trials",
        (
            ("account", "the route of every source: none, initial, sustained or both"),
            ("model", "the model file that was fitted"),
            ("D", "number of latent dimensions"),
            ("log-likelihood", "log marginal likelihood of all counts, mean over held-out trials, nats"),
            ("MC SE", "Monte-Carlo standard error of that mean, nats a trial"),
            ("difference", "to the full account, paired over trials, ± its standard error, nats a trial"),
            ("bits/spike", "gain over a constant rate for each unit, bits a spike"),
            ("trials", "number of held-out trials scored"),
        ),
        rows,
        n_words=2,
    )  # fmt: skip


def _write_error(value: Any) -> str:
    return "< 0.001" if value is not None and abs(float(value)) < 0.001 else write_number(value, 3)


def list_contrasts(run: RunFolder) -> Table | None:
    """Return the entries of the contrasts."""
    rows = tabulate_contrasts(run)
    if not rows:
        return None
    return Table(
        "Contrasts",
        (
            ("source", "what differs between trials"),
            ("taken away", "the route that the smaller account lacks; the other sources keep both routes"),
            ("gain", "held-out difference, corrected for the number of parameters, nats a trial"),
            ("95 % interval", "of the gain, over trials, nats a trial"),
            ("likelihood ratio", "of the two accounts on all trials, with its degrees of freedom"),
            ("p", "of that ratio, adjusted over all rows of this table (Holm)"),
        ),
        rows,
        n_words=2,
    )


def list_dims(run: RunFolder) -> Table | None:
    """Return the verdict of each source by the number of latent dimensions."""
    chosen = run.part("chosen").get("latent_dim")
    rows = []
    for contrast in run.rows("contrasts"):
        verdicts = {int(d): str(v) for d, v in (contrast.get("at_dims") or {}).items()}
        if chosen is None or not verdicts:
            continue
        ends = {int(d): value for d, value in (contrast.get("ends_nats") or {}).items()}
        mode = contrast.get("carrying_mode")
        # The mode is that of the fit with one dimension more, where there is one.
        of_mode = chosen + 1 if chosen + 1 in verdicts else chosen
        for dim in sorted({chosen, *verdicts}):
            rows.append(
                [
                    name_source(contrast),
                    f"{contrast.get('verdict')} (the verdict)" if dim == chosen else verdicts[dim],
                    str(dim),
                    "not given" if ends.get(dim) is None else write_number(ends[dim], 1),
                    ("no decay" if mode is None else write_short(mode)) if dim == of_mode else "",
                ]
            )
    if not rows:
        return None
    return Table(
        "Verdicts by number of latent dimensions",
        (
            ("source", "what differs between trials"),
            ("found", "as by the rule of the verdict, at this number of latent dimensions alone"),
            ("D", "number of latent dimensions; one fewer and one more are fitted to all trials"),
            (
                "sustained less initial",
                "log-likelihood of the account with the sustained push alone less that with the initial push "
                "alone, on all trials, nats; above 0 the push lasts, below 0 it does not",
            ),
            (
                "carrying mode",
                "time constant, s, of the mode that holds the push at the end of a median trial where the "
                "account has the initial push alone; where accounts tie and it outlasts the trial, the "
                "verdict says so",
            ),
        ),
        rows,
        n_words=2,
    )


def list_sizes(run: RunFolder) -> Table | None:
    """Return the sizes that were weighed, with their held-out deficits."""
    candidates = [c for c in run.part("chosen").get("candidates") or [] if isinstance(c, Mapping)]
    if not candidates:
        return None
    keys = ("model", "latent_dim", "drift")
    chosen = [run.part("chosen").get(key) for key in keys]
    rows = [
        [
            str(c.get("model")),
            "chosen" if [c.get(key) for key in keys] == chosen else "",
            write_plain(c.get("drift")),
            str(c.get("latent_dim")),
            write_number(c.get("deficit_nats_per_trial"), 3),
            write_number(c.get("deficit_se"), 3),
        ]
        for c in candidates
    ]
    return Table(
        "Size of the model",
        (
            ("model", "the model file"),
            ("choice", "the smallest size whose deficit is under its standard error and under min_gain"),
            ("drift", "whether each unit's rate may drift slowly over the session"),
            ("D", "number of latent dimensions"),
            ("deficit", "to the best size, paired over held-out trials, nats a trial"),
            ("SE", "standard error of the deficit, nats a trial"),
        ),
        rows,
        n_words=3,
        folded=len(rows) > N_OPEN,
    )


def list_decode(run: RunFolder) -> Table | None:
    """Return the decode rows; those of the late variant only where it leaves trials out."""
    rows = [
        [
            str(r.get("features")),
            str(r.get("variant", "all")),
            write_short(r.get("cutoff_s")),
            f"{write_plain(r.get('n_trials'))} of {write_plain(r.get('running'))}",
            write_number(r.get("r2_within_condition"), 3),
            write_interval(r.get("ci95"), 3),
            write_number(r.get("r2_window"), 3),
            write_interval(r.get("null95"), 3),
            write_p_value(r.get("p")),
            "not given" if r.get("null_draws") is None else str(r["null_draws"]),
        ]
        for r in distinct_rows(run)
    ]
    if not rows:
        return None
    return Table(
        "Prediction of the produced interval",
        (
            ("features", "a push, both, the state at the cutoff, or one raw count a unit (the yardstick)"),
            ("trials", "all: still running at the cutoff; late: respond 0.15 s or more after it"),
            ("cutoff", "spikes up to this time after the set cue are used, s"),
            ("scored", "trials scored, of those with a response that still run at the cutoff"),
            ("R²", "of the standardised log interval within conditions, over all held-out trials"),
            ("95 % interval", "of R², bootstrap over blocks of trials"),
            ("R² tested", "the same over the middle 60 % of the trials: what p sets against the null"),
            ("null, 95 %", "middle 95 % of that R² under linear shifts of the responses"),
            ("p", "one-sided, (1 + draws at least as large) / (1 + draws); not adjusted over rows"),
            ("draws", "number of distinct shifts"),
        ),
        rows,
        n_words=2,
        folded=len(rows) > N_OPEN,
    )


_BEHAVIOUR = (
    ("context", "context", "the rule in force", None),
    ("sample_s", "sample", "sample interval, s", "short"),
    ("n", "trials", "number of trials with a response", "count"),
    ("mean_s", "mean", "mean produced interval, s", "number"),
    ("sd_s", "SD", "standard deviation of the produced interval, s", "number"),
    ("target_s", "target", "the interval asked for, s", "number"),
    ("bias_s", "bias", "mean produced interval less the target, s", "number"),
    ("cv", "CV", "coefficient of variation, SD over mean", "number"),
)


def list_behaviour(run: RunFolder) -> Table | None:
    """Return mean and SD of the produced interval by condition."""
    conditions = [c for c in run.part("behaviour").get("conditions") or [] if isinstance(c, Mapping)]
    if not conditions:
        return None
    used = [column for column in _BEHAVIOUR if any(c.get(column[0]) is not None for c in conditions)]
    write = {
        "short": write_short,
        "number": lambda v: write_number(v, 3),
        "count": lambda v: "0" if v is None else str(v),
        None: lambda v: "none" if v is None else str(v),
    }
    rows = [[write[kind](c.get(key)) for key, _, _, kind in used] for c in conditions]
    return Table(
        "Produced intervals by condition",
        tuple((head, meaning) for _, head, meaning, _ in used),
        rows,
        n_words=int(used[0][0] == "context"),
        folded=len(rows) > N_OPEN,
    )


def list_relations(run: RunFolder) -> Table | None:
    """Return the within-condition correlation of each push with the produced interval, for all latents."""
    within = relate_within(run)
    if within is None:
        return None
    latents = within.index.get_level_values("latent").unique()
    rows = [
        [push, *(write_number(within.loc[(push, k), "r"]) for k in latents), str(within["n"].iloc[0])]
        for push in ("initial", "sustained")
    ]
    return Table(
        "Correlation of each push with the produced interval, within conditions",
        (
            ("push", "initial or sustained"),
            *((f"latent {k}", "correlation r over single trials" if k == 1 else "") for k in latents),
            ("trials", "number of trials with a response"),
        ),
        rows,
    )


def list_left_out(run: RunFolder) -> Table | None:
    """Return the units and trials that were left out, with the reason."""
    rows = []
    for kind in ("unit", "trial"):
        left_out = run.part("session").get(f"{kind}s_left_out")
        if isinstance(left_out, Mapping):
            rows += [[kind, str(label), str(reason)] for label, reason in left_out.items()]
    if not rows:
        return None
    return Table(
        "Units and trials left out",
        (("what", "unit or trial"), ("label", "as in the session"), ("reason", "why it was left out")),
        rows,
        n_words=3,
        folded=len(rows) > N_OPEN,
    )


def list_settings(run: RunFolder) -> Table:
    """Return settings, versions and seed."""
    rows = [["seed", write_plain(run.result.get("seed"))]]
    rows += [row for row in flatten("", run.part("settings")) if row[0] != "seed"]
    rows.append(["version of portfire", write_plain(run.result.get("portfire"))])
    rows += [
        [f"version of {name}", write_plain(v)]
        for name, v in run.part("versions").items()
        if name != "portfire"
    ]
    rows.append(["digest of the session", write_plain(run.part("session").get("digest"))])
    columns = (("setting", "as in the job file, section and key"), ("value", "a number, a word or a list"))
    return Table("As the run resolved them", columns, rows, n_words=2)


def flatten(prefix: str, value: Any) -> list[list[str]]:
    """Return nested settings as rows of dotted key and value."""
    if isinstance(value, Mapping) and value:
        return [
            row
            for key, inner in value.items()
            for row in flatten(f"{prefix}.{key}" if prefix else str(key), inner)
        ]
    return [[prefix, write_plain(value)]]


def write_plain(value: Any) -> str:
    """Return a setting as text."""
    if value is None:
        return "not given"
    if value in ({}, []):
        return "none"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, int | float):
        return f"{value:.10g}".replace("-", MINUS) if isinstance(value, float) else str(value)
    if isinstance(value, list) and all(isinstance(v, str | int | float) for v in value):
        return ", ".join(write_plain(v) for v in value) or "none"
    return value if isinstance(value, str) else json.dumps(value, ensure_ascii=False)
