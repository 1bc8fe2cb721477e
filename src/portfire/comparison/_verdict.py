"""From gains and p values to a verdict on one source, and the sentence that says it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from math import ceil
from typing import Literal

from ..errors import PortfireError
from ._gain import Gain
from ._words import (
    AMONG,
    PUSHES,
    check_source,
    say_both,
    say_disagreement,
    say_either,
    say_mimic,
    say_neither,
    say_one,
    say_open,
)

Label = Literal["initial", "sustained", "both", "neither", "undetermined"]
Status = Literal["needed", "not needed", "open"]

MAX_TRIALS = 1_000_000
# Half the 95 % quantile of χ²₁: a profile interval leaves out what is this much lower.
PROFILE_DROP = 1.92

_ROUTES_OF: dict[str, frozenset[str]] = {
    "initial": frozenset({"initial"}),
    "sustained": frozenset({"sustained"}),
    "both": frozenset(PUSHES),
    "neither": frozenset(),
}


@dataclass(frozen=True)
class Evidence:
    """What is known about one entry of a contrast.

    Attributes
    ----------
    gain : Gain
        Held-out gain, nats a trial.
    p : float
        One-sided p value, adjusted over all entries of the run.
    """

    gain: Gain
    p: float

    def __post_init__(self) -> None:
        if not 0.0 <= self.p <= 1.0:
            raise PortfireError(f"an adjusted p value must lie in [0, 1]; got {self.p}")

    def to_row(self) -> dict[str, object]:
        """Entry of a contrast in ``result.json``."""
        return {"nats_per_trial": self.gain.nats_per_trial, "ci95": list(self.gain.ci95), "p": self.p}


@dataclass(frozen=True)
class Verdict:
    """How one source pushes the latent state.

    Attributes
    ----------
    source : str
        ``interval``, ``context`` or ``trial``.
    label : str
        ``initial``, ``sustained``, ``both``, ``neither`` or ``undetermined``.
    open : tuple of str
        Routes that are open; empty unless undetermined.
    trials_to_close : int or None
        Trials that would take the open intervals off `min_gain` if the gains stay as they are; None where
        nothing is open or more trials would not settle it.
    words : str
        The verdict in one plain sentence.
    needed : tuple of str
        Routes that are needed, whatever the label.
    """

    source: str
    label: Label
    open: tuple[str, ...]
    trials_to_close: int | None
    words: str
    needed: tuple[str, ...] = ()


def rate_route(evidence: Evidence, level: float, min_gain: float) -> Status:
    """Say whether a route is needed, not needed or open.

    Parameters
    ----------
    evidence : Evidence
        Of the route's unique gain.
    level : float
        Largest adjusted p value that counts as evidence.
    min_gain : float
        Smallest gain worth having, nats a trial.

    Returns
    -------
    str
        ``needed``: p at most `level` and gain above `min_gain`. ``not needed``: the upper end of the 95 %
        interval below `min_gain`, whatever p is. ``open``: all else; a large p is never evidence of absence.
    """
    # A significant gain above min_gain cannot have an upper end below it, so the order does not matter.
    if evidence.gain.ci95[1] < min_gain:
        return "not needed"
    if evidence.p <= level and evidence.gain.nats_per_trial > min_gain:
        return "needed"
    return "open"


def trials_to_close(gain: Gain, n_trials: int, min_gain: float) -> int | None:
    """Trials at which the 95 % interval of a gain no longer holds `min_gain`.

    Parameters
    ----------
    gain : Gain
        Of `n_trials` scored trials.
    n_trials : int
        Trials now.
    min_gain : float
        Smallest gain worth having, nats a trial.

    Returns
    -------
    int or None
        With the gain as it is and the standard error falling as the root of the number of trials. None where
        the interval is off `min_gain` already, or a million trials would not take it off.
    """
    distance = abs(gain.nats_per_trial - min_gain)
    half_width = (gain.ci95[1] - gain.ci95[0]) / 2.0
    if half_width < distance:
        return None
    if distance == 0.0 or n_trials * (half_width / distance) ** 2 > MAX_TRIALS:
        return None
    return max(n_trials + 1, ceil(n_trials * (half_width / distance) ** 2))


def judge(
    source: str,
    initial: Evidence,
    sustained: Evidence,
    total: Evidence,
    n_trials: int,
    level: float = 0.05,
    min_gain: float = 0.05,
) -> Verdict:
    """Reach the verdict on one source at one number of latent dimensions.

    Parameters
    ----------
    source : str
        ``interval``, ``context`` or ``trial``.
    initial, sustained : Evidence
        Of the unique gain of each route: the full account minus the account without the route.
    total : Evidence
        Of the gain of both routes together.
    n_trials : int
        Scored trials.
    level : float, default 0.05
        Largest adjusted p value that counts as evidence.
    min_gain : float, default 0.05
        Smallest gain worth having, nats a trial.

    Returns
    -------
    Verdict
        One route needed and the other not: that route. Both needed: ``both``. Upper end of the total's
        interval below `min_gain`, and neither needed: ``neither``. All else: ``undetermined``.

    Raises
    ------
    PortfireError
        If the source is unknown.
    """
    check_source(source)
    route = {"initial": initial, "sustained": sustained}
    status = {name: rate_route(evidence, level, min_gain) for name, evidence in route.items()}
    needed = tuple(name for name in PUSHES if status[name] == "needed")
    empty = total.gain.ci95[1] < min_gain
    if empty and not needed:
        return Verdict(source, "neither", (), None, say_neither(source, total.gain, min_gain))
    if not empty and len(needed) == 2:
        return Verdict(source, "both", (), None, say_both(source, route), needed)
    if not empty and len(needed) == 1 and "open" not in status.values():
        other = PUSHES[1 - PUSHES.index(needed[0])]
        words = say_one(source, needed[0], other, route, min_gain)
        label: Label = "initial" if needed[0] == "initial" else "sustained"
        return Verdict(source, label, (), None, words, needed)
    if empty:
        words = say_disagreement(source, needed, min_gain)
        return Verdict(source, "undetermined", needed, None, words, needed)
    undecided = tuple(name for name in PUSHES if status[name] == "open")
    if not undecided:
        n_needed = trials_to_close(total.gain, n_trials, min_gain)
        words = say_either(source, total, min_gain, n_needed)
        return Verdict(source, "undetermined", PUSHES, n_needed, words)
    counts = [trials_to_close(route[name].gain, n_trials, min_gain) for name in undecided]
    known = [count for count in counts if count is not None]
    n_needed = max(known) if len(known) == len(counts) else None
    words = say_open(source, undecided, status, route, n_needed)
    return Verdict(source, "undetermined", undecided, n_needed, words, needed)


def reconcile(
    verdict: Verdict,
    at_dims: Mapping[int, Verdict],
    latent_dim: int,
    ends_nats: Mapping[int, float] | None = None,
) -> Verdict:
    """Set a verdict beside those at other numbers of latent dimensions.

    An initial push in one spare mode that does not decay is a sustained push, so a verdict stands only if it
    is the same with one dimension more. Fewer dimensions are reported, and do not overrule.

    One change is no contradiction. With a dimension to spare each route can stand in for the other, and
    the unique gains of both may vanish although the push is there: the verdict at D + 1 is then
    ``undetermined``. What is left to compare are the two ends of the persistence, the accounts with one push
    alone, which have as many parameters. Where the end that the verdict does not name is worse by more than
    half the 95 % quantile of χ² with one degree of freedom, it lies outside the profile interval of
    the persistence, wherever its maximum is; if that holds at D and at D + 1, the verdict stands.

    No other change is forgiven. ``both`` at D + 1, or the other route needed there, is evidence for a second
    push, on which a comparison of single pushes has nothing to say; ``neither`` says that the larger model
    does without the source; and the other single end contradicts the verdict outright.

    Parameters
    ----------
    verdict : Verdict
        At the chosen number of latent dimensions.
    at_dims : mapping of int to Verdict
        At other numbers of latent dimensions.
    latent_dim : int
        The chosen number D.
    ends_nats : mapping of int to float, optional
        By number of latent dimensions, the log-likelihood of the account with the sustained push alone less
        that with the initial push alone (nats, all trials).

    Returns
    -------
    Verdict
        As it was, or ``undetermined`` where the label changes at D + 1.

    Raises
    ------
    PortfireError
        If the verdicts are on different sources.
    """
    strangers = sorted({other.source for other in at_dims.values()} - {verdict.source})
    if strangers:
        raise PortfireError(f"a verdict on {verdict.source} cannot be set beside one on {strangers[0]}")
    above = at_dims.get(latent_dim + 1)
    if verdict.label == "undetermined":
        return verdict
    if above is None:
        note = f"; this was not checked with {latent_dim + 1} latent dimensions."
        return replace(verdict, words=verdict.words.removesuffix(".") + note)
    if above.label == verdict.label or _only_faded(verdict, above, latent_dim, ends_nats or {}):
        return verdict
    if above.label == "undetermined":
        undecided = above.open or PUSHES
    else:
        changed = _ROUTES_OF[verdict.label] ^ _ROUTES_OF[above.label]
        undecided = tuple(name for name in PUSHES if name in changed)
    words = (
        f"{AMONG[verdict.source]}, these data cannot tell: with {latent_dim} latent dimensions the verdict "
        f"is {verdict.label}, with {latent_dim + 1} it is {above.label}."
    )
    return Verdict(verdict.source, "undetermined", undecided, None, words)


def _only_faded(verdict: Verdict, above: Verdict, latent_dim: int, ends_nats: Mapping[int, float]) -> bool:
    if above.label != "undetermined" or verdict.label not in PUSHES:
        return False
    if any(name != verdict.label for name in above.needed):
        return False
    sign = 1.0 if verdict.label == "sustained" else -1.0
    ahead = (sign * ends_nats.get(dim, 0.0) for dim in (latent_dim, latent_dim + 1))
    return all(nats > PROFILE_DROP for nats in ahead)


def overrule(verdict: Verdict, reason: str) -> Verdict:
    """Make a verdict undetermined for a reason outside the gains, such as confounding with drift.

    Parameters
    ----------
    verdict : Verdict
        On one source.
    reason : str
        A clause that follows a colon, without a full stop.

    Returns
    -------
    Verdict
        ``undetermined`` with both routes open.
    """
    words = f"{AMONG[verdict.source]}, these data cannot tell: {reason}."
    return Verdict(verdict.source, "undetermined", PUSHES, None, words)


def describe_mimic(source: str, time_constant_s: float, trial_s: float) -> str | None:
    """Say that an initial push is carried by a mode too slow to be told from a sustained one.

    Parameters
    ----------
    source : str
        ``interval``, ``context`` or ``trial``.
    time_constant_s : float
        Time constant, in seconds, of the mode that carries the push in the account that has only the initial
        route; infinite where the mode does not decay.
    trial_s : float
        Median length of a trial, seconds.

    Returns
    -------
    str or None
        A sentence where the time constant is longer than the trial, else None.

    Raises
    ------
    PortfireError
        If a time is not positive or the source is unknown.
    """
    check_source(source)
    if not time_constant_s > 0.0 or not trial_s > 0.0:
        raise PortfireError(
            f"time constant and trial length must be positive; got {time_constant_s} s and {trial_s} s"
        )
    if time_constant_s <= trial_s:
        return None
    return say_mimic(source, time_constant_s, trial_s)
