"""An inspection as plain text."""

from __future__ import annotations

from typing import Any

import numpy as np

_MOST_ROWS = 12


def format_inspection(found: dict[str, Any]) -> str:
    """Lay out what `inspect_session` found as plain text.

    Parameters
    ----------
    found : dict
        Result of `inspect_session`.

    Returns
    -------
    str
        Lines of at most about a hundred characters, without colours; ends with a newline.
    """
    session, use = found["session"], found["use"]
    lines = [
        f"Session   {session['source']}",
        f"          {session['units']} units, {session['trials']} trials, {session['spikes']} spikes; "
        f"spikes from {session['first_spike_s']:.1f} to {session['last_spike_s']:.1f} s, "
        f"set cues from {session['first_set_s']:.1f} to {session['last_set_s']:.1f} s",
        f"Used      {use['units_used']} units, {use['trials_used']} trials, {use['conditions']} "
        f"condition{'s' if use['conditions'] != 1 else ''}; bins of {1000 * use['bin_s']:g} ms, "
        f"{use['bins_median']:g} a trial (median), {use['bins_max']} at most",
        *(
            [f"          run-up of {use['before_set_s']:g} s before the set cue"]
            if use["before_set_s"]
            else []
        ),
        "",
        *_format_behaviour(found),
        "",
        *_format_rates(found),
        "",
        *_format_time(found),
        "",
        *_format_left_out("Units", found["units_left_out"]),
        *_format_left_out("Trials", found["trials_left_out"]),
        "",
        "Warnings",
        *([f"  - {text}" for text in found["warnings"]] or ["  none"]),
    ]
    return "\n".join(lines) + "\n"


def _number(value: float | None, digits: int = 3) -> str:
    return "–" if value is None else f"{value:.{digits}f}"


def _format_behaviour(found: dict[str, Any]) -> list[str]:
    behaviour = found["behaviour"]
    rows = behaviour["conditions"]
    head = ["context", "sample s", "n", "mean s", "SD s", "CV"]
    with_target = "bias_s" in rows[0]
    table = [head + (["target s", "bias s"] if with_target else [])]
    for row in rows:
        cells = [
            "–" if row["context"] is None else row["context"],
            "–" if row["sample_s"] is None else f"{row['sample_s']:g}",
            str(row["n"]),
            *(_number(row[name]) for name in ("mean_s", "sd_s", "cv")),
        ]
        table.append(cells + ([_number(row["target_s"]), _number(row["bias_s"])] if with_target else []))
    lines = ["Produced intervals", *_align(table)]
    weber, interval = behaviour["weber_fraction"], behaviour["weber_ci95"]
    if weber is None:
        lines.append("  Weber fraction: none (it needs two conditions with two responses each)")
    else:
        within = "" if interval is None else f" (95 % interval {interval[0]:.3f} to {interval[1]:.3f})"
        lines.append(f"  Weber fraction {weber:.3f}{within}: slope of within-condition SD on mean")
    slope = found["interval_slope"]
    if slope is not None:
        lines.append(
            f"  Slope on the sample interval {slope['slope']:.3f} ± {slope['se']:.3f} (standard error)"
        )
    return lines


def _align(table: list[list[str]]) -> list[str]:
    widths = [max(len(row[place]) for row in table) for place in range(len(table[0]))]
    return [
        "  "
        + "  ".join(
            cell.rjust(width) if place else cell.ljust(width) for place, (cell, width) in enumerate(cells)
        )
        for cells in (list(zip(row, widths, strict=True)) for row in table)
    ]


def _format_rates(found: dict[str, Any]) -> list[str]:
    rates = np.array([row["rate_hz"] for row in found["rates"]])
    low, middle, high = np.quantile(rates, [0, 0.5, 1])
    lines = [f"Rates within trials: median {middle:.1f} spikes/s, from {low:.1f} to {high:.1f}"]
    drift = found["drift"]
    lines.append(
        f"  {drift['n_units']} of {len(rates)} units ({100 * drift['share']:.0f} %) drift over the session "
        f"(rank correlation with trial time, p < {drift['level']:g}; chance gives {100 * drift['level']:g} %)"
    )
    ranked = sorted(found["rates"], key=lambda row: -abs(row["drift_rho"] or 0.0))
    worst = [row for row in ranked if row["drift_p"] is not None and row["drift_p"] < drift["level"]]
    table = [["unit", "spikes/s", "rho", "p"]]
    for row in worst[:_MOST_ROWS]:
        table.append(
            [row["unit"], f"{row['rate_hz']:.1f}", f"{row['drift_rho']:+.2f}", f"{row['drift_p']:.1g}"]
        )
    if len(worst) > 0:
        lines += _align(table)
    if len(worst) > _MOST_ROWS:
        lines.append(f"  … and {len(worst) - _MOST_ROWS} more")
    return lines


def _format_time(found: dict[str, Any]) -> list[str]:
    confounding, interval = found["confounding"], found["interval_drift"]
    lines = ["Trial time"]
    for name, word in (("context_r2", "context"), ("sample_r2", "sample interval")):
        if confounding[name] is not None:
            lines.append(
                f"  explains {100 * confounding[name]:.0f} % of the variance of the {word} (adjusted R²)"
            )
    if interval is None or interval["p"] is None:
        lines.append("  produced intervals: too few responses to see a drift")
    else:
        lines.append(
            f"  produced intervals: {100 * interval['last_third_over_first']:+.1f} % from first to last "
            f"third of trials, rank correlation {interval['rho']:+.2f} (p = {interval['p']:.2g})"
        )
    return lines


def _format_left_out(word: str, left_out: dict[str, str]) -> list[str]:
    if not left_out:
        return [f"{word} left out: none"]
    lines = [f"{word} left out: {len(left_out)}"]
    lines += [f"  {label}: {reason}" for label, reason in list(left_out.items())[:_MOST_ROWS]]
    if len(left_out) > _MOST_ROWS:
        lines.append(f"  … and {len(left_out) - _MOST_ROWS} more")
    return lines
