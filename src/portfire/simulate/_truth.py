"""The truth behind a drawn session: as parameters of the fitted model, and as JSON."""

from __future__ import annotations

from typing import Any

import numpy as np

from portfire.dynamics import Setup, parameter_shapes
from portfire.estimation import kind_of
from portfire.session import Trials
from portfire.simulate._draw import Drawn
from portfire.simulate._system import Boundary, System

KIND = "simulated session"
INVENTED = (
    "These data are invented: every spike and every response was drawn by a computer from the parameters in "
    "truth.json. No animal was recorded."
)
_EFFECTS = {
    "none": "does not push the state, and does not change the produced interval",
    "initial": "shifts the state at the set cue",
    "sustained": "acts on the state until the response",
    "both": "shifts the state at the set cue and acts on it until the response",
}


def true_parameters(drawn: Drawn, setup: Setup, trials: Trials) -> dict[str, np.ndarray]:
    """The true parameters in the terms of a fit to the drawn session.

    The session's mean sample interval may differ by a hair from the one that the push is centred on;
    that difference is left out.

    Parameters
    ----------
    drawn : Drawn
    setup : Setup
        Of the fit; its latent dimension and push columns are those of the truth.
    trials : Trials
        The binned session, whose units are a part of the drawn ones.

    Returns
    -------
    dict of arrays, as `dynamics.parameter_shapes` names them
    """
    system = drawn.system
    if setup.latent_dim != system.setup.latent_dim or setup.columns != system.setup.columns:
        raise ValueError("the setup has another latent dimension or other push columns than the truth.")
    place = {unit: n for n, unit in enumerate(system.units)}
    units = [place[unit] for unit in trials.unit]
    values = dict(system.params)
    for name in ("readout", "log_rate", "drift"):
        values[name] = values[name][units]
    if setup.n_drift == 0:
        values["drift"] = np.zeros((len(units), 0))
    push = values["push"].copy()
    stretch = setup.n_reference / system.setup.n_reference
    for k, column in enumerate(setup.columns):
        push[:, k] *= stretch if column.persistence_s > 0 else 1.0
        if column.source == "interval":
            push[:, k] *= trials.sample_scale / system.sample_scale
    values["push"] = push
    values["sustained_factor"] = stretch * values["sustained_factor"]
    return {name: np.asarray(values[name], dtype=float) for name in parameter_shapes(setup)}


def describe_truth(drawn: Drawn, made_from: dict[str, Any]) -> dict[str, Any]:
    """Everything that was drawn or decided, JSON-able.

    Parameters
    ----------
    drawn : Drawn
    made_from : dict
        What the session was asked for with.
    """
    system, setup = drawn.system, drawn.system.setup
    params = {name: value for name, value in system.params.items() if name != "log_run_up_noise"}
    params["run_up_noise"] = np.exp(system.params["log_run_up_noise"])
    return {
        "kind": KIND,
        "words": INVENTED,
        "made_from": made_from,
        "seed": drawn.seed,
        "account": str(system.account),
        "sources": {s: _EFFECTS[system.account.route(s)] for s in setup.sources},
        "model": {
            "equations": kind_of(setup).equations,
            "bin_s": setup.bin_s,
            "latent_dim": setup.latent_dim,
            "n_reference": setup.n_reference,
            "initial_bins": setup.initial_bins,
            "columns": [
                {
                    "source": c.source,
                    "level": c.level,
                    "persistence_s": None if np.isinf(c.persistence_s) else c.persistence_s,
                }
                for c in setup.columns
            ],
            "sample_center_s": system.sample_center,
            "sample_scale_s": system.sample_scale,
            "time_constants_s": _time_constants(system),
            "parameters": {name: _round(value) for name, value in params.items()},
        },
        "response": _describe_response(system),
        "conditions": _describe_conditions(drawn),
        "units": [{"unit": unit, "spikes": len(drawn.spike_times[unit])} for unit in system.units],
        "trials": _describe_trials(drawn),
    }


def _round(value: np.ndarray, digits: int = 6) -> Any:
    flat = [float(f"{number:.{digits}g}") for number in np.ravel(value)]
    return np.array(flat).reshape(np.shape(value)).tolist()


def _time_constants(system: System) -> list[float | None]:
    transition = kind_of(system.setup).local_transition(system.params, system.setup)
    size = np.sort(np.abs(np.linalg.eigvals(transition)))[::-1]
    return [float(f"{-system.setup.bin_s / np.log(s):.4g}") if 0 < s < 1 else None for s in size]


def _describe_response(system: System) -> dict[str, Any]:
    rule = system.response
    if isinstance(rule, Boundary):
        return {
            "rule": (
                "first passage: the timer weights·x, taken at bin centres and interpolated, reaches the "
                "threshold; the response follows after the motor delay"
            ),
            "weights": _round(rule.weights),
            "threshold": rule.threshold,
            "motor_delay_s": rule.delay_s,
            "motor_delay_sd_s": rule.delay_sd_s,
        }
    return {
        "rule": "hazard: a response ends a bin with probability sigmoid(level + weights·x)",
        "weights": _round(rule.weights),
        "level": rule.level,
    }


def _describe_conditions(drawn: Drawn) -> list[dict[str, Any]]:
    produced = (drawn.trials["response_s"] - drawn.trials["set_s"]).to_numpy()
    out = []
    for place, condition in enumerate(drawn.system.conditions):
        chosen = (drawn.condition == place) & (drawn.kind == "normal") & np.isfinite(produced)
        out.append(
            {
                "context": condition.context,
                "sample_s": condition.sample_s,
                "target_s": condition.target_s,
                "aimed_s": condition.aimed_s,
                "n": int(chosen.sum()),
                "mean_s": float(f"{produced[chosen].mean():.4g}") if chosen.any() else None,
            }
        )
    return out


def _describe_trials(drawn: Drawn) -> list[dict[str, Any]]:
    rule = drawn.system.response
    timer = drawn.path @ rule.weights + (0.0 if isinstance(rule, Boundary) else rule.level)
    return [
        {
            "trial": str(drawn.trials["trial"].iloc[row]),
            "kind": str(drawn.kind[row]),
            "initial": _round(drawn.initial[row], 4),
            "sustained": _round(drawn.sustained[row], 4),
            "state_at_cue": _round(drawn.path[row, 0], 4),
            "crossing_s": None if np.isnan(drawn.crossing_s[row]) else round(float(drawn.crossing_s[row]), 5),
            "timer": _round(timer[row, : drawn.n_bins[row]], 4),
        }
        for row in range(len(drawn.kind))
    ]
