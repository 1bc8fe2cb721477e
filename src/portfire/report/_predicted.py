"""Figure: predicted against produced interval on held-out trials."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter, MaxNLocator

from portfire.report._decode_words import explain_no_decode
from portfire.report._folder import RunFolder
from portfire.report._style import (
    FAINT,
    INK,
    SOFT,
    Absent,
    Drawn,
    Look,
    assign_looks,
    make_figure,
    shorten,
    write_svg,
)
from portfire.report._words import MINUS, write_interval, write_number, write_short

KEY, TITLE = "predicted", "Predicted against produced interval"
N_GROUPS = 6
FEATURE_WORDS = {
    "initial": "the initial push",
    "sustained": "the sustained push",
    "initial+sustained": "both pushes",
    "state": "the state at the cutoff",
    "counts": "raw counts, one a unit",
}


def draw_predicted(run: RunFolder) -> Drawn | Absent:
    """Draw held-out predictions of the best feature set at the middle cutoff."""
    row = choose_row(run)
    if row is None:
        return Absent(KEY, TITLE, explain_no_decode(run))
    table = select_predictions(run, row)
    if table is None or table.empty:
        return Absent(KEY, TITLE, "the run folder holds no such predictions (decode.parquet)")
    groups = run.contexts or ("all trials",)
    looks = assign_looks(groups)
    group = _find_groups(run, table)
    figure = make_figure(4.3)
    left, right = figure.subplots(1, 2)
    produced, predicted = (table[name].to_numpy(float) for name in ("produced_s", "predicted_s"))
    _scatter(left, predicted, produced, group, looks)
    span = [min(predicted.min(), produced.min()), max(predicted.max(), produced.max())]
    left.plot(span, span, color=INK, linewidth=1, zorder=1)
    left.set(xlabel="predicted interval (s)", ylabel="produced interval (s)", title="All conditions")
    baseline = table["baseline_s"].to_numpy(float)
    x, y = 100 * (predicted / baseline - 1), 100 * (produced / baseline - 1)
    _scatter(right, x, y, group, looks)
    right.axhline(0, color=FAINT, linewidth=1, zorder=0)
    right.axvline(0, color=FAINT, linewidth=1, zorder=0)
    ends = np.array([x.min(), x.max()])
    right.plot(ends, ends, color=INK, linewidth=1, zorder=4)
    centres, means, errors = average_groups(x, y)
    right.errorbar(
        centres, means, yerr=1.96 * errors, color=INK, marker="o", linestyle="none", markersize=7,
        markeredgecolor="white", zorder=5,
    )  # fmt: skip
    right.set(
        xlabel="predicted, against the condition's mean (%)",
        ylabel="produced, against the condition's mean (%)",
        title=f"Within conditions: R² {write_number(row['r2_within_condition'])}",
    )
    for axis in (right.xaxis, right.yaxis):
        axis.set_major_locator(MaxNLocator(6))
        axis.set_major_formatter(FuncFormatter(lambda v, _: f"{v:+g}".replace("-", MINUS) if v else "0"))
    _add_legend(figure, groups, looks)
    features = FEATURE_WORDS.get(str(row["features"]), shorten(row["features"]))
    cutoff = write_short(row["cutoff_s"])
    known = f"predicted and produced interval correlate at r = {write_correlation(predicted, produced)}"
    if len(np.unique(table["condition"])) > 1:
        alone = write_correlation(baseline, produced)
        known += f" over all conditions, where the condition means alone reach r = {alone}"
    r2, bounds = write_number(row["r2_within_condition"]), write_interval(row.get("ci95"))
    alt = (
        f"Held-out predictions of {len(table)} trials from {features}, with spikes up to {cutoff} s: "
        f"{known}. Within conditions R² is {r2} (95 % interval {bounds})."
    )
    caption = (
        f"Each mark is a held-out trial, predicted from {features}, with spikes up to {cutoff} s: the middle "
        "cutoff, and the feature set with the largest R² there, a choice that flatters it a little. Left: in "
        "seconds; the differences between conditions are in the baseline, whatever the spikes say. Right: "
        "against the baseline, the geometric mean of the condition's training trials; large marks are means "
        f"of {len(centres)} groups by prediction, with 95 % intervals. The lines are equality. Predictions "
        "vary less than intervals, as those of a regression do."
    )
    return Drawn(KEY, TITLE, write_svg(figure, KEY, TITLE, alt), alt, caption)


def choose_row(run: RunFolder) -> Mapping[str, Any] | None:
    """Return the decode row with the largest R² at the middle cutoff (the earlier of two)."""
    rows = [
        r
        for r in run.rows("decode")
        if r.get("variant", "all") == "all" and r.get("r2_within_condition") is not None
    ]
    if not rows:
        return None
    cutoffs = sorted({float(r["cutoff_s"]) for r in rows})
    middle = cutoffs[(len(cutoffs) - 1) // 2]
    return max(
        (r for r in rows if float(r["cutoff_s"]) == middle), key=lambda r: float(r["r2_within_condition"])
    )


def select_predictions(run: RunFolder, row: Mapping[str, Any]) -> pd.DataFrame | None:
    """Return the held-out predictions behind a decode row."""
    table = run.predictions
    if table is None:
        return None
    here = np.isclose(table["cutoff_s"].astype(float), float(row["cutoff_s"]))
    here &= (table["features"] == row["features"]).to_numpy()
    if "variant" in table.columns:
        here &= (table["variant"] == "all").to_numpy()
    return table[here].dropna(subset=["produced_s", "predicted_s", "baseline_s"]).reset_index(drop=True)


def average_groups(x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return mean x, mean y and the standard error of mean y in groups of like size by x."""
    order = np.argsort(x, kind="stable")
    parts = [part for part in np.array_split(order, max(1, min(N_GROUPS, len(x) // 5))) if len(part) > 1]
    means = np.array([[x[part].mean(), y[part].mean()] for part in parts]).reshape(-1, 2)
    errors = np.array([y[part].std(ddof=1) / np.sqrt(len(part)) for part in parts])
    return means[:, 0], means[:, 1], errors


def write_correlation(x: np.ndarray, y: np.ndarray) -> str:
    """Return the correlation as text, "not given" where either does not vary."""
    if len(x) < 2 or not np.ptp(x) > 0 or not np.ptp(y) > 0:
        return write_number(None)
    return write_number(np.corrcoef(x, y)[0, 1])


def _find_groups(run: RunFolder, table: pd.DataFrame) -> np.ndarray:
    if not run.contexts or run.trials is None:
        return np.full(len(table), "all trials", dtype=object)
    context = run.trials.assign(trial=run.trials["trial"].astype(str)).set_index("trial")["context"]
    return table["trial"].astype(str).map(context.astype(str)).to_numpy(dtype=object)


def _scatter(axes: Axes, x: np.ndarray, y: np.ndarray, group: np.ndarray, looks: dict[str, Look]) -> None:
    for name, look in looks.items():
        rows = group == name
        axes.scatter(
            x[rows], y[rows], s=14, marker=look.marker, color=look.colour, alpha=0.5, linewidths=0, zorder=2
        )


def _add_legend(figure: Any, groups: tuple[str, ...], looks: dict[str, Look]) -> None:
    handles = [
        Line2D([], [], color=looks[g].colour, marker=looks[g].marker, linestyle="none")
        for g in (groups if len(groups) > 1 else ())
    ]
    labels = [shorten(g) for g in groups] if len(groups) > 1 else []
    handles += [
        Line2D([], [], color=INK, linewidth=1),
        Line2D([], [], color=INK, marker="o", markersize=7, markeredgecolor="white", linewidth=1.5),
    ]
    labels += ["equality", "group means"]
    figure.legend(handles, labels, loc="outside upper center", ncols=min(5, len(labels)), labelcolor=SOFT)
