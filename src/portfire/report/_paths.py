"""Figure: latent paths of single trials and of conditions."""

from __future__ import annotations

import numpy as np
import pandas as pd
from matplotlib.cm import ScalarMappable
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from portfire.report._folder import RunFolder, name_lacking, trials_in_order
from portfire.report._style import (
    INK,
    SOFT,
    Absent,
    Drawn,
    add_zero_line,
    assign_looks,
    count_columns,
    interval_colours,
    make_figure,
    scale_colours,
    shorten,
    write_svg,
)
from portfire.report._words import join_words, write_number

MAX_PATHS = 150
MAX_LATENTS = 6
MAX_COLUMNS = 3


def draw_paths(run: RunFolder) -> Drawn | Absent:
    """Draw the smoothed latent state by time: single trials (thin) and condition means."""
    key, title = "paths", "Latent paths from the set cue"
    if run.latents is None or run.trials is None:
        return Absent(key, title, f"the run folder holds no {name_lacking(run)}")
    table = trials_in_order(run, run.latents["trial"].values.tolist())
    state = run.latents["state"].transpose("trial", "time", "latent").values
    time = run.latents["time"].values
    n_latents = min(state.shape[2], MAX_LATENTS)
    columns = min(n_latents, MAX_COLUMNS)
    blocks = -(-n_latents // columns)
    produced = table["produced_s"].to_numpy(float)
    timed = bool(np.isfinite(produced).any())
    norm, colours = scale_colours(produced if timed else np.array([0.0, 1.0])), interval_colours()
    shown = _pick_trials(len(table))
    looks = assign_looks(run.contexts or ("all trials",))
    means = _average_conditions(state, table)
    figure = make_figure(0.9 + 5.0 * blocks)
    end = find_end(time, produced, means)
    median = float(np.nanmedian(produced)) if timed else None
    grid = figure.subplots(2 * blocks, columns, squeeze=False, sharex=True)
    for latent in range(n_latents):
        block, column = divmod(latent, columns)
        singles, averages = grid[2 * block, column], grid[2 * block + 1, column]
        paths = [np.column_stack([time, state[i, :, latent]]) for i in shown]
        tint = [colours(norm(produced[i])) if np.isfinite(produced[i]) else SOFT for i in shown]
        singles.add_collection(LineCollection(paths, colors=tint, linewidths=0.8, alpha=0.6))
        singles.autoscale_view()
        for context, interval, mean in means:
            colour = colours(norm(interval)) if np.isfinite(interval) else SOFT
            averages.plot(
                time, mean[:, latent], color=colour, linestyle=looks[context].line, linewidth=2,
                marker=looks[context].marker, markevery=[_find_last(mean[:, latent])], markersize=6,
            )  # fmt: skip
        singles.set_title(f"latent {latent + 1}")
        for axes in (singles, averages):
            add_zero_line(axes, vertical=False)
            axes.set_xlim(0, end)
            if median is not None:
                axes.axvline(median, color=SOFT, linestyle=(0, (4, 3)), linewidth=1, zorder=0.6)
        averages.tick_params(labelbottom=True)
        averages.set_xlabel("time from the set cue (s)")
    for block in range(blocks):
        grid[2 * block, 0].set_ylabel("single trials\n(log rate)")
        grid[2 * block + 1, 0].set_ylabel("condition means\n(log rate)")
    for axes in grid.ravel():
        if not axes.has_data():
            axes.set_visible(False)
    if timed:
        mappable = ScalarMappable(norm, colours)
        figure.colorbar(mappable, ax=grid, label="produced interval (s)", extend="both", aspect=40, pad=0.015)
    if median is not None:
        grid[0, 0].annotate(
            f"median {median:.2f} s", (median, 1), xycoords=("data", "axes fraction"), xytext=(3, -2),
            textcoords="offset points", fontsize=8.5, color=SOFT, va="top",
        )  # fmt: skip
    if len(run.contexts) > 1:
        _add_context_lines(figure, run.contexts)
    alt = _describe_paths(means, end, len(shown), len(table))
    drawn = "All" if len(shown) == len(table) else f"{len(shown)} of"
    left = (
        f" The first {n_latents} of {state.shape[2]} latents are drawn." if state.shape[2] > n_latents else ""
    )
    colour = "colour is the produced interval" if timed else "grey, since no trial has a response"
    mark = (
        " The dashed line is the median produced interval; time is drawn until one trial in twenty is left."
        if timed
        else ""
    )
    caption = (
        f"{drawn} {len(table)} trials (thin, evenly picked), smoothed with all spikes of the trial, and the "
        f"mean of each condition over the trials still running, drawn while half of them run; "
        f"{colour}.{mark} "
        "Latents have orthonormal readout columns, the first explains most; their signs are a "
        f"convention.{left}"
    )
    return Drawn(key, title, write_svg(figure, key, title, alt), alt, caption)


def _pick_trials(n: int) -> np.ndarray:
    return np.unique(np.linspace(0, n - 1, min(n, MAX_PATHS)).round().astype(int))


def find_end(time: np.ndarray, produced: np.ndarray, means: list[tuple[str, float, np.ndarray]]) -> float:
    """Return where the time axis ends (s): where one trial in twenty is left, and no mean is cut."""
    last = max((float(time[_find_last(mean[:, 0])]) for _, _, mean in means), default=0.0)
    known = produced[np.isfinite(produced)]
    if not len(known):
        return float(time[-1]) or 1.0
    return max(last + 0.03, min(float(time[-1]), float(np.quantile(known, 0.95)))) or 1.0


def _find_last(values: np.ndarray) -> int:
    finite = np.flatnonzero(np.isfinite(values))
    return int(finite[-1]) if len(finite) else 0


def _average_conditions(state: np.ndarray, table: pd.DataFrame) -> list[tuple[str, float, np.ndarray]]:
    means = []
    for _, rows in table.groupby("condition"):
        paths = state[rows.index.to_numpy()]
        running = np.isfinite(paths[:, :, 0]).sum(0)
        mean = np.full(paths.shape[1:], np.nan)
        enough = running >= max(1, len(rows) / 2)
        mean[enough] = np.nanmean(paths[:, enough], axis=0)
        context = rows["context"].iloc[0] if "context" in rows else None
        name = "all trials" if context is None or pd.isna(context) else str(context)
        interval = rows["produced_s"].mean() if rows["produced_s"].notna().any() else np.nan
        means.append((name, float(interval), mean))
    return means


def _add_context_lines(figure: Figure, contexts: tuple[str, ...]) -> None:
    looks = assign_looks(contexts)
    handles = [
        Line2D([], [], color=INK, linestyle=looks[c].line, linewidth=2, marker=looks[c].marker, markersize=6)
        for c in contexts
    ]
    figure.legend(
        handles, [shorten(c) for c in contexts], title="context", loc="outside upper center",
        ncols=count_columns(contexts), handlelength=3,
    )  # fmt: skip


def _describe_paths(means: list[tuple[str, float, np.ndarray]], end: float, shown: int, n: int) -> str:
    start = np.array([mean[0] for _, _, mean in means])
    parts = [f"{len(means)} condition means and {shown} of {n} single trials, smoothed latent state by time"]
    low, high = np.nanmin(start, axis=0), np.nanmax(start, axis=0)
    ranges = [
        f"latent {k} {write_number(low[k - 1])} to {write_number(high[k - 1])}"
        for k in range(1, len(low) + 1)
    ][:3]
    parts.append(f"At the set cue the condition means lie at {join_words(ranges)} (log rate)")
    intervals = [interval for _, interval, _ in means if np.isfinite(interval)]
    if intervals and len(means) > 2:
        known = [np.isfinite(interval) for _, interval, _ in means]
        r = np.corrcoef(start[known, 0], intervals)[0, 1] if np.ptp(start[known, 0]) > 0 else np.nan
        parts.append(
            "Over conditions, latent 1 at the set cue goes with the mean produced interval at r = "
            f"{write_number(r)}"
        )
    parts.append(f"Time runs to {write_number(end)} s")
    return ". ".join(parts) + "."
