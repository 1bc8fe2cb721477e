"""Figure: recorded and model rates by time and condition, for the units with the largest misfit."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import MaxNLocator

from portfire.report._folder import RunFolder
from portfire.report._rates import (
    MAX_MARKS,
    RateCheck,
    average_bins,
    check_rates,
    explain_no_rates,
    stack_rates,
)
from portfire.report._style import (
    INK,
    MARKERS,
    Absent,
    Drawn,
    interval_colours,
    make_figure,
    shorten,
    write_svg,
)
from portfire.report._words import count_words, write_number

MAX_CONTEXTS, MAX_LEVELS, N_WORST = 3, 4, 3
KEY, TITLE = "rates-units", "Recorded and model rates of the worst-fitted units"


def draw_rates_units(run: RunFolder) -> Drawn | Absent:
    """Draw recorded and model rates by time for the units with the largest misfit."""
    check = check_rates(run.rates) if run.rates is not None else None
    if run.rates is None or check is None:
        return Absent(KEY, TITLE, explain_no_rates(run))
    n_units = run.rates.sizes["unit"]
    groups = group_conditions(run.rates, run.contexts)
    names = list(groups)[:MAX_CONTEXTS]
    worst = check.worst[:N_WORST]
    longest = max(len(members) for members in groups.values())
    figure = make_figure(0.7 + 2.15 * len(worst), 8.7 if len(names) > 1 else 6.0)
    grid = figure.subplots(len(worst), len(names), squeeze=False, sharex=True, sharey="row")
    levels: dict[str, Any] = {}
    for column, name in enumerate(names):
        for unit, axes in zip(worst, grid[:, column], strict=True):
            for order, (condition, label) in enumerate(_thin(groups[name])):
                look = _level_look(order, min(longest, MAX_LEVELS))
                _draw_condition(axes, run.rates, condition, int(unit), look)
                if label is not None:
                    levels.setdefault(label, look)
        if name is not None:
            grid[0, column].set_title(f"context {shorten(name, 18)}")
        grid[-1, column].set_xlabel("time from the set cue (s)")
    units = run.rates["unit"].values if "unit" in run.rates.coords else np.arange(n_units)
    for unit, axes in zip(worst, grid[:, 0], strict=True):
        axes.set_ylabel(f"unit {shorten(units[unit], 14)}\n(spikes/s)")
    for axes in grid.ravel():  # rows share their axis, so only after the last one is drawn
        axes.set_ylim(bottom=0)
        axes.yaxis.set_major_locator(MaxNLocator(4))
    _add_legend(figure, levels, 6 if len(names) > 1 else 3)
    alt = _describe_units(check, units)
    more = [
        f"{len(names)} of {len(groups)} contexts" if len(groups) > len(names) else "",
        f"{MAX_LEVELS} of {longest} sample intervals" if longest > MAX_LEVELS else "",
    ]
    n_pooled = _count_pooled(run.rates)
    pooled = f", each over {n_pooled} bins" if n_pooled > 1 else ""
    left = "".join(f" Drawn: {part}." for part in more if part)
    noise = (
        " Bars are ±1 standard error of Poisson counts at the model's rate over as many trials."
        if check.excess is not None
        else ""
    )
    caption = (
        f"The {count_words(len(worst), 'unit')} of {n_units} with the largest misfit: condition "
        f"means of the recorded rate (marks{pooled}) and of the model (lines), where five or more trials "
        f"still run.{noise}{left}"
    )
    return Drawn(KEY, TITLE, write_svg(figure, KEY, TITLE, alt), alt, caption)


def group_conditions(
    rates: xr.Dataset, order: tuple[str, ...] = ()
) -> dict[str | None, list[tuple[int, str | None]]]:
    """Return, for each context (None where there are none), its conditions and their labels."""
    n = rates.sizes["condition"]
    contexts = rates["context"].values if "context" in rates.variables else [None] * n
    samples = rates["sample_s"].values if "sample_s" in rates.variables else [np.nan] * n
    found: dict[str | None, list[tuple[int, str | None]]] = {}
    for condition in range(n):
        context, sample = contexts[condition], samples[condition]
        name = None if pd.isna(context) or str(context) in ("", "None") else str(context)
        label = None if pd.isna(sample) else f"{float(sample):g} s"
        found.setdefault(name, []).append((condition, label))
    known = [name for name in order if name in found]
    return {name: found[name] for name in (*known, *(name for name in found if name not in known))}


def _draw_condition(axes: Axes, rates: xr.Dataset, condition: int, unit: int, look: tuple[Any, str]) -> None:
    recorded, model = (values[condition, :, unit] for values in stack_rates(rates))
    time, n_pooled = rates["time"].values, _count_pooled(rates)
    axes.plot(time, model, color=look[0], linewidth=2.2)
    weight, error = np.ones(len(time)), None
    if "n_running" in rates and len(time) > 1:
        weight = rates["n_running"].transpose("condition", "time").values[condition].astype(float)
        seen = np.where(np.isfinite(recorded), weight, 0.0)
        trials = average_bins(seen, np.ones(len(time)), n_pooled) * n_pooled
        expected = average_bins(model, weight, n_pooled)
        bin_s = float(np.median(np.diff(time)))
        error = np.sqrt(np.maximum(expected, 0.0) / np.maximum(trials * bin_s, 1e-9))
    places, shown = (
        average_bins(v, w, n_pooled) for v, w in ((time, np.ones(len(time))), (recorded, weight))
    )
    axes.errorbar(
        places, shown, yerr=error, color=look[0], marker=look[1], markersize=4, linestyle="none",
        elinewidth=0.9, alpha=0.85,
    )  # fmt: skip


def _count_pooled(rates: xr.Dataset) -> int:
    return -(-rates.sizes["time"] // MAX_MARKS)


def _thin(members: list[tuple[int, str | None]]) -> list[tuple[int, str | None]]:
    if len(members) <= MAX_LEVELS:
        return members
    return [members[k] for k in np.linspace(0, len(members) - 1, MAX_LEVELS).round().astype(int)]


def _level_look(order: int, n_levels: int) -> tuple[Any, str]:
    return interval_colours()(order / max(1, n_levels - 1)), MARKERS[order % len(MARKERS)]


def _add_legend(figure: Figure, levels: dict[str, tuple[Any, str]], n_columns: int) -> None:
    handles = [
        Line2D([], [], color=colour, marker=marker, markersize=5, linewidth=2.2)
        for colour, marker in levels.values()
    ]
    handles += [
        Line2D([], [], color=INK, linewidth=2.2),
        Line2D([], [], color=INK, marker="o", markersize=3.5, linestyle="none"),
    ]
    labels = [*(f"sample {label}" for label in levels), "model (line)", "recorded (marks)"]
    figure.legend(handles, labels, loc="outside upper center", ncols=min(n_columns, len(labels)))


def _describe_units(check: RateCheck, units: np.ndarray) -> str:
    what = (
        "times counting noise" if check.excess is not None else "spikes/s (squared difference over mean rate)"
    )
    parts = [f"unit {shorten(units[u])} {write_number(check.by_unit[u])}" for u in check.worst[:N_WORST]]
    middle = write_number(np.median(check.by_unit))
    return (
        f"Recorded and model rates by time and condition. Largest misfit, {what}: {'; '.join(parts)}; the "
        f"median unit has {middle}."
    )
