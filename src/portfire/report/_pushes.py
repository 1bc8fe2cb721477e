"""Figure: the two pushes of single trials, and their relation to the produced interval."""

from __future__ import annotations

import numpy as np
import pandas as pd
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from portfire.report._folder import RunFolder, name_lacking, trials_in_order
from portfire.report._style import (
    INK,
    SOFT,
    Absent,
    Drawn,
    Look,
    assign_looks,
    count_columns,
    make_figure,
    shorten,
    write_svg,
)
from portfire.report._words import join_words, write_number

MAX_COLUMNS = 3
PUSHES = ("initial", "sustained")
PUSH_UNITS = {"initial": "log rate", "sustained": "log rate in a trial"}
SIZES = (8.0, 34.0)  # marks of the shortest and the longest sample interval


def draw_pushes(run: RunFolder) -> Drawn | Absent:
    """Draw both pushes of single trials per latent, and their relation to the produced interval."""
    key, title = "pushes", "Initial and sustained push of single trials"
    if run.latents is None or run.trials is None:
        return Absent(key, title, f"the run folder holds no {name_lacking(run)}")
    table = trials_in_order(run, run.latents["trial"].values.tolist())
    pushes = {name: run.latents[name].transpose("trial", "latent").values for name in PUSHES}
    columns = min(pushes["initial"].shape[1], MAX_COLUMNS)
    groups = run.contexts or ("all trials",)
    looks = assign_looks(groups)
    group = table["context"].astype(str).to_numpy() if run.contexts else np.full(len(table), "all trials")
    within = relate_within(run)
    n_rows = 3 if within is not None else 1
    figure = make_figure(0.6 + 2.75 * n_rows, 8.7 if columns > 1 else 5.5)
    grid = figure.subplots(n_rows, columns, squeeze=False)
    centred = center_within(table, pushes) if within is not None else None
    size = size_marks(table, run.samples)
    for latent in range(columns):
        axes = grid[0, latent]
        for name in groups:
            rows = group == name
            axes.scatter(
                *(pushes[push][rows, latent] for push in PUSHES), s=size[rows], marker=looks[name].marker,
                color=looks[name].colour, alpha=0.55, linewidths=0,
            )  # fmt: skip
        _draw_uncertainty(axes, run.latents, latent)
        axes.set_title(f"latent {latent + 1}")
        axes.set_xlabel(f"initial push ({PUSH_UNITS['initial']})")
        if centred is None or within is None:
            continue
        for row, name in enumerate(PUSHES, start=1):
            _draw_relation(grid[row, latent], centred, name, latent, group, looks)
            r = within.loc[(name, latent + 1), "r"]
            grid[row, latent].set_title(f"r = {write_number(r)}", fontsize=9.5)
            grid[row, latent].set_xlabel(f"{name} push, centred\n({PUSH_UNITS[name]})")
    grid[0, 0].set_ylabel(f"sustained push\n({PUSH_UNITS['sustained']})")
    for row in range(1, n_rows):
        grid[row, 0].set_ylabel("produced interval\n(SD within condition)")
    if len(groups) > 1:
        handles = [
            Line2D([], [], color=looks[g].colour, marker=looks[g].marker, linestyle="none") for g in groups
        ]
        figure.legend(
            handles, [shorten(g) for g in groups], title="context", loc="outside upper center",
            ncols=count_columns(groups),
        )  # fmt: skip
    alt = _describe_pushes(within, len(table))
    more = pushes["initial"].shape[1]
    left = f" The first {columns} of {more} latents are drawn." if more > columns else ""
    below = (
        " Below, within conditions: each push less its condition's mean, against log produced interval "
        f"less its condition's mean over its SD, with the least-squares line.{_say_rank(centred)} Pushes are "
        "estimated from all spikes of a trial, so this describes; the test is under Prediction, from spikes "
        "up to a cutoff only."
        if within is not None and centred is not None
        else " No relation to the produced interval is drawn: too few trials have a response."
    )
    caption = (
        "Top: posterior means of both pushes of each trial"
        + (", larger marks for longer sample intervals" if len(run.samples) > 1 else "")
        + "; the grey cross is ±1 posterior SD of the median trial. The initial push is read as the state at "
        "the set cue, the sustained push as its input summed over a trial of median length; both hold what "
        f"the condition adds and what the trial adds.{below}{left}"
    )
    return Drawn(key, title, write_svg(figure, key, title, alt), alt, caption)


def size_marks(table: pd.DataFrame, samples: tuple[float, ...]) -> np.ndarray:
    """Return the area of each trial's mark, from the shortest sample interval to the longest."""
    if len(samples) < 2:
        return np.full(len(table), 15.0)
    share = (table["sample_s"].to_numpy(float) - samples[0]) / (samples[-1] - samples[0])
    return np.asarray(SIZES[0] + np.nan_to_num(share, nan=0.5) * (SIZES[1] - SIZES[0]))


def share_of_first(centred: np.ndarray) -> float | None:
    """Return the share of variance that the first direction of (trial, latent) deviations holds."""
    used = centred[np.isfinite(centred).all(axis=1)]
    variances = np.linalg.svd(used, compute_uv=False) ** 2
    return float(variances[0] / variances.sum()) if variances.sum() > 0 else None


def _say_rank(centred: dict[str, np.ndarray] | None) -> str:
    parts = []
    for name in PUSHES:
        push = centred[name] if centred is not None else np.empty((0, 0))
        if push.shape[1] > 1 and (share := share_of_first(push)) is not None and share > 0.995:
            parts.append(name)
    if not parts:
        return ""
    return (
        f" Within conditions the {join_words(parts)} push varies along one direction only, so its panels "
        "repeat one another."
    )


def center_within(table: pd.DataFrame, pushes: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """Return pushes less their condition means, and log produced interval standardised in each condition.

    Trials without a response, and conditions with fewer than three responses, are NaN.
    """
    log_interval = np.log(table["produced_s"].where(table["produced_s"] > 0).astype(float))
    condition = table["condition"]
    by = log_interval.groupby(condition)
    z = (log_interval - by.transform("mean")) / by.transform("std").where(by.transform("count") >= 3)
    answered = np.isfinite(z.to_numpy())
    centred = {"produced": z.to_numpy()}
    for name, push in pushes.items():
        frame = pd.DataFrame(np.where(answered[:, None], push, np.nan))
        centred[name] = (frame - frame.groupby(condition).transform("mean")).to_numpy()
    return centred


def relate_within(run: RunFolder) -> pd.DataFrame | None:
    """Return the within-condition correlation of each push with the produced interval.

    Returns
    -------
    DataFrame or None
        Indexed by push and latent (from 1): `r` and `n`. None where fewer than ten trials count.
    """
    if run.latents is None or run.trials is None:
        return None
    table = trials_in_order(run, run.latents["trial"].values.tolist())
    pushes = {name: run.latents[name].transpose("trial", "latent").values for name in PUSHES}
    centred = center_within(table, pushes)
    used = np.isfinite(centred["produced"])
    if used.sum() < 10:
        return None
    z, rows = centred["produced"][used], []
    for name in pushes:
        for latent, push in enumerate(centred[name][used].T, start=1):
            size = np.sqrt((push @ push) * (z @ z))
            r = float(push @ z / size) if size > 0 else float("nan")
            rows.append({"push": name, "latent": latent, "r": r, "n": int(used.sum())})
    return pd.DataFrame(rows).set_index(["push", "latent"])


def _draw_relation(
    axes: Axes,
    centred: dict[str, np.ndarray],
    name: str,
    latent: int,
    group: np.ndarray,
    looks: dict[str, Look],
) -> None:
    x, z = centred[name][:, latent], centred["produced"]
    used = np.isfinite(x) & np.isfinite(z)
    for member, look in looks.items():
        rows = used & (group == member)
        axes.scatter(x[rows], z[rows], s=10, marker=look.marker, color=look.colour, alpha=0.4, linewidths=0)
    if (spread := float(x[used] @ x[used])) > 0:
        slope = float(x[used] @ z[used]) / spread
        ends = np.array([x[used].min(), x[used].max()])
        axes.plot(ends, slope * ends, color=INK, linewidth=1.5)


def _draw_uncertainty(axes: Axes, latents: xr.Dataset, latent: int) -> None:
    if "initial_cov" not in latents or "sustained_cov" not in latents:
        return
    sizes = [
        float(np.sqrt(np.nanmedian(latents[f"{name}_cov"].transpose("trial", ...).values[:, latent, latent])))
        for name in PUSHES
    ]
    (x0, x1), (y0, y1) = axes.get_xlim(), axes.get_ylim()
    at = x1 - sizes[0] - 0.03 * (x1 - x0), y0 + sizes[1] + 0.03 * (y1 - y0)
    axes.errorbar(*at, xerr=sizes[0], yerr=sizes[1], color=SOFT, linewidth=1.4, zorder=4)


def _describe_pushes(within: pd.DataFrame | None, n: int) -> str:
    start = f"Initial and sustained push of {n} single trials, for each latent."
    if within is None:
        return f"{start} Too few responses to relate them to the produced interval."
    parts = [
        f"{push} push, "
        f"{join_words(f'latent {latent} r = {write_number(row.r)}' for (_, latent), row in rows.iterrows())}"
        for push, rows in within.groupby(level="push", sort=False)
    ]
    return f"{start} Within conditions their correlation with the produced interval is: {'; '.join(parts)}."
