"""The sentences of a verdict."""

from __future__ import annotations

from collections.abc import Mapping
from math import isfinite
from typing import TYPE_CHECKING

from ..errors import PortfireError
from ._gain import Gain

if TYPE_CHECKING:
    from ._verdict import Evidence, Status

PUSHES = ("initial", "sustained")

AMONG = {
    "interval": "Between sample intervals",
    "context": "Between contexts",
    "trial": "Between trials of one condition",
}
PUSH = {
    "initial": "an initial push (a shift of the latent state at the set cue)",
    "sustained": "a sustained push (an input to the latent state that acts until the response)",
}


def check_source(source: str) -> None:
    """Refuse a source that does not exist."""
    if source not in AMONG:
        raise PortfireError(f"the source is {source!r}; it must be one of {', '.join(AMONG)}")


def say_gain(evidence: Evidence) -> str:
    """Gain with its interval and p value."""
    low, high = evidence.gain.ci95
    p = f"p = {evidence.p:.2g}" if evidence.p >= 0.001 else "p < 0.001"
    return f"{evidence.gain.nats_per_trial:.2f} nats a trial (95 % interval {low:.2f} to {high:.2f}, {p})"


def say_trials(n_trials: int | None) -> str:
    """Clause on the trials that would close an open route."""
    return "" if n_trials is None else f"; about {n_trials} trials would settle it if the gain stays as it is"


def say_neither(source: str, total: Gain, min_gain: float) -> str:
    """Sentence where no push is worth having."""
    return (
        f"{AMONG[source]}, no push of the latent state is worth having: both routes together gain at most "
        f"{total.ci95[1]:.2g} nats a held-out trial, less than {min_gain:g}."
    )


def say_both(source: str, route: Mapping[str, Evidence]) -> str:
    """Sentence where both routes are needed."""
    return (
        f"{AMONG[source]}, the latent state differs by both routes: without {PUSH['initial']} "
        f"held-out trials lose {say_gain(route['initial'])}, and without {PUSH['sustained']} "
        f"{say_gain(route['sustained'])}."
    )


def say_one(source: str, push: str, other: str, route: Mapping[str, Evidence], min_gain: float) -> str:
    """Sentence where one route is needed and the other is not."""
    high = route[other].gain.ci95[1]
    return (
        f"{AMONG[source]}, the latent state differs by {PUSH[push]}: without it held-out trials lose "
        f"{say_gain(route[push])}, while the {other} route adds at most {max(high, 0.0):.2g}, "
        f"less than {min_gain:g}."
    )


def say_open(
    source: str,
    undecided: tuple[str, ...],
    status: Mapping[str, Status],
    route: Mapping[str, Evidence],
    n_trials: int | None,
) -> str:
    """Sentence where a route is open."""
    parts = [f"{PUSH[name]} gains {say_gain(route[name])} and stays open" for name in undecided]
    parts += [f"{PUSH[name]} is {status[name]}" for name in PUSHES if name not in undecided]
    return f"{AMONG[source]}, these data cannot tell: {', '.join(parts)}{say_trials(n_trials)}."


def say_either(source: str, total: Evidence, min_gain: float, n_trials: int | None) -> str:
    """Sentence where neither route is needed beside the other, though both together may be."""
    why = (
        "either route can stand in for the other, and both together"
        if total.gain.ci95[0] >= min_gain
        else f"neither route is needed beside the other, and whether both are worth {min_gain:g} is open: "
        "they"
    )
    return f"{AMONG[source]}, these data cannot tell: {why} gain {say_gain(total)}{say_trials(n_trials)}."


def say_disagreement(source: str, needed: tuple[str, ...], min_gain: float) -> str:
    """Sentence where a route is needed and yet both together gain nothing."""
    routes = " and ".join(PUSH[name] for name in needed)
    return (
        f"{AMONG[source]}, these data cannot tell: {routes} would be needed, but both routes together "
        f"gain less than {min_gain:g} nats a trial, so the figures disagree."
    )


def say_mimic(source: str, time_constant_s: float, trial_s: float) -> str:
    """Sentence on a mode that outlasts the trial."""
    decay = (
        f"decays with a time constant of {time_constant_s:.3g} s, longer than a trial ({trial_s:.3g} s)"
        if isfinite(time_constant_s)
        else f"does not decay within a trial ({trial_s:.3g} s)"
    )
    return (
        f"{AMONG[source]}, the account with only an initial push carries it in a mode that {decay}: "
        "over one trial that is a sustained input under another name."
    )
