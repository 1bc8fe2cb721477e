"""Figures: posterior predictive check of rates, recorded against model."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from matplotlib.colors import ListedColormap, LogNorm
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter, LogLocator, MaxNLocator, NullFormatter

from portfire.report._folder import RunFolder
from portfire.report._style import (
    COLOURS,
    INK,
    MARKERS,
    Absent,
    Drawn,
    interval_colours,
    make_figure,
    shorten,
    write_svg,
)
from portfire.report._words import begin_sentence, count_words, write_number

MAX_CONTEXTS, MAX_LEVELS, N_WORST, MAX_MARKS = 3, 4, 3, 25


@dataclass(frozen=True)
class RateCheck:
    """Recorded against model rates, over all conditions, times and units with enough trials.

    Attributes
    ----------
    share : float
        1 − Σ(recorded − model)² / Σ(recorded − the unit's mean)², each bin weighted by its trials.
    excess : float or None
        Mean squared difference over the counting noise that Poisson counts at the model's rate would give;
        1 is what a model that is right would show. None without `n_running`.
    by_unit : array (unit,)
        The same for each unit (mean squared difference over the mean rate without `n_running`).
    worst : array of int
        Units by misfit, the largest first.
    """

    share: float
    excess: float | None
    by_unit: np.ndarray
    worst: np.ndarray


def check_rates(rates: xr.Dataset) -> RateCheck | None:
    """Sum up the difference between recorded and model rates; None where no bin has enough trials."""
    recorded, model = _arrays(rates)
    finite = np.isfinite(recorded) & np.isfinite(model)
    if not finite.any():
        return None
    time = rates["time"].values
    if "n_running" in rates and len(time) > 1:
        running = rates["n_running"].transpose("condition", "time").values[:, :, None].astype(float)
        bin_s = float(np.median(np.diff(time)))
    else:
        running, bin_s = np.ones((*recorded.shape[:2], 1)), None
    weight = np.where(finite, running, 0.0)
    recorded, model = np.where(finite, recorded, 0.0), np.where(finite, model, 0.0)
    total = np.maximum(weight.sum((0, 1)), 1e-300)
    unit_mean = (weight * recorded).sum((0, 1)) / total
    residual = (weight * (recorded - model) ** 2).sum((0, 1))
    spread = (weight * (recorded - unit_mean) ** 2).sum()
    share = float(1 - residual.sum() / spread) if spread > 0 else float("nan")
    if bin_s is None:
        by_unit, excess = residual / total / np.maximum(unit_mean, 1e-9), None
    else:
        noise = np.maximum(model, 1e-6) / (np.maximum(running, 1.0) * bin_s)
        ratio = np.where(finite, (recorded - model) ** 2 / noise, 0.0)
        by_unit = ratio.sum((0, 1)) / np.maximum(finite.sum((0, 1)), 1)
        excess = float(ratio.sum() / finite.sum())
    return RateCheck(share, excess, by_unit, np.argsort(-by_unit, kind="stable"))


def state_rates(run: RunFolder) -> str:
    """Return the summary of the check in words."""
    check = check_rates(run.rates) if run.rates is not None else None
    if check is None:
        return "Recorded and model rates were not compared: there are no rates to compare."
    text = (
        f"Over conditions and time the model's rates account for {write_number(100 * check.share, 1)} % of "
        "the variance of the recorded ones about each unit's mean."
    )
    if check.excess is not None:
        text += (
            f" Their mean squared difference is {write_number(check.excess)} times what counting noise "
            "alone would give (1 for Poisson counts at the model's rates)."
        )
    assert run.rates is not None
    if "pc_variance" in run.rates:
        share = run.rates["pc_variance"].values
        held = float(np.nansum(share[:10]))
        n = min(10, len(share))
        text += (
            f" The first {count_words(n, 'principal component')} of the trial-averaged recorded rates "
            f"{'holds' if n == 1 else 'hold'} {write_number(100 * held, 1)} % of their variance."
        )
    return text


def draw_rates_units(run: RunFolder) -> Drawn | Absent:
    """Draw recorded and model rates by time for the units with the largest misfit."""
    key, title = "rates-units", "Recorded and model rates of the worst-fitted units"
    check = check_rates(run.rates) if run.rates is not None else None
    if run.rates is None or check is None:
        return Absent(key, title, _explain(run))
    recorded, model = _arrays(run.rates)
    time = run.rates["time"].values
    groups = group_conditions(run.rates)
    names = list(groups)[:MAX_CONTEXTS]
    worst = check.worst[:N_WORST]
    n_pooled = -(-len(time) // MAX_MARKS)
    weight = np.ones(recorded.shape[:2])
    if "n_running" in run.rates:
        weight = run.rates["n_running"].transpose("condition", "time").values.astype(float)
    longest = max(len(members) for members in groups.values())
    figure = make_figure(0.7 + 2.15 * len(worst), 8.7 if len(names) > 1 else 6.0)
    grid = figure.subplots(len(worst), len(names), squeeze=False, sharex=True, sharey="row")
    levels: dict[str, Any] = {}
    for column, name in enumerate(names):
        for unit, axes in zip(worst, grid[:, column], strict=True):
            for order, (condition, label) in enumerate(_thin(groups[name])):
                look = _level_look(order, min(longest, MAX_LEVELS))
                axes.plot(time, model[condition, :, unit], color=look[0], linewidth=2.2)
                shown = average_bins(recorded[condition, :, unit], weight[condition], n_pooled)
                middle = average_bins(time, np.ones(len(time)), n_pooled)
                axes.plot(
                    middle, shown, color=look[0], marker=look[1], markersize=4, linestyle="none", alpha=0.85
                )
                if label is not None:
                    levels.setdefault(label, look)
            axes.set_ylim(bottom=0)
            axes.yaxis.set_major_locator(MaxNLocator(4))
        if name is not None:
            grid[0, column].set_title(f"context {shorten(name, 18)}")
        grid[-1, column].set_xlabel("time from the set cue (s)")
    units = run.rates["unit"].values if "unit" in run.rates.coords else np.arange(recorded.shape[2])
    for unit, axes in zip(worst, grid[:, 0], strict=True):
        axes.set_ylabel(f"unit {shorten(units[unit], 14)}\n(spikes/s)")
    handles = [
        Line2D([], [], color=colour, marker=marker, markersize=5, linewidth=2.2)
        for colour, marker in levels.values()
    ]
    handles += [
        Line2D([], [], color=INK, linewidth=2.2),
        Line2D([], [], color=INK, marker="o", markersize=3.5, linestyle="none"),
    ]
    labels = [*levels, "model (line)", "recorded (marks)"]
    figure.legend(handles, labels, loc="outside upper center", ncols=min(6, len(labels)))
    alt = _describe_units(run.rates, check, units)
    more = [
        f"{len(names)} of {len(groups)} contexts" if len(groups) > len(names) else "",
        f"{MAX_LEVELS} of {longest} sample intervals" if longest > MAX_LEVELS else "",
    ]
    pooled = f", each over {n_pooled} bins" if n_pooled > 1 else ""
    left = "".join(f" Drawn: {part}." for part in more if part)
    caption = (
        f"The {count_words(len(worst), 'unit')} of {recorded.shape[2]} with the largest misfit: condition "
        f"means of the recorded rate (marks{pooled}) and of the model (lines), where five or more trials "
        f"still run.{left}"
    )
    return Drawn(key, title, write_svg(figure, key, title, alt), alt, caption)


def draw_rates_overall(run: RunFolder) -> Drawn | Absent:
    """Draw recorded against model rate over all units, conditions and times, and the misfit of each unit."""
    key, title = "rates-overall", "Recorded against model rates, all units"
    check = check_rates(run.rates) if run.rates is not None else None
    if run.rates is None or check is None:
        return Absent(key, title, _explain(run))
    recorded, model = _arrays(run.rates)
    finite = np.isfinite(recorded) & np.isfinite(model)
    figure = make_figure(3.9)
    left, right = figure.subplots(1, 2)
    x, y = np.sqrt(model[finite]), np.sqrt(recorded[finite])
    top = float(np.percentile(np.concatenate([x, y]), 99.8)) or 1.0
    pale_first = ListedColormap(interval_colours()(np.linspace(1, 0, 256)))
    cells = left.hexbin(x, y, gridsize=34, extent=(0, top, 0, top), mincnt=1, cmap=pale_first, norm=LogNorm())
    left.plot([0, top], [0, top], color=INK, linewidth=1)
    ticks = _root_ticks(top)
    for axis in (left.xaxis, left.yaxis):
        axis.set_ticks(np.sqrt(ticks), [f"{t:g}" for t in ticks])
    left.set(xlabel="model rate (spikes/s, root scale)", ylabel="recorded rate (spikes/s, root scale)")
    left.set_xlim(0, top)
    left.set_ylim(0, top)
    bar = figure.colorbar(
        cells,
        ax=left,
        label="number of bins",
        ticks=LogLocator(10, subs=(1, 2, 5)),
        format=FuncFormatter(_plain_tick),
    )
    bar.ax.yaxis.set_minor_formatter(NullFormatter())
    ordered = check.by_unit[check.worst]
    right.plot(
        np.arange(1, len(ordered) + 1),
        ordered,
        color=COLOURS[0],
        marker=MARKERS[0],
        markersize=4,
        linewidth=1,
    )
    right.set_xlabel("units, by misfit (rank)")
    right.xaxis.set_major_locator(MaxNLocator(5, integer=True))
    if check.excess is not None:
        right.axhline(1, color=INK, linestyle=(0, (4, 3)), linewidth=1)
        right.set_ylabel("squared difference\n(times counting noise)")
    else:
        right.set_ylabel("squared difference / mean rate\n(spikes/s)")
    right.set_ylim(bottom=0)
    alt = state_rates(run)
    caption = (
        "Left: one count for each unit, condition and bin with five or more trials; the line is equality. "
        "Right: mean squared difference of each unit"
        + (
            ", over counting noise; the dashed line is 1, a model that is right."
            if check.excess is not None
            else "."
        )
    )
    return Drawn(key, title, write_svg(figure, key, title, alt), alt, caption)


def group_conditions(rates: xr.Dataset) -> dict[str | None, list[tuple[int, str | None]]]:
    """Return, for each context (None where there are none), its conditions and their labels."""
    n = rates.sizes["condition"]
    contexts = rates["context"].values if "context" in rates.variables else [None] * n
    samples = rates["sample_s"].values if "sample_s" in rates.variables else [np.nan] * n
    groups: dict[str | None, list[tuple[int, str | None]]] = {}
    for condition in range(n):
        context, sample = contexts[condition], samples[condition]
        name = None if pd.isna(context) or str(context) in ("", "None") else str(context)
        label = None if pd.isna(sample) else f"{float(sample):g} s"
        groups.setdefault(name, []).append((condition, label))
    return groups


def _arrays(rates: xr.Dataset) -> tuple[np.ndarray, np.ndarray]:
    recorded, model = (
        rates[name].transpose("condition", "time", "unit").values.astype(float)
        for name in ("recorded", "model")
    )
    return recorded, model


def _thin(members: list[tuple[int, str | None]]) -> list[tuple[int, str | None]]:
    if len(members) <= MAX_LEVELS:
        return members
    return [members[k] for k in np.linspace(0, len(members) - 1, MAX_LEVELS).round().astype(int)]


def _level_look(order: int, n_levels: int) -> tuple[Any, str]:
    return interval_colours()(order / max(1, n_levels - 1)), MARKERS[order % len(MARKERS)]


def average_bins(values: np.ndarray, weight: np.ndarray, n_pooled: int) -> np.ndarray:
    """Return weighted means of neighbouring values (time,), NaN where none of them is finite."""
    padding = (0, -len(values) % n_pooled)
    values = np.pad(values, padding, constant_values=np.nan).reshape(-1, n_pooled)
    weight = np.where(np.isfinite(values), np.pad(weight, padding).reshape(-1, n_pooled), 0.0)
    total = weight.sum(1)
    return np.where(total > 0, (weight * np.nan_to_num(values)).sum(1) / np.maximum(total, 1e-300), np.nan)


def _plain_tick(value: float, _: int | None = None) -> str:
    return f"{value:,.0f}"


def _root_ticks(top: float) -> np.ndarray:
    steps = [1, 2, 5, 10, 20, 50, 100, 200, 500]
    step = next((s for s in steps if top**2 / s <= 6), 1000)
    ticks = np.arange(0, top**2 + 1e-9, step)
    return ticks[ticks**0.5 <= top]


def _describe_units(rates: xr.Dataset, check: RateCheck, units: np.ndarray) -> str:
    what = (
        "times counting noise" if check.excess is not None else "spikes/s (squared difference over mean rate)"
    )
    parts = [f"unit {shorten(units[u])} {write_number(check.by_unit[u])}" for u in check.worst[:N_WORST]]
    middle = write_number(np.median(check.by_unit))
    return begin_sentence(
        f"recorded and model rates by time and condition. Largest misfit, {what}: {'; '.join(parts)}; the "
        f"median unit has {middle}."
    )


def _explain(run: RunFolder) -> str:
    if run.rates is None:
        return "the run folder holds no rates.nc"
    return "no condition has five trials that still run in any bin"
