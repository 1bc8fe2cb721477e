"""Figure: how well the single-trial state predicts the produced interval, against the cutoff."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.ticker import MaxNLocator

from portfire.report._decode_words import explain_no_decode
from portfire.report._folder import RunFolder
from portfire.report._style import (
    COLOURS,
    FAINT,
    SOFT,
    Absent,
    Drawn,
    Look,
    add_zero_line,
    make_figure,
    shorten,
    write_svg,
)
from portfire.report._words import begin_sentence, join_words, write_number, write_short

# Below this R² a prediction is worse than useless, and one such mark would flatten all the others.
LOWEST = -1.0
Placed = tuple[Mapping[str, Any], float]
KEY, TITLE = "decode", "R² within condition against the cutoff"
FEATURE_LOOKS = {
    "initial": Look(COLOURS[0], "o", "-"),
    "sustained": Look(COLOURS[1], "s", "-"),
    "initial+sustained": Look(COLOURS[5], "D", "-"),
    "state": Look(COLOURS[2], "^", "-"),
    "counts": Look(SOFT, "X", "-"),
}
FEATURE_WORDS = {"counts": "counts (raw, the yardstick)", "state": "state at the cutoff"}
VARIANT_WORDS = {
    "all": "trials still running at the cutoff",
    "late": "trials that respond 0.15 s or more after the cutoff",
}


def draw_decode(run: RunFolder) -> Drawn | Absent:
    """Draw R² within condition by cutoff and feature set, and below it what is tested, with its null."""
    rows = [r for r in distinct_rows(run) if r.get("r2_within_condition") is not None]
    if not rows:
        return Absent(KEY, TITLE, explain_no_decode(run))
    variants = sorted({str(r.get("variant", "all")) for r in rows})
    features = _order_features(rows)
    cutoffs = sorted({float(r["cutoff_s"]) for r in rows})
    tested = any(r.get("r2_window") is not None for r in rows)
    per = (1.7, 1.25) if tested else (1.7,)
    figure = make_figure(0.9 + len(variants) * (1.15 * sum(per) + 0.35))
    panels = figure.subplots(
        len(per) * len(variants), 1, squeeze=False, gridspec_kw={"height_ratios": per * len(variants)}
    )[:, 0].reshape(len(variants), len(per))
    n_all = run.part("session").get("trials_used")
    for pair, variant in zip(panels, variants, strict=True):
        here = [r for r in rows if str(r.get("variant", "all")) == variant]
        _draw_estimates(pair[0], here, features, cutoffs, run.level)
        pair[0].set_title(begin_sentence(VARIANT_WORDS.get(variant, shorten(variant))))
        pair[0].set_ylabel("R², all held-out\ntrials (no unit)")
        if tested:
            _draw_tests(pair[1], here, features, cutoffs, run.level)
            pair[1].set_ylabel("R² tested,\nmiddle 60 %")
            pair[0].set_xticks([])
        ticks = [_label_cutoff(here, c, len(cutoffs), n_all) for c in cutoffs]
        pair[-1].set_xticks(range(len(cutoffs)), ticks)
    panels[-1, -1].set_xlabel("cutoff (s after the set cue), with the number of these trials")
    figure.align_ylabels(panels.ravel())
    _add_legend(figure, features, run.level)
    return _describe_figure(run, figure, rows, features, cutoffs, tested)


def distinct_rows(run: RunFolder) -> list[Mapping[str, Any]]:
    """Return the decode rows without those of the late variant where it leaves no trial out."""
    rows = run.rows("decode")
    return [r for r in rows if r.get("variant", "all") != "late"] if _late_is_all(rows) else rows


def _late_is_all(rows: Sequence[Mapping[str, Any]]) -> bool:
    late = [r for r in rows if r.get("variant") == "late"]
    return bool(late) and all(r.get("n_used") is not None and r["n_used"] == r.get("running") for r in late)


def _describe_figure(
    run: RunFolder,
    figure: Figure,
    rows: Sequence[Mapping[str, Any]],
    features: list[str],
    cutoffs: list[float],
    tested: bool,
) -> Drawn:
    alt = _describe(rows, features, cutoffs)
    caption = (
        "Upper: R² of log produced interval, standardised within conditions, over all held-out trials; lines "
        "are 95 % intervals (bootstrap over blocks of trials)."
    )
    if tested:
        caption += (
            " Lower: the test. Slow drift that recording and behaviour share lifts R² itself, also where "
            "there is nothing to predict; so R² is set not against zero but against the R² from responses "
            "that are shifted by whole trials against the recording, which keeps the drift. Shifts need "
            "room, so R², null and p rest here on the middle 60 % of the trials; grey bars hold the middle "
            "95 % of the null."
        )
    caption += (
        f" A filled mark has a one-sided p at or below {run.level:g}, not adjusted for the number of marks. "
        "Only spikes up to the cutoff are used."
    )
    if any(r[key] < LOWEST for r in rows for key in ("r2_within_condition", "r2_window") if r.get(key)):
        caption += (
            f" Marks that lie below {write_number(LOWEST, 0)} stand at the lower edge with their value, and "
            "lines and bars end there."
        )
    if _late_is_all(run.rows("decode")):
        caption += (
            " At every cutoff all of these trials respond 0.15 s or more after it, so the variant for late "
            "responses is the same and is not drawn again."
        )
    return Drawn(KEY, TITLE, write_svg(figure, KEY, TITLE, alt), alt, caption)


def _add_legend(figure: Figure, features: list[str], level: float) -> None:
    handles: list[Artist] = [
        Line2D(
            [], [], color=FEATURE_LOOKS[f].colour, marker=FEATURE_LOOKS[f].marker, linewidth=1.6, markersize=7
        )
        for f in features
    ]
    labels = [FEATURE_WORDS.get(f, f) for f in features]
    handles.append(Patch(color=FAINT))
    labels.append("null, 95 %")
    for words, face in ((f"p at or below {level:g}", SOFT), (f"p above {level:g}", "white")):
        handles.append(
            Line2D([], [], color=SOFT, marker="o", linestyle="none", markersize=7, markerfacecolor=face)
        )
        labels.append(words)
    figure.legend(handles, labels, loc="outside upper center", ncols=min(4, len(labels)))


def _order_features(rows: Sequence[Mapping[str, Any]]) -> list[str]:
    present = {str(r["features"]) for r in rows}
    return [f for f in FEATURE_LOOKS if f in present]


def _place(rows: Sequence[Mapping[str, Any]], features: list[str], cutoffs: list[float]) -> list[Placed]:
    step = 0.84 / len(features)
    return [
        (row, cutoffs.index(float(row["cutoff_s"])) + step * (k - (len(features) - 1) / 2))
        for k, feature in enumerate(features)
        for row in rows
        if row["features"] == feature
    ]


def _draw_estimates(
    axes: Axes, rows: Sequence[Mapping[str, Any]], features: list[str], cutoffs: list[float], level: float
) -> None:
    for row, x in _place(rows, features, cutoffs):
        bounds = [b for b in row.get("ci95") or [] if b is not None]
        if len(bounds) == 2:
            colour = FEATURE_LOOKS[row["features"]].colour
            axes.plot([x, x], bounds, color=colour, linewidth=1.8, solid_capstyle="butt", zorder=2)
        _draw_mark(axes, x, row["r2_within_condition"], row, level, len(features) * len(cutoffs))
    _finish(axes, cutoffs)


def _draw_tests(
    axes: Axes, rows: Sequence[Mapping[str, Any]], features: list[str], cutoffs: list[float], level: float
) -> None:
    width = 0.84 / len(features) * 0.84
    for row, x in _place(rows, features, cutoffs):
        null = [b for b in row.get("null95") or [] if b is not None]
        if len(null) == 2:
            axes.bar(x, null[1] - null[0], width, null[0], color=FAINT, linewidth=0, zorder=1)
        if row.get("r2_window") is not None:
            _draw_mark(axes, x, row["r2_window"], row, level, len(features) * len(cutoffs))
    _finish(axes, cutoffs)


def _draw_mark(axes: Axes, x: float, y: float, row: Mapping[str, Any], level: float, n_marks: int) -> None:
    look = FEATURE_LOOKS[row["features"]]
    passed = row.get("p") is not None and row["p"] <= level
    if y < LOWEST:
        axes.annotate(
            write_number(y, 1), (x, LOWEST), (0, 7), textcoords="offset points", ha="center", fontsize=7.5
        )
    axes.plot(
        [x], [max(y, LOWEST)], color=look.colour, marker=look.marker,
        markersize=float(np.clip(260 / n_marks, 4, 7.5)), markerfacecolor=look.colour if passed else "white",
        markeredgewidth=1.4, zorder=3,
    )  # fmt: skip


def _finish(axes: Axes, cutoffs: list[float]) -> None:
    add_zero_line(axes, vertical=False)
    axes.tick_params(axis="x", length=0)
    axes.set_xlim(-0.5, len(cutoffs) - 0.5)
    axes.yaxis.set_major_locator(MaxNLocator(4))
    axes.margins(y=0.1)
    if axes.get_ylim()[0] < LOWEST:
        top = max(axes.dataLim.y1, 0.0)
        margin = 0.1 * (top - LOWEST)
        axes.set_ylim(LOWEST - margin, top + margin)
    for edge in np.arange(len(cutoffs) - 1) + 0.5:
        axes.axvline(edge, color=FAINT, linewidth=0.7, zorder=0)


def count_left(rows: Sequence[Mapping[str, Any]], cutoff: float) -> int | None:
    """Return the trials of these rows' variant that are left at a cutoff."""
    for row in rows:
        if float(row["cutoff_s"]) == cutoff:
            known = [row[key] for key in ("n_used", "running", "n_trials") if row.get(key) is not None]
            return int(known[0]) if known else None
    return None


def _label_cutoff(rows: Sequence[Mapping[str, Any]], cutoff: float, n_cutoffs: int, n_all: int | None) -> str:
    left = count_left(rows, cutoff)
    if left is None:
        return f"{cutoff:g}"
    of_all = f" of {n_all}" if n_all is not None and n_cutoffs <= 6 else ""
    return f"{cutoff:g}\n{left}{of_all}"


def _describe(rows: Sequence[Mapping[str, Any]], features: list[str], cutoffs: list[float]) -> str:
    everyone = [r for r in rows if r.get("variant", "all") == "all"] or list(rows)
    found: list[str] = []
    tested: list[str] = []
    for feature in features:
        at = {float(r["cutoff_s"]): r for r in everyone if r["features"] == feature}
        for key, parts in (("r2_within_condition", found), ("r2_window", tested)):
            known = [(c, at[c][key]) for c in cutoffs if c in at and at[c].get(key) is not None]
            if known:
                values = [f"{write_number(value)} at {write_short(c)} s" for c, value in known]
                parts.append(f"{feature} {join_words(values)}")
    running = [count_left(everyone, c) for c in (cutoffs[0], cutoffs[-1])]
    nulls = [b for r in everyone for b in r.get("null95") or [] if b is not None]
    test = f" As tested, over the middle 60 % of the trials: {'; '.join(tested)}." if tested else ""
    if nulls:
        test += f" Null bands lie within {write_number(min(nulls))} and {write_number(max(nulls))}."
    return (
        f"R² within condition by cutoff, over all held-out trials: {'; '.join(found)}.{test} Trials still "
        f"running: {running[0]} at {write_short(cutoffs[0])} s, {running[1]} at {write_short(cutoffs[-1])} s."
    )
