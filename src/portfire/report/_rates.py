"""Figures: posterior predictive check of rates, recorded against model."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.colors import ListedColormap, LogNorm
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator, MaxNLocator, NullFormatter

from portfire.report._folder import RunFolder
from portfire.report._style import (
    COLOURS,
    FAINT,
    INK,
    MARKERS,
    Absent,
    Drawn,
    interval_colours,
    make_figure,
    write_svg,
)
from portfire.report._words import GAP, count_words, write_number

MAX_MARKS = 25
CLOSE = 1.1  # squared differences over counting noise


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
    spread : float
        Standard deviation of `excess` that counting noise alone gives.
    by_unit : array (unit,)
        The same for each unit (mean squared difference over its mean rate without `n_running`).
    by_time : array (time,)
        The same for each run of `n_pooled` bins, NaN where too few trials run.
    spread_by_unit, spread_by_time : array or None
        Standard deviations of both that counting noise alone gives. None without `n_running`.
    n_pooled : int
    worst : array of int
        Units by misfit, the largest first.
    """

    share: float
    excess: float | None
    spread: float
    by_unit: np.ndarray
    by_time: np.ndarray
    spread_by_unit: np.ndarray | None
    spread_by_time: np.ndarray | None
    n_pooled: int
    worst: np.ndarray


def check_rates(rates: xr.Dataset) -> RateCheck | None:
    """Sum up the difference between recorded and model rates; None where no bin has enough trials."""
    recorded, model = stack_rates(rates)
    finite = np.isfinite(recorded) & np.isfinite(model)
    if not finite.any():
        return None
    time = rates["time"].values
    running, bin_s = np.ones((*recorded.shape[:2], 1)), None
    if "n_running" in rates and len(time) > 1:
        running = rates["n_running"].transpose("condition", "time").values[:, :, None].astype(float)
        bin_s = float(np.median(np.diff(time)))
    weight = np.where(finite, running, 0.0)
    recorded, model = np.where(finite, recorded, 0.0), np.where(finite, model, 0.0)
    total = np.maximum(weight.sum((0, 1)), 1e-300)
    unit_mean = (weight * recorded).sum((0, 1)) / total
    residual = (weight * (recorded - model) ** 2).sum()
    spread = (weight * (recorded - unit_mean) ** 2).sum()
    share = float(1 - residual / spread) if spread > 0 else float("nan")
    if bin_s is None:
        noise = np.broadcast_to(np.maximum(unit_mean, 1e-9), model.shape)
    else:
        noise = np.maximum(model, 1e-6) / (np.maximum(running, 1.0) * bin_s)
    ratio = np.where(finite, (recorded - model) ** 2 / noise, 0.0)
    n_pooled = -(-len(time) // MAX_MARKS)
    parts = ratio, _count_variance(model, running, bin_s, finite), finite
    by_time, spread_by_time = _average(*(_pool(part.sum((0, 2)), n_pooled) for part in parts))
    by_unit, spread_by_unit = _average(*(part.sum((0, 1)) for part in parts))
    return RateCheck(
        share=share,
        excess=None if bin_s is None else float(ratio.sum() / finite.sum()),
        spread=float(np.sqrt(parts[1].sum()) / finite.sum()),
        by_unit=np.nan_to_num(by_unit),
        by_time=by_time,
        spread_by_unit=None if bin_s is None else spread_by_unit,
        spread_by_time=None if bin_s is None else spread_by_time,
        n_pooled=n_pooled,
        worst=np.argsort(-np.nan_to_num(by_unit), kind="stable"),
    )


def _count_variance(
    model: np.ndarray, running: np.ndarray, bin_s: float | None, finite: np.ndarray
) -> np.ndarray:
    """Return the variance of (k − μ)²/μ for Poisson counts k of mean μ, 2 + 1/μ, where there are counts."""
    if bin_s is None:
        return np.zeros(model.shape)
    mean = np.maximum(model * running * bin_s, 1e-6)
    return np.where(finite, 2 + 1 / mean, 0.0)


def _pool(values: np.ndarray, n_pooled: int) -> np.ndarray:
    return np.pad(values.astype(float), (0, -len(values) % n_pooled)).reshape(-1, n_pooled).sum(1)


def _average(total: np.ndarray, variance: np.ndarray, n: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    seen = np.where(n > 0, n, 1)
    return np.where(n > 0, total / seen, np.nan), np.where(n > 0, np.sqrt(variance) / seen, np.nan)


def state_rates(run: RunFolder) -> list[str]:
    """Return the summary of the check in words, as sentences."""
    check = check_rates(run.rates) if run.rates is not None else None
    if check is None:
        return ["Recorded and model rates were not compared: there are no rates to compare."]
    share = (
        f"Over conditions and time the model's rates account for {write_number(100 * check.share, 1)}{GAP}% "
        "of the variance of the recorded ones about each unit's mean"
    )
    if check.excess is None:
        sentences = [f"{share}."]
    else:
        times = f"{write_number(check.excess)} times what Poisson counting noise alone would give"
        if check.excess < max(CLOSE, 1 + 2 * check.spread):
            sentences = [
                "The model's rates are as close to the recorded ones as counting allows: squared differences "
                f"are {times}.",
                f"{share}; the rest is counting noise of the recorded means.",
            ]
        else:
            sentences = [
                "The model's rates differ from the recorded ones by more than counting: squared differences "
                f"are {times}. Rates that vary between trials, which the model has too, add to that noise.",
                f"{share}.",
            ]
    assert run.rates is not None
    # As many components as units hold all of the variance, whatever was recorded.
    if "pc_variance" in run.rates and run.rates.sizes["unit"] > run.rates.sizes["component"]:
        shares = run.rates["pc_variance"].values
        held = float(np.nansum(shares[:10]))
        n = min(10, len(shares))
        sentences.append(
            f"The first {count_words(n, 'principal component')} of the trial-averaged recorded rates "
            f"{'holds' if n == 1 else 'hold'} {write_number(100 * held, 1)}{GAP}% of their variance."
        )
    return sentences


def draw_rates_overall(run: RunFolder) -> Drawn | Absent:
    """Draw recorded against model rate over all entries, and the misfit by time and by unit."""
    key, title = "rates-overall", "Recorded against model rates, all units"
    check = check_rates(run.rates) if run.rates is not None else None
    if run.rates is None or check is None:
        return Absent(key, title, explain_no_rates(run))
    figure = make_figure(3.9)
    left, middle, right = figure.subplots(1, 3, gridspec_kw={"width_ratios": (1.5, 1, 1)})
    _draw_cells(figure, left, run.rates)
    time = run.rates["time"].values
    places = average_bins(time, np.ones(len(time)), check.n_pooled)
    _draw_misfit(middle, places, check.by_time, check.spread_by_time)
    middle.set(title="By time", xlabel="time from set cue (s)")
    ordered = check.by_unit[check.worst]
    spread = None if check.spread_by_unit is None else check.spread_by_unit[check.worst]
    _draw_misfit(right, np.arange(1, len(ordered) + 1), ordered, spread)
    right.set(title="By unit", xlabel="rank by misfit")
    right.xaxis.set_major_locator(MaxNLocator(5, integer=True))
    middle.set_ylabel(
        "squared difference\n(times counting noise)"
        if check.excess is not None
        else "squared difference / mean rate\n(spikes/s)"
    )
    top = max(axes.get_ylim()[1] for axes in (middle, right))
    for axes in (middle, right):
        axes.set_ylim(0, top)
    right.set_yticklabels([])
    noise = (
        ", over counting noise: a model that is right lies at 1 (dashed), and within the grey bars in 95 of "
        "100 cases"
        if check.excess is not None
        else ""
    )
    caption = (
        "Left: one entry for each unit, condition and bin with five or more trials; the line is equality. "
        f"Middle and right: mean squared difference{noise}. Both rates are means over trials that still run, "
        "in the model by its own response hazard, so late times compare survivors with survivors. The model "
        "was fitted to these trials."
    )
    alt = " ".join(state_rates(run))
    if check.excess is not None:
        alt += (
            f" By time the squared difference is {write_number(np.nanmin(check.by_time))} to "
            f"{write_number(np.nanmax(check.by_time))} times counting noise, by unit "
            f"{write_number(ordered[-1])} to {write_number(ordered[0])}."
        )
    return Drawn(key, title, write_svg(figure, key, title, alt), alt, caption)


def _draw_cells(figure: Figure, axes: Axes, rates: xr.Dataset) -> None:
    recorded, model = stack_rates(rates)
    finite = np.isfinite(recorded) & np.isfinite(model)
    x, y = np.sqrt(model[finite]), np.sqrt(recorded[finite])
    top = 1.03 * float(max(x.max(), y.max())) or 1.0
    pale_first = ListedColormap(interval_colours()(np.linspace(1, 0, 256)))
    cells = axes.hexbin(x, y, gridsize=34, extent=(0, top, 0, top), mincnt=1, cmap=pale_first, norm=LogNorm())
    axes.plot([0, top], [0, top], color=INK, linewidth=1)
    ticks = _root_ticks(top)
    for axis in (axes.xaxis, axes.yaxis):
        axis.set_ticks(np.sqrt(ticks), [f"{t:g}" for t in ticks])
    axes.set(xlabel="model rate (spikes/s, root scale)", ylabel="recorded rate (spikes/s, root scale)")
    axes.set_xlim(-0.02 * top, top)
    axes.set_ylim(-0.02 * top, top)
    bar = figure.colorbar(
        cells,
        ax=axes,
        label="number of entries",
        ticks=LogLocator(10, subs=(1, 2, 5)),
        format=FuncFormatter(_plain_tick),
    )
    bar.ax.yaxis.set_minor_formatter(NullFormatter())


def _draw_misfit(axes: Axes, x: np.ndarray, misfit: np.ndarray, spread: np.ndarray | None) -> None:
    seen = np.isfinite(misfit)
    if spread is not None:
        low, high = np.maximum(1 - 1.96 * spread[seen], 0), 1 + 1.96 * spread[seen]
        axes.vlines(x[seen], low, high, color=FAINT, linewidth=4.5 if len(misfit) < 60 else 2, zorder=0)
        axes.axhline(1, color=INK, linestyle=(0, (4, 3)), linewidth=1)
    axes.plot(x[seen], misfit[seen], color=COLOURS[0], marker=MARKERS[0], markersize=4, linewidth=1)


def stack_rates(rates: xr.Dataset) -> tuple[np.ndarray, np.ndarray]:
    recorded, model = (
        rates[name].transpose("condition", "time", "unit").values.astype(float)
        for name in ("recorded", "model")
    )
    return recorded, model


def _plain_tick(value: float, _: int | None = None) -> str:
    return f"{value:,.0f}"


def _root_ticks(top: float) -> np.ndarray:
    """Return rates (spikes/s) whose roots are spread over 0 to `top`."""
    known = np.array([0, 1, 2, 5, 10, 20, 40, 60, 100, 150, 200, 300, 400, 600, 800, 1000], dtype=float)
    ticks = [0.0]
    for tick in known[known**0.5 <= top]:
        if tick**0.5 - ticks[-1] ** 0.5 >= 0.12 * top:
            ticks.append(float(tick))
    return np.array(ticks)


def explain_no_rates(run: RunFolder) -> str:
    if run.rates is None:
        return "the run folder holds no rates.nc"
    return "no condition has five trials that still run in any bin"


def average_bins(values: np.ndarray, weight: np.ndarray, n_pooled: int) -> np.ndarray:
    """Return weighted means of neighbouring values (time,), NaN where none of them is finite."""
    padding = (0, -len(values) % n_pooled)
    values = np.pad(values, padding, constant_values=np.nan).reshape(-1, n_pooled)
    weight = np.where(np.isfinite(values), np.pad(weight, padding).reshape(-1, n_pooled), 0.0)
    total = weight.sum(1)
    return np.where(total > 0, (weight * np.nan_to_num(values)).sum(1) / np.maximum(total, 1e-300), np.nan)
