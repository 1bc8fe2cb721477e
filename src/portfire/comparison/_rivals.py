"""Rivals of additive pushes: other ways in which conditions may differ, fitted beside the accounts."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import jax
import jax.numpy as jnp
from scipy.stats import chi2

from ..accounts import Account
from ..dynamics import Params, Setup
from ..errors import PortfireError
from ..estimation import Bend, Fit, fit_grouped
from ..session import Trials

# Nats after the cost of parameters by which a rival must stand above a verdict's account to beat it.
BEATS = 2.0


@dataclass(frozen=True)
class Rival:
    """One way in which conditions may differ other than by an additive push.

    Parameters
    ----------
    name : str
        As it reads after "by": ``a change of speed``.
    source : str
        What differs.
    bend : callable
        See `fit_grouped`.
    n_extra : int
        Parameters of its own.
    instead : str
        Route of the source beside which it is fitted alone: ``none``, or ``sustained`` where the rival ties
        the state at the set cue to the sustained push.
    """

    name: str
    source: str
    bend: Bend
    n_extra: int
    instead: str = "none"


def list_rivals(setup: Setup) -> tuple[Rival, ...]:
    """The rivals that a session's sources allow.

    A change of speed by source, x + s (f(x) − x) with s = exp(extra · row); a change of the dynamics by
    context; a cue response that depends on context; pushes that depend on interval × context; and a tonic
    input that acted before the set cue as it does after it, so that it has shifted the state there.
    """
    d = setup.latent_dim
    prompt = {
        source: [k for k, c in enumerate(setup.columns) if c.source == source and c.persistence_s == 0]
        for source in ("interval", "context")
    }
    rivals = [
        Rival("a change of speed", source, _bend_speed(tuple(places)), len(places))
        for source, places in prompt.items()
        if places
    ]
    contexts = tuple(prompt["context"])
    if contexts:
        n_bumps = setup.model.n_bumps
        rivals.append(
            Rival("a change of the dynamics", "context", _bend_dynamics(contexts, d), d * d * len(contexts))
        )
        if n_bumps:
            size = d * n_bumps * len(contexts)
            rivals.append(
                Rival("a change of the cue response", "context", _bend_cue(contexts, d, n_bumps), size)
            )
    if contexts and prompt["interval"]:
        size = 2 * d * len(contexts)
        bend = _bend_interaction(contexts, prompt["interval"][0], setup)
        rivals.append(Rival("pushes that depend on interval and context together", "context", bend, size))
    rivals += [
        Rival("a tonic input from before the set cue", source, _bend_tonic(source, setup), 0, "sustained")
        for source in setup.sources
    ]
    return tuple(rivals)


def _without_extra(params: Params) -> Params:
    return {name: value for name, value in params.items() if name != "extra"}


def _bend_speed(places: tuple[int, ...]) -> Bend:
    def bend(params: Params, row: jax.Array) -> Params:
        speed = jnp.exp(params["extra"] @ row[jnp.array(places)])
        identity = jnp.eye(params["transition"].shape[0])
        out = _without_extra(params)
        out["transition"] = identity + speed * (params["transition"] - identity)
        out["offset"] = speed * params["offset"]
        return out

    return bend


def _bend_dynamics(places: tuple[int, ...], d: int) -> Bend:
    def bend(params: Params, row: jax.Array) -> Params:
        change = params["extra"].reshape(len(places), d, d)
        out = _without_extra(params)
        out["transition"] = params["transition"] + jnp.tensordot(row[jnp.array(places)], change, 1)
        return out

    return bend


def _bend_cue(places: tuple[int, ...], d: int, n_bumps: int) -> Bend:
    def bend(params: Params, row: jax.Array) -> Params:
        change = params["extra"].reshape(len(places), d, n_bumps)
        out = _without_extra(params)
        out["cue"] = params["cue"] + jnp.tensordot(row[jnp.array(places)], change, 1)
        return out

    return bend


def _bend_interaction(contexts: tuple[int, ...], interval: int, setup: Setup) -> Bend:
    d, n_columns = setup.latent_dim, len(setup.columns)
    # Longer than any trial; what is not used is cut off.
    n_time = 20 * setup.n_reference

    def bend(params: Params, row: jax.Array) -> Params:
        pushes = params["extra"].reshape(2, len(contexts), d)
        both = row[interval] * row[jnp.array(contexts)]
        first, lasting = both @ pushes[0], both @ pushes[1]
        inputs = jnp.broadcast_to(lasting[:, None] / setup.n_reference, (d, n_time)).at[:, 0].add(first)
        # An input of the group itself, written in its own row; some context's entry is never zero.
        out = _without_extra(params)
        out["course"] = inputs[:, None] * (row / (row @ row))[None, :, None]
        assert out["course"].shape == (d, n_columns, n_time)
        return out

    return bend


def _bend_tonic(source: str, setup: Setup) -> Bend:
    lasting = [k for k, c in enumerate(setup.columns) if c.source == source and c.persistence_s > 0]
    prompt = [
        next(j for j, c in enumerate(setup.columns) if c[:2] == setup.columns[k][:2] and c.persistence_s == 0)
        for k in lasting
    ]

    def bend(params: Params, row: jax.Array) -> Params:
        transition = params["transition"]
        before = jnp.zeros_like(transition)
        for _ in range(setup.initial_bins):
            before = transition @ (before + jnp.eye(len(transition)))
        before = before / setup.n_reference
        out = _without_extra(params)
        if source == "trial":
            # One and the same input before and after: its spread at the cue is part of the border's.
            out["initial_factor"] = before @ params["sustained_factor"]
        else:
            shift = before @ params["push"][:, jnp.array(lasting)]
            out["push"] = params["push"].at[:, jnp.array(prompt)].set(shift)
        return out

    return bend


@dataclass(frozen=True)
class RivalScore:
    """A rival beside the accounts of a source, all fitted to all trials.

    Parameters
    ----------
    rival : Rival
    instead_nats : float
        Objective of the rival in the place of the source's pushes, less one nat a parameter.
    beside_nats : float or None
        What it adds to the full account (nats); None where it is part of that.
    p : float or None
        Of that addition: χ² with as many degrees of freedom as it has parameters.
    account_nats : dict of str to float
        Objective of the source's accounts by route, less one nat a parameter, on the same footing.
    """

    rival: Rival
    instead_nats: float
    beside_nats: float | None
    p: float | None
    account_nats: dict[str, float]

    def beats(self, verdict: str) -> bool:
        """Whether the rival describes the data better than the account that a verdict names (Akaike).

        A rival without parameters of its own is part of ``both``, and beats that where it costs nothing.
        """
        margin = self.margin(verdict)
        if margin is None:
            return False
        return margin > (0.0 if verdict == "both" and not self.rival.n_extra else BEATS)

    def margin(self, verdict: str) -> float | None:
        """Nats by which it does; negative where it does not, None for a verdict that names no account."""
        route = {"neither": "none"}.get(verdict, verdict)
        return self.instead_nats - self.account_nats[route] if route in self.account_nats else None


def score_rival(
    rival: Rival,
    fits: Mapping[str, Fit],
    trials: Trials,
    n_params: Mapping[str, int],
    tolerance: float = 0.1,
    max_iterations: int = 100,
) -> RivalScore:
    """Fit a rival in the place of its source's pushes, and beside them.

    Parameters
    ----------
    rival : Rival
    fits : mapping of str to Fit
        To all trials, by the route of the rival's source; the other sources by both.
    trials : Trials
    n_params : mapping of str to int
        Parameters of the source's pushes by route.

    Raises
    ------
    PortfireError
        If there are too many conditions to tell apart.
    """
    full: Account = fits["both"].account

    def climb(start: Fit, account: Account) -> float:
        return fit_grouped(start, trials, account, rival.bend, rival.n_extra, tolerance, max_iterations).value

    base = fits[rival.instead]
    instead = climb(base, full.replace(rival.source, rival.instead))
    cost = rival.n_extra + n_params[rival.instead]
    beside = p = None
    if rival.n_extra:
        beside = max(climb(fits["both"], full) - fits["both"].value, 0.0)
        p = float(chi2.sf(2 * beside, rival.n_extra))
    accounts = {route: fitted.value - n_params[route] for route, fitted in fits.items()}
    return RivalScore(rival, instead - cost, beside, p, accounts)


def name_winner(scores: list[RivalScore], verdict: str) -> str | None:
    """Name of the rival that beats a verdict by most, or None."""
    if any(score.rival.source != scores[0].rival.source for score in scores):
        raise PortfireError("rivals of one source are set against its verdict; got several sources")
    better = [score for score in scores if score.beats(verdict)]
    return max(better, key=lambda score: score.instead_nats).rival.name if better else None
