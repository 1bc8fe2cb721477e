"""Table: tests of the contrasts that lean on the model less than the likelihood ratio does."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from portfire.report._accounts import shorten_account
from portfire.report._folder import RunFolder
from portfire.report._tables import Table
from portfire.report._words import name_source, write_number, write_p_value

_ENTRIES = {"initial_unique": "initial", "sustained_unique": "sustained", "total": "both"}


def list_tests(run: RunFolder) -> Table | None:
    """Return p of every entry by each test, unadjusted; None where the result holds none."""
    rows = []
    for contrast in run.rows("contrasts"):
        tests = contrast.get("tests")
        if not isinstance(tests, Mapping):
            continue
        for entry, words in _ENTRIES.items():
            mine = tests.get(entry) or {}
            ratio = (contrast.get("lr") or {}).get(entry) or {}
            rows.append(
                [
                    name_source(contrast),
                    words,
                    write_p_value(ratio.get("p_chi2", ratio.get("p_raw"))),
                    _drawn(mine.get("bootstrap")),
                    _drawn(mine.get("blocks")),
                    _drawn(mine.get("labels")),
                    _drawn(mine.get("labels_matched")),
                ]
            )
    if not rows:
        return None
    return Table(
        "Tests that lean less on the model: p before adjustment",
        (
            ("source", "what differs between trials"),
            ("taken away", "the route that the smaller account lacks"),
            ("χ²", "of the likelihood ratio, which trusts the model and many trials"),
            ("bootstrap", "score statistic of sessions drawn from the smaller account, ± Monte-Carlo error"),
            ("blocks", "signs of the scores of blocks of trials turned at random: holds where counts are "
             "overdispersed or neighbouring trials depend on each other"),
            ("labels", "labels dealt anew as the task may have dealt them, from an account without them: "
             "holds whatever the dynamics are"),
            ("matched", "the same among trials of like produced interval (contexts only)"),
        ),
        rows,
        n_words=2,
    )  # fmt: skip


def _drawn(test: Any) -> str:
    if not isinstance(test, Mapping) or test.get("p") is None:
        return ""
    error = test.get("se")
    return write_p_value(test["p"]) + (f" ± {error:.1g}" if error and error >= 5e-4 else "")


def list_rivals(run: RunFolder) -> Table | None:
    """Return the rivals of the pushes; None where the result holds none."""
    verdicts = {str(c.get("source")): str(c.get("verdict")) for c in run.rows("contrasts")}
    rows = []
    for rival in run.rows("rivals"):
        source = str(rival.get("source"))
        verdict = verdicts.get(source, "")
        against = verdict if verdict in (rival.get("ahead_nats") or {}) else "both"
        ahead = (rival.get("ahead_nats") or {}).get(against)
        rows.append(
            [
                source,
                str(rival.get("rival")),
                "beats the verdict" if verdict in (rival.get("beats") or []) else "",
                against,
                "not given" if ahead is None else write_number(ahead, 1),
                "" if rival.get("beside_nats") is None else write_number(rival["beside_nats"], 1),
                "" if rival.get("p") is None else write_p_value(rival["p"]),
            ]
        )
    if not rows:
        return None
    return Table(
        "Rivals of additive pushes",
        (
            ("source", "what differs between trials"),
            ("rival", "another way in which it may differ"),
            ("outcome", "whether it describes the data better than the verdict's account, by 2 nats or more"),
            ("against", "the account of the source that it is set against: the verdict's, or both"),
            ("ahead", "log-likelihood of the rival in the place of the pushes, less that of this account, "
             "each less its number of parameters, nats on all trials"),
            ("beside", "what the rival adds to the full account, nats on all trials"),
            ("p", "of that addition, χ², not adjusted"),
        ),
        rows,
        n_words=4,
    )  # fmt: skip


def list_checks(run: RunFolder) -> Table | None:
    """Return the predictive checks; None where the result holds none."""
    rows = [
        [
            str(check.get("check")),
            "fails" if check.get("failed") else "passes",
            write_number(check.get("recorded"), 3),
            write_number(check.get("drawn"), 3),
            write_number(check.get("difference"), 3),
            write_number(check.get("matters"), 2),
            write_p_value(check.get("p")),
        ]
        for check in run.rows("checks")
    ]
    if not rows:
        return None
    return Table(
        "Predictive checks: the recorded session among sessions drawn from the fit",
        (
            ("check", "what is compared, in each condition"),
            ("outcome", "fails where p is at most the level and the difference exceeds what matters; "
             "verdicts are then undetermined"),
            ("recorded", "of the recorded session: spikes a bin, Fano factor, or correlation"),
            ("drawn", "the same, mean over drawn sessions"),
            ("difference", "largest of the check: relative to rates, of log Fano factors, of correlations"),
            ("matters", "what the difference must exceed"),
            ("p", "share of drawn sessions as unlike the others, adjusted over the checks (Holm)"),
        ),
        rows,
        n_words=2,
    )  # fmt: skip


def list_unseen(run: RunFolder) -> Table | None:
    """Return the scores of conditions that a fit never saw; None where the result holds none."""
    rows = [
        [
            shorten_account(row.get("account", "")),
            write_number(row.get("loglik_per_trial")),
            write_number(row.get("less_full"), 3),
            "not given" if row.get("less_full_se") is None else write_number(row["less_full_se"], 3),
            str(row.get("conditions")),
        ]
        for row in run.rows("unseen_conditions")
    ]
    if not rows:
        return None
    return Table(
        "Conditions predicted from the others",
        (
            ("account", "the route of every source"),
            ("log-likelihood", "mean over the trials of conditions that the fit never saw, nats a trial"),
            ("less full", "that less the full account's, mean over conditions, nats a trial"),
            ("SE", "its standard error over conditions"),
            ("conditions", "number of conditions left out in turn"),
        ),
        rows,
    )


def state_yardsticks(run: RunFolder) -> str | None:
    """Return what the mean rate of the condition and unseen units reach; None where not in the result."""
    found = run.part("yardsticks")
    if not found:
        return None
    rate, units = (found.get(f"{key}_bits_per_spike") for key in ("condition_rate", "unseen_units"))
    return (
        "Yardsticks on held-out trials, in bits a spike above a constant rate: the trial-averaged rate of "
        f"the condition reaches {write_number(rate, 3)}; units predicted from the other units "
        f"({found.get('unseen_units_groups')} groups in turn) reach {write_number(units, 3)}."
    )
