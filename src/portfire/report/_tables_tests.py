"""Table: tests of the contrasts that lean on the model less than the likelihood ratio does."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from portfire.report._folder import RunFolder
from portfire.report._tables import Table
from portfire.report._words import name_source, write_p_value

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
