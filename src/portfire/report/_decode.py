"""Figure: how well the single-trial state predicts the produced interval, against the cutoff."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

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
from portfire.report._words import explain_no_decode, join_words, write_number, write_short

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
    """Draw R² within condition by cutoff and feature set, with null bands, and the trials still running."""
    rows = [r for r in run.rows("decode") if r.get("r2_within_condition") is not None]
    if not rows:
        return Absent(KEY, TITLE, explain_no_decode(run))
    variants = sorted({str(r.get("variant", "all")) for r in rows})
    features = _order_features(rows)
    cutoffs = sorted({float(r["cutoff_s"]) for r in rows})
    figure = make_figure(0.7 + 3.0 * len(variants))
    panels = figure.subplots(len(variants), 1, squeeze=False, sharey=True)[:, 0]
    for axes, variant in zip(panels, variants, strict=True):
        here = [r for r in rows if str(r.get("variant", "all")) == variant]
        _draw_variant(axes, here, features, cutoffs, run.level, run.part("session").get("trials_used"))
        axes.set_title(VARIANT_WORDS.get(variant, shorten(variant)))
        axes.set_ylabel("R² within condition\n(no unit)")
    panels[-1].set_xlabel("cutoff (s after the set cue), with the number of these trials")
    handles: list[Artist] = [
        Line2D(
            [], [], color=FEATURE_LOOKS[f].colour, marker=FEATURE_LOOKS[f].marker, linewidth=1.6, markersize=7
        )
        for f in features
    ]
    labels = [FEATURE_WORDS.get(f, f) for f in features]
    handles.append(Patch(color=FAINT))
    labels.append("null, 95 %")
    figure.legend(handles, labels, loc="outside upper center", ncols=3)
    alt = _describe(rows, features, cutoffs)
    caption = (
        "R² of log produced interval, standardised within conditions, on held-out trials; lines are 95 % "
        "intervals (bootstrap over blocks of trials). Grey bars hold the middle 95 % of the null (linear "
        "shifts of the responses against the recording). A filled mark has a one-sided p at or below "
        f"{run.level:g}, not adjusted for the number of marks. Only spikes up to the cutoff are used."
    )
    return Drawn(KEY, TITLE, write_svg(figure, KEY, TITLE, alt), alt, caption)


def _order_features(rows: Sequence[Mapping[str, Any]]) -> list[str]:
    present = {str(r["features"]) for r in rows}
    return [f for f in FEATURE_LOOKS if f in present]


def _draw_variant(
    axes: Axes,
    rows: Sequence[Mapping[str, Any]],
    features: list[str],
    cutoffs: list[float],
    level: float,
    n_all: int | None,
) -> None:
    step = 0.8 / len(features)
    for k, feature in enumerate(features):
        look = FEATURE_LOOKS[feature]
        for row in rows:
            if row["features"] != feature:
                continue
            x = cutoffs.index(float(row["cutoff_s"])) + step * (k - (len(features) - 1) / 2)
            null = [b for b in row.get("null95") or [] if b is not None]
            if len(null) == 2:
                axes.bar(x, null[1] - null[0], step * 0.8, null[0], color=FAINT, linewidth=0, zorder=1)
            bounds = [b for b in row.get("ci95") or [] if b is not None]
            if len(bounds) == 2:
                axes.plot([x, x], bounds, color=look.colour, linewidth=1.8, solid_capstyle="butt", zorder=2)
            passed = row.get("p") is not None and row["p"] <= level
            axes.plot(
                [x], [row["r2_within_condition"]], color=look.colour, marker=look.marker, markersize=7.5,
                markerfacecolor=look.colour if passed else "white", markeredgewidth=1.4, zorder=3,
            )  # fmt: skip
    add_zero_line(axes, vertical=False)
    axes.set_xticks(range(len(cutoffs)), [_label_cutoff(rows, c, len(cutoffs), n_all) for c in cutoffs])
    axes.tick_params(axis="x", length=0)
    axes.set_xlim(-0.5, len(cutoffs) - 0.5)
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
    parts = []
    for feature in features:
        at = {float(r["cutoff_s"]): r for r in everyone if r["features"] == feature}
        values = [
            f"{write_number(at[c]['r2_within_condition'])} at {write_short(c)} s" for c in cutoffs if c in at
        ]
        parts.append(f"{feature} {join_words(values)}")
    running = [count_left(everyone, c) for c in (cutoffs[0], cutoffs[-1])]
    nulls = [b for r in everyone for b in r.get("null95") or [] if b is not None]
    band = (
        f" Null bands lie within {write_number(min(nulls))} and {write_number(max(nulls))}." if nulls else ""
    )
    return (
        f"R² within condition by cutoff: {'; '.join(parts)}.{band} Trials still running: {running[0]} at "
        f"{write_short(cutoffs[0])} s, {running[1]} at {write_short(cutoffs[-1])} s."
    )
