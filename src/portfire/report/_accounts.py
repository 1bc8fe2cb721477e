"""Figures: the contrasts, and held-out scores by account."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter, SymmetricalLogLocator

from portfire.report._folder import RunFolder
from portfire.report._style import (
    COLOURS,
    FAINT,
    INK,
    SOFT,
    WIDTH,
    Absent,
    Drawn,
    Look,
    add_zero_line,
    assign_looks,
    count_columns,
    make_figure,
    shorten,
    write_svg,
)
from portfire.report._words import (
    MINUS,
    join_words,
    name_source,
    pick_digits,
    write_interval,
    write_number,
    write_p_value,
)

ENTRY_LOOKS = {
    "total": ("total (both routes)", Look(INK, "D", "-")),
    "initial_unique": ("initial, unique", Look(COLOURS[0], "o", "-")),
    "sustained_unique": ("sustained, unique", Look(COLOURS[1], "s", "-")),
}


def draw_contrasts(run: RunFolder) -> Drawn | Absent:
    """Draw what held-out trials lose without a route, with 95 % intervals, and the line of `min_gain`."""
    key, title = "contrasts", "What held-out trials lose without a route"
    contrasts = run.rows("contrasts")
    if not contrasts:
        why = "the job lists no sources" if run.setting("compare", "sources", None) == [] else ""
        return Absent(key, title, why or "the result holds no contrasts")
    figure = make_figure(1.3 + 0.95 * len(contrasts))
    axes = figure.add_subplot()
    extent = [run.min_gain]
    alts = []
    for row, contrast in enumerate(contrasts):
        if row % 2:
            axes.axhspan(row - 0.5, row + 0.5, color="#f4f4f4", linewidth=0, zorder=0)
        parts = []
        for offset, (name, (words, look)) in zip((-0.26, 0.0, 0.26), ENTRY_LOOKS.items(), strict=True):
            entry = contrast.get(name)
            if not isinstance(entry, Mapping) or entry.get("nats_per_trial") is None:
                continue
            extent += _draw_entry(axes, entry, row + offset, look, run.level)
            digits = pick_digits(entry["nats_per_trial"], *(entry.get("ci95") or []))
            value = write_number(entry["nats_per_trial"], digits)
            parts.append(f"{words} {value} ({write_interval(entry.get('ci95'), digits)})")
        source = shorten(name_source(contrast))
        alts.append(f"{source}: {'; '.join(parts)}; verdict {contrast.get('verdict')}")
    names = [f"{shorten(name_source(c))}\nverdict: {shorten(c.get('verdict'))}" for c in contrasts]
    axes.set_yticks(range(len(contrasts)), names)
    axes.tick_params(axis="y", length=0)
    axes.set_ylim(len(contrasts) - 0.5, -0.5)
    scale = _set_gain_scale(axes, extent, run.min_gain)
    axes.axvline(run.min_gain, color=INK, linestyle=(0, (4, 3)), linewidth=1, zorder=0.6)
    add_zero_line(axes, vertical=True)
    axes.set_xlabel(f"gain on held-out trials (nats a trial{scale})")
    handles = [
        Line2D([], [], color=look.colour, marker=look.marker, linewidth=1.6, label=words)
        for words, look in ENTRY_LOOKS.values()
    ]
    handles.append(
        Line2D([], [], color=INK, linestyle=(0, (4, 3)), linewidth=1, label=f"min_gain {run.min_gain:g}")
    )
    figure.legend(handles=handles, loc="outside upper center", ncols=4)
    alt = (
        f"Gains in nats a trial with 95 % intervals. {'. '.join(alts)}. "
        f"The line of min_gain is at {run.min_gain:g}."
    )
    caption = (
        "Unique is what held-out trials lose when one route is taken from the full account, total when "
        "both are; lines are 95 % intervals (where none shows it is narrower than its mark). A filled "
        f"mark has an adjusted p (Holm over all marks) at or below {run.level:g}. The dashed line is "
        f"the smallest gain worth having, {run.min_gain:g} nats a trial."
    )
    return Drawn(key, title, write_svg(figure, key, title, alt), alt, caption)


def _draw_entry(axes: Axes, entry: Mapping[str, Any], y: float, look: Look, level: float) -> list[float]:
    value = float(entry["nats_per_trial"])
    bounds = [float(b) for b in entry.get("ci95") or [] if b is not None]
    if len(bounds) == 2:
        axes.plot(bounds, [y, y], color=look.colour, linewidth=1.8, solid_capstyle="butt", zorder=2)
    passed = entry.get("p") is not None and entry["p"] <= level
    axes.plot(
        [value], [y], marker=look.marker, markersize=7.5, color=look.colour, markeredgewidth=1.5,
        markerfacecolor=look.colour if passed else "white", zorder=3,
    )  # fmt: skip
    return [value, *bounds]


def _set_gain_scale(axes: Axes, extent: list[float], min_gain: float) -> str:
    low, high = min([0.0, *extent]), max([0.0, *extent])
    if max(high, -low) <= 30 * min_gain:
        pad = 0.06 * (high - low)
        axes.set_xlim(low - pad, high + pad)
        return ""
    threshold = 2 * min_gain
    axes.set_xscale("symlog", linthresh=threshold, linscale=0.5)
    axes.xaxis.set_major_locator(SymmetricalLogLocator(base=10, linthresh=threshold, subs=[1, 3]))
    axes.xaxis.set_major_formatter(FuncFormatter(lambda v, _: f"{v:g}".replace("-", MINUS)))
    margin = 0.4 * threshold
    axes.set_xlim(min(low * 1.6, -margin), max(high * 1.6, margin))
    return f"; linear within ±{threshold:g}, logarithmic beyond"


def compare_scores(run: RunFolder) -> pd.DataFrame | None:
    """Return each account's held-out difference to the full account, paired over trials.

    Returns
    -------
    DataFrame or None
        One row an account and model: `account`, `model`, `difference` (nats a trial), `se` (its standard
        error over trials), `n` (trials that both have). None where there are no scores.
    """
    if run.scores is None or run.scores.empty:
        return None
    scores = run.scores.assign(trial=run.scores["trial"].astype(str))
    wide = scores.pivot_table(index="trial", columns=["model", "account"], values="loglik", aggfunc="mean")
    reference = find_reference(run, list(wide.columns))
    rows = []
    for model, account in wide.columns:
        paired = (wide[(model, account)] - wide[reference]).dropna()
        n = len(paired)
        se = float(paired.std(ddof=1) / np.sqrt(n)) if n > 1 else float("nan")
        rows.append(
            {"account": account, "model": model, "difference": float(paired.mean()), "se": se, "n": n,
             "is_reference": (model, account) == reference}
        )  # fmt: skip
    table = pd.DataFrame(rows)
    return table.sort_values("difference", ascending=False, kind="stable").reset_index(drop=True)


def find_reference(run: RunFolder, columns: list[tuple[str, str]]) -> tuple[str, str]:
    """Return the (model, account) that the others are compared with: the full account of the chosen model."""
    chosen = run.part("chosen").get("model")

    def rank(column: tuple[str, str]) -> tuple[bool, int]:
        model, account = column
        return model == chosen, sum(route.endswith("=both") for route in account.split(","))

    return max(columns, key=rank)


def shorten_account(account: str) -> str:
    """Return an account without the sources that are not there, with a space for each comma."""
    return " · ".join(part.replace("=", " ") for part in str(account).split(",")) or "no source"


def draw_scores(run: RunFolder) -> Drawn | Absent:
    """Draw the held-out score of each account as its paired difference to the full account."""
    key, title = "scores", "Held-out scores by account"
    table = compare_scores(run)
    if table is None:
        return Absent(key, title, "the run folder holds no held-out scores (scores.parquet)")
    if len(table) == 1:
        return Absent(key, title, "one account only was scored, so there is nothing to compare it with")
    shown = table.head(24)
    models = sorted(table["model"].astype(str).unique())
    looks = assign_looks(models)
    figure = make_figure(1.25 + 0.31 * len(shown), WIDTH)
    axes = figure.add_subplot()
    for row, entry in enumerate(shown.itertuples()):
        look = looks[str(entry.model)]
        axes.axhline(row, color=FAINT, linewidth=0.7, zorder=0)
        axes.errorbar(
            entry.difference, row, xerr=1.96 * entry.se, color=look.colour, marker=look.marker, markersize=7,
            markerfacecolor="white" if entry.is_reference else look.colour, markeredgewidth=1.5,
            linewidth=1.8,
        )  # fmt: skip
    axes.set_yticks(range(len(shown)), [shorten(shorten_account(a), 66) for a in shown["account"]])
    axes.tick_params(axis="y", length=0)
    axes.set_ylim(len(shown) - 0.4, -0.6)
    add_zero_line(axes, vertical=True)
    axes.axvspan(-run.min_gain, 0, color=SOFT, alpha=0.15, linewidth=0)
    bounds = np.concatenate([shown["difference"] - 2 * shown["se"], shown["difference"] + 2 * shown["se"]])
    scale = _set_gain_scale(axes, bounds[np.isfinite(bounds)].tolist(), run.min_gain)
    axes.set_xlabel(f"held-out log-likelihood less the full account's (nats a trial{scale})", x=0.35)
    if len(models) > 1:
        handles = [
            Line2D([], [], color=look.colour, marker=look.marker, linewidth=1.8, label=" ")
            for look in looks.values()
        ]
        figure.legend(
            handles,
            [shorten(m) for m in models],
            title="model",
            loc="outside upper center",
            ncols=count_columns(models),
        )
    reference = table[table["is_reference"]].iloc[0]
    alt = _describe_scores(table, str(reference["account"]))
    left = f" The best {len(shown)} of {len(table)} are drawn." if len(table) > len(shown) else ""
    caption = (
        f"Each account against {shorten_account(reference['account'])} (open mark), paired over the same "
        "held-out trials; lines are ±1.96 standard errors over trials, without the correction for "
        f"overlapping training sets that the contrasts carry. The grey band is min_gain wide.{left}"
    )
    return Drawn(key, title, write_svg(figure, key, title, alt), alt, caption)


def _describe_scores(table: pd.DataFrame, reference: str) -> str:
    best, worst = table.iloc[0], table.iloc[-1]

    def name(row: pd.Series) -> str:
        return f"{shorten_account(row['account'])} (model {shorten(row['model'])})"

    return (
        f"{len(table)} accounts scored on {int(table['n'].max())} held-out trials, as differences to "
        f"{shorten_account(reference)}. Best: {name(best)}, {write_number(best['difference'])} nats a trial "
        f"(standard error {write_number(best['se'])}). Worst: {name(worst)}, "
        f"{write_number(worst['difference'])} (standard error {write_number(worst['se'])})."
    )


def tabulate_contrasts(run: RunFolder) -> list[list[str]]:
    """Return one row of text for each entry of the contrasts."""
    rows = []
    for contrast in run.rows("contrasts"):
        for name, (words, _) in ENTRY_LOOKS.items():
            entry = contrast.get(name)
            if not isinstance(entry, Mapping):
                continue
            route = name.removesuffix("_unique")
            ratio = (contrast.get("lr") or {}).get(route) or (contrast.get("lr") or {}).get(name) or {}
            statistic = f"{write_number(ratio.get('stat'))} ({ratio.get('df')} df)" if ratio else "not given"
            rows.append(
                [name_source(contrast), words, write_number(entry.get("nats_per_trial"), 3),
                 write_interval(entry.get("ci95"), 3), statistic, write_p_value(entry.get("p"))]
            )  # fmt: skip
    return rows


def describe_levels(run: RunFolder) -> str:
    """Return the four scores of each source as a sentence (for readers of the table)."""
    parts = []
    for contrast in run.rows("contrasts"):
        four = [
            f"{route} {write_number(contrast[route], 2)}"
            for route in ("none", "initial", "sustained", "both")
            if contrast.get(route) is not None
        ]
        if four:
            parts.append(f"{name_source(contrast)}: {join_words(four)}")
    return "; ".join(parts)
