"""A system from a fit: its parameters, units, conditions and response hazard."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from portfire.accounts import Account
from portfire.errors import InputError
from portfire.estimation import kind_of
from portfire.simulate._system import Condition, ResponseHazard, System, design_rows

if TYPE_CHECKING:
    from portfire.estimation import Fit

_REACH = 4.0
_RUN_UP_SHARE = 0.3


def system_of_fit(
    fitted: Fit, n_units: int | None = None, account: Account | None = None, seed: int = 0
) -> System:
    """The system that a fit describes.

    Parameters
    ----------
    fitted : Fit
    n_units : int, optional
        A random part of the fit's units; more than there are repeats some. All by default.
    account : Account, optional
        Keep only the pushes that this account allows; the fit's own by default.
    seed : int, default 0
        Chooses the units.

    Raises
    ------
    InputError
        If the fit has no response hazard or no spikes to draw, or lacks a route of the account.
    """
    setup, params = fitted.setup, dict(fitted.params)
    if setup.model.readout != "poisson":
        raise InputError(
            f"the fit has a {setup.model.readout} readout, from which no spikes can be drawn; fit a model "
            "with readout = 'poisson'."
        )
    if fitted.hazard is None:
        raise InputError(
            "the fit has no response hazard, so that no response can be drawn; make the fit with "
            "`portfire fit` from trials that have responses, or simulate from a model file."
        )
    wanted = fitted.account if account is None else account.restrict(setup.sources)
    if not fitted.account.contains(wanted):
        raise InputError(
            f"account {str(wanted)!r}: the fit is of {str(fitted.account)!r} and has no push for the routes "
            "that this adds; leave them out, or fit an account that has them."
        )
    params = kind_of(setup).project(params, setup, wanted)
    params.setdefault("log_run_up_noise", np.log(_RUN_UP_SHARE * params["noise"]))
    places, units = _choose_units(fitted.session["units"], n_units, seed)
    for name in ("readout", "log_rate", "drift"):
        params[name] = params[name][places]
    pairs = fitted.session["conditions"]
    conditions = tuple(Condition(context, None if s is None else float(s)) for context, s in pairs)
    center, scale = float(fitted.session["sample_center"]), float(fitted.session["sample_scale"])
    return System(
        setup=replace(setup, n_units=len(units), n_before=0),
        account=wanted,
        params=params,
        units=units,
        conditions=conditions,
        rows=design_rows(conditions, setup.columns, center, scale),
        response=ResponseHazard(fitted.hazard.level, np.asarray(fitted.hazard.weights)),
        reach_s=_REACH * setup.n_reference * setup.bin_s,
        sample_center=center,
        sample_scale=scale,
    )


def _choose_units(labels: list[str], n_units: int | None, seed: int) -> tuple[np.ndarray, tuple[str, ...]]:
    n = len(labels)
    wanted = n if n_units is None else n_units
    rng = np.random.default_rng(np.random.SeedSequence([seed, 3]))
    places = np.sort(np.concatenate([np.tile(np.arange(n), wanted // n), rng.permutation(n)[: wanted % n]]))
    seen: dict[int, int] = {}
    names = []
    for place in places.tolist():
        seen[place] = seen.get(place, 0) + 1
        names.append(labels[place] if seen[place] == 1 else f"{labels[place]} copy {seen[place]}")
    return places, tuple(names)
