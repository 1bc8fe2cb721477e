"""Figure: produced against sample interval."""

from __future__ import annotations

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from portfire.report._folder import RunFolder, has_values
from portfire.report._style import (
    INK,
    Absent,
    Drawn,
    Look,
    assign_looks,
    make_figure,
    shorten,
    spread_evenly,
    write_svg,
)
from portfire.report._words import count_words, join_words, write_number

KEY, TITLE = "behaviour", "Produced interval against sample interval"
MAX_LEVELS = 12


def draw_behaviour(run: RunFolder) -> Drawn | Absent:
    """Draw single trials, and mean and SD of each condition, by context."""
    if run.trials is None:
        return Absent(KEY, TITLE, "the run folder holds no trials.parquet")
    if not run.has_responses:
        return Absent(KEY, TITLE, "no used trial has a response, so there is no produced interval")
    table = arrange_trials(run)
    groups = list(run.contexts) or ["all trials"]
    looks = assign_looks(groups)
    by_sample = bool(run.samples)
    figure = make_figure(4.4)
    axes = figure.add_subplot()
    places = _place_samples(run) if by_sample else {float("nan"): 0.0}
    gap = min(np.diff(sorted(places.values())), default=1.0)
    for k, group in enumerate(groups):
        rows = table[table["group"] == group]
        shift = gap * 0.62 * ((k + 0.5) / len(groups) - 0.5)
        if not by_sample:
            places, shift = {float("nan"): float(k)}, 0.0
        _draw_group(axes, rows, looks[group], places, shift, gap * 0.62 * 0.36 / len(groups), group)
    if by_sample:
        axes.set_xlabel("sample interval (s)")
        axes.set_xticks(list(places.values()), [f"{s:.3g}" for s in places])
    else:
        axes.set_xlabel("context" if run.contexts else "")
        axes.set_xticks(range(len(groups)), [shorten(g, 16) for g in groups])
        axes.set_xlim(-0.7, len(groups) - 0.3)
    axes.set_ylabel("produced interval (s)")
    if run.contexts:
        handles, _ = axes.get_legend_handles_labels()
        labels = [shorten(group) for group in groups]
        figure.legend(handles, labels, title="context", loc="outside right upper", alignment="left")
    alt = _describe(table, groups, by_sample)
    caption = (
        "Small marks are single trials, spread sideways only to be seen; large marks are condition means "
        "with "
        "±1 SD." + (" Dashes are the intervals asked for." if has_values(table, "target_s") else "")
        + _excuse(run)
    )  # fmt: skip
    title = TITLE if by_sample else "Produced intervals"
    return Drawn(KEY, title, write_svg(figure, KEY, title, alt), alt, caption)


def arrange_trials(run: RunFolder) -> pd.DataFrame:
    """Return the trials with a response, with their group (context) and their level of sample interval."""
    assert run.trials is not None
    table = run.trials[run.trials["produced_s"].notna()].reset_index(drop=True)
    table["group"] = table["context"].astype(str) if run.contexts else "all trials"
    if not run.samples:
        table["level"] = np.nan
    elif len(run.samples) <= MAX_LEVELS:
        table["level"] = table["sample_s"]
    else:
        cut = pd.qcut(table["sample_s"], MAX_LEVELS, duplicates="drop")
        table["level"] = table.groupby(cut, observed=True)["sample_s"].transform("mean")
    return table


def _place_samples(run: RunFolder) -> dict[float, float]:
    table = arrange_trials(run)
    return {float(s): float(s) for s in np.unique(table["level"].dropna())}


def _draw_group(
    axes: Axes,
    rows: pd.DataFrame,
    look: Look,
    places: dict[float, float],
    shift: float,
    jitter: float,
    group: str,
) -> None:
    centres, means, deviations = [], [], []
    for level, x in places.items():
        here = rows if np.isnan(level) else rows[rows["level"] == level]
        if here.empty:
            continue
        produced = here["produced_s"].to_numpy()
        axes.scatter(
            x + shift + spread_evenly(len(here), jitter), produced, s=9, marker=look.marker,
            color=look.colour, alpha=0.35, linewidths=0,
        )  # fmt: skip
        centres.append(x + shift)
        means.append(produced.mean())
        deviations.append(produced.std(ddof=1) if len(here) > 1 else 0.0)
        if has_values(here, "target_s"):
            target = here["target_s"].mean()
            width = jitter * 1.25
            axes.plot(
                [x + shift - width, x + shift + width], [target] * 2, color=INK, linewidth=2.2, zorder=4
            )
    line = look.line if len(centres) > 1 else "none"
    axes.errorbar(
        centres, means, yerr=deviations, color=look.colour, marker=look.marker, linestyle=line,
        markersize=8.5, markeredgecolor="white", markeredgewidth=1.0, label=f"group {group}", zorder=5,
    )  # fmt: skip


def _describe(table: pd.DataFrame, groups: list[str], by_sample: bool) -> str:
    parts = []
    for group in groups[:6]:
        means = table[table["group"] == group].groupby("level", dropna=False)["produced_s"].mean()
        name = shorten(group) if group != "all trials" else "all trials"
        if len(means) > 1:
            first, last = means.index[0], means.index[-1]
            parts.append(
                f"{name}: {write_number(means.iloc[0])} s at a sample interval of {first:.3g} s to "
                f"{write_number(means.iloc[-1])} s at {last:.3g} s"
            )
        elif len(means) == 1:
            parts.append(f"{name}: {write_number(means.iloc[0])} s")
    more = f"; {count_words(len(groups) - 6, 'further context')} not listed" if len(groups) > 6 else ""
    kind = "Mean produced interval by context" if groups != ["all trials"] else "Mean produced interval"
    against = " and sample interval" if by_sample else ""
    return f"{kind}{against}, {len(table)} trials. {'; '.join(parts)}{more}."


def _excuse(run: RunFolder) -> str:
    lacks = []
    if not run.samples:
        lacks.append("no sample intervals")
    elif len(run.samples) == 1:
        lacks.append("one sample interval only")
    if not run.contexts:
        lacks.append("no contexts")
    text = f" The session has {join_words(lacks)}." if lacks else ""
    if len(run.samples) > MAX_LEVELS:
        text += (
            f" Its {len(run.samples)} sample intervals are gathered into {MAX_LEVELS} groups of like size."
        )
    return text
