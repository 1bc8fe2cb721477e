"""Figure: how long each source's push lasts, by its profile and by its time course."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from matplotlib.axes import Axes

from portfire.report._folder import RunFolder
from portfire.report._style import (
    COLOURS,
    FAINT,
    SOFT,
    Absent,
    Drawn,
    add_zero_line,
    assign_looks,
    make_figure,
    shorten,
    write_svg,
)
from portfire.report._words import begin_sentence, name_source, write_number, write_short

_TOP = 12.0
_DROP = 1.92


def draw_persistence(run: RunFolder) -> Drawn | Absent:
    """Draw the profile over the persistence, by number of latent dimensions, and the push by time."""
    key, title = "persistence", "How long each push lasts"
    rows = [c for c in run.rows("contrasts") if c.get("persistence_profile")]
    if not rows:
        why = "the result holds no contrasts" if not run.rows("contrasts") else "the result holds no profile"
        return Absent(key, title, why)
    chosen = run.part("chosen").get("latent_dim")
    figure = make_figure(0.6 + 2.15 * len(rows))
    grid = figure.subplots(len(rows), 2, squeeze=False, width_ratios=(1.15, 1))
    alts = []
    for (left, right), row in zip(grid, rows, strict=True):
        name = shorten(name_source(row))
        _draw_profile(left, row, chosen)
        left.set_title(f"{name}: log-likelihood lost")
        levels = _draw_course(right, row.get("course"))
        right.set_title(f"{name}: push by time" if levels else f"{name}: no time course")
        alts.append(f"{name}: {row.get('persistence_words')}")
    grid[-1][0].set_xlabel("persistence h (s); 0: initial, ∞: to the response")
    for right in [axes for axes in grid[:, 1] if axes.axison][-1:]:
        right.set_xlabel("time from the set cue (s)")
    handles, labels = max(
        (axes.get_legend_handles_labels() for axes in grid[:, 0]), key=lambda pair: len(pair[1])
    )
    figure.legend(handles, labels, loc="outside upper left", ncols=len(labels))
    alt = f"Persistence of the pushes. {'. '.join(alts)}."
    caption = (
        "Left: what the log-likelihood on all trials loses (nats) when the source's push must last h "
        "seconds, for the chosen number of latent dimensions (solid) and its neighbours; below the dashed "
        f"line, {_DROP} nats, lies the 95 % interval; losses above {_TOP:g} are drawn at the top. Right: the "
        "push in the bin of the set cue (mark, log rate, scale on the right) and a second after it (lines, "
        "log rate/s), smoothed, with 95 % bands, along the axis on which most of it lies; an initial push "
        "is the mark alone, a sustained one a level line."
    )
    return Drawn(key, title, write_svg(figure, key, title, alt), alt, caption)


def _draw_profile(axes: Axes, row: Mapping[str, Any], chosen: Any) -> None:
    profiles = {int(p["latent_dim"]): p for p in row["persistence_profile"]}
    looks = assign_looks([str(d) for d in sorted(profiles)])
    labels: list[str] = []
    for dim, profile in sorted(profiles.items()):
        look = looks[str(dim)]
        losses = np.minimum(np.array(profile["loss_nats"], float), _TOP)
        labels = ["∞" if h is None else write_short(h) for h in profile["grid_s"]]
        main = dim == chosen
        axes.plot(
            range(len(losses)),
            losses,
            color=look.colour,
            marker=look.marker,
            markersize=4.5,
            linestyle="-" if main else (0, (4, 2)),
            linewidth=1.8 if main else 1.1,
            label=f"D = {dim}",
        )
    axes.axhline(_DROP, color=SOFT, linestyle=(0, (4, 3)), linewidth=0.9)
    axes.set_xticks(range(len(labels)), labels)
    axes.set_ylim(_TOP + 0.6, -0.6)
    axes.set_ylabel("nats lost")
    axes.grid(axis="x", color=FAINT, linewidth=0.6)


def _draw_course(axes: Axes, course: Any) -> int:
    if not isinstance(course, Mapping) or "rate" not in course:
        axes.axis("off")
        reason = course.get("absent") if isinstance(course, Mapping) else None
        words = begin_sentence(str(reason)) if reason else "What differs from trial to trial has no sign."
        axes.text(0.02, 0.6, shorten(words, 60), color=SOFT, transform=axes.transAxes)
        return 0
    edges = np.array(course["edges_s"], float)
    looks = assign_looks([str(level) for level in course["levels"]])
    twin = axes.twinx()
    twin.spines["right"].set_visible(True)
    extent, marks = [0.0], [0.0]
    for k, (level, look) in enumerate(looks.items()):
        rate, low, high = (np.array(course[name][k], float) for name in ("rate", "rate_low", "rate_high"))
        axes.stairs(rate, edges, color=look.colour, linewidth=1.8, baseline=None, label=shorten(level, 14))
        axes.fill_between(
            np.repeat(edges, 2)[1:-1],
            np.repeat(low, 2),
            np.repeat(high, 2),
            color=look.colour,
            alpha=0.18,
            lw=0,
        )
        cue, se = float(course["at_cue"][k]), float(course["at_cue_se"][k])
        twin.errorbar(
            [-0.04 * edges[-1] * (1 + k)],
            [cue],
            yerr=[1.96 * se],
            color=look.colour,
            marker=look.marker,
            capsize=2,
        )
        extent += [float(low.min()), float(high.max())]
        marks += [cue - 1.96 * se, cue + 1.96 * se]
    # Zero at one height on both sides.
    for side, values in ((axes, extent), (twin, marks)):
        reach = 1.08 * max(abs(min(values)), abs(max(values)), 1e-6)
        side.set_ylim(-reach, reach)
    add_zero_line(axes, vertical=False)
    axes.set_ylabel("log rate/s")
    twin.set_ylabel("at the cue (log rate)", color=COLOURS[0])
    if len(looks) > 1:
        axes.legend(loc="upper right")
    return len(looks)


def state_persistence(contrast: Mapping[str, Any]) -> str | None:
    """Return how long the push lasts and how that sits with the verdict; None where not in the result."""
    words = contrast.get("persistence_words")
    if not words:
        return None
    text = f"{begin_sentence(str(words))}."
    summary, verdict = contrast.get("persistence_s"), contrast.get("verdict")
    if not isinstance(summary, Mapping) or verdict not in ("initial", "sustained"):
        return text
    low, high = summary.get("ci95") or (None, None)
    inside = low == 0 if verdict == "initial" else high is None
    if inside:
        return f"{text} That agrees with the verdict."
    given = f"{write_number(low, 2)} s to " + (
        "the response" if high is None else f"{write_number(high, 2)} s"
    )
    return (
        f"{text} The verdict names the route that is needed out of two; one push that lasts {given} "
        "describes these data better than that route alone."
    )
