"""Parameters drawn for a scenario."""

from __future__ import annotations

import numpy as np

from portfire.accounts import Column
from portfire.dynamics import Setup
from portfire.dynamics._setup import n_drift_functions
from portfire.simulate._scenario import Scenario
from portfire.simulate._system import (
    Boundary,
    Condition,
    System,
    carry,
    design_rows,
    list_columns,
    path_inputs,
)
from portfire.simulate._timer import DELAY_S, DELAY_SD_S, NOISE, TimerTask, noise_at_cue, solve_timer

# Dimensions without timing, in turn: decay (s) and period of rotation (s) of a pair, decay of a single one.
_PAIRS = ((0.35, 1.1), (0.25, 0.6), (0.5, 1.8), (0.2, 0.9))
_SINGLES = (0.3, 0.15, 0.45)
_ARC = 1.3
_CUE = 0.15
_PROMPT = 0.8
_LASTING = 0.7
_RUN_UP_SHARE = 0.3


def make_system(scenario: Scenario, seed: int) -> System:
    """Draw the parameters of a scenario.

    The first natural dimension is the timer, the others decay or rotate and carry no timing; a random
    rotation then mixes all of them.
    """
    rng = np.random.default_rng(np.random.SeedSequence([seed, 1]))
    d, bin_s = scenario.latent_dim, scenario.bin_s
    contexts, samples = scenario.contexts, np.array(scenario.sample_s)
    columns, sources = list_columns(contexts, scenario.sample_s)
    account = scenario.account.restrict(sources)
    middle_s = float(samples.mean() + np.mean(scenario.extra_s))
    model = scenario.model
    setup = Setup(
        model=model,
        latent_dim=d,
        n_units=scenario.n_units + scenario.n_silent,
        bin_s=bin_s,
        n_before=0,
        n_reference=max(1, round(middle_s / bin_s)),
        columns=columns,
        sources=sources,
        n_drift=n_drift_functions(model.drift_timescale) if scenario.drift_sd > 0 else 0,
    )
    task = TimerTask(
        account,
        scenario.sample_s,
        scenario.extra_s,
        scenario.cv,
        scenario.pull,
        scenario.trial_ratio,
        bin_s,
        setup.n_reference,
        setup.initial_bins,
    )
    timer = solve_timer(task)
    transition = _make_transition(d, timer.decay, bin_s)
    offset = np.zeros(d)
    offset[0] = timer.offset
    offset[1:] = (np.eye(d - 1) - transition[1:, 1:]) @ (_ARC * _direction(rng, d - 1))
    push = np.zeros((d, len(columns)))
    sides = _side_pushes(rng, columns, setup, transition)
    for k, column in enumerate(columns):
        if account.allows(column.source, column.persistence_s):
            by_level = dict(zip(contexts, timer.context, strict=True)) | {"sample": timer.interval}
            push[:, k] = [by_level[column.level], *sides[:, k]]
    at_cue = noise_at_cue(transition, NOISE, setup.initial_bins)
    initial, sustained = np.zeros((d, d)), np.zeros((d, d))
    if account.allows("trial", 0.0):
        initial[:] = np.linalg.cholesky(scenario.trial_ratio * at_cue)
    if account.allows("trial", np.inf):
        reach = _lasting_reach(transition, setup.n_reference)
        sustained = np.asarray(np.diag(np.sqrt(scenario.trial_ratio * np.diag(at_cue)) / reach))
    cue = _CUE * rng.standard_normal((d, model.n_bumps))
    cue[0] = 0.0
    # Uniform rather than normal: no unit's rate explodes.
    readout = rng.uniform(-np.sqrt(3), np.sqrt(3), (setup.n_units, d)) * scenario.side_gain
    readout[:, 0] *= scenario.ramp / timer.threshold / scenario.side_gain
    rates = _draw_rates(rng, scenario)
    mixing = np.linalg.qr(rng.standard_normal((d, d)))[0]
    drift = rng.standard_normal((setup.n_units, setup.n_drift)) * scenario.drift_sd / model.drift_sd
    conditions = tuple(
        Condition(context, sample, sample + extra, float(aim))
        for context, extra, aims in zip(contexts, scenario.extra_s, task.aims, strict=True)
        for sample, aim in zip(scenario.sample_s, aims, strict=True)
    )
    center, scale = float(samples.mean()), float(samples.std() or 1.0)
    rows = design_rows(conditions, columns, center, scale)
    natural = {
        "readout": readout,
        "transition": transition,
        "offset": offset,
        "cue": cue,
        "push": push,
        "initial_factor": initial,
        "sustained_factor": sustained,
    }
    log_rate = np.log(rates) - _mean_gain(natural, setup, rows, task.aims.ravel())
    params = {
        "readout": readout @ mixing.T,
        "log_rate": log_rate,
        "drift": drift,
        "transition": mixing @ transition @ mixing.T,
        "offset": mixing @ offset,
        "cue": mixing @ cue,
        "push": mixing @ push,
        "initial_factor": mixing @ initial,
        "sustained_factor": mixing @ sustained,
        "noise": np.array(NOISE),
        "log_run_up_noise": np.array(np.log(_RUN_UP_SHARE * NOISE)),
    }
    if model.readout == "negative_binomial":
        params["log_dispersion"] = np.full(setup.n_units, np.log(scenario.dispersion))
    return System(
        setup=setup,
        account=account,
        params=params,
        units=tuple(f"u{n + 1}" for n in range(setup.n_units)),
        conditions=conditions,
        rows=rows,
        response=Boundary(mixing[:, 0].copy(), timer.threshold, DELAY_S, DELAY_SD_S),
        reach_s=2.5 * float(task.aims.max()),
        sample_center=center,
        sample_scale=scale,
    )


def _make_transition(d: int, timer_decay: float, bin_s: float) -> np.ndarray:
    transition = np.zeros((d, d))
    transition[0, 0] = timer_decay
    at, n_pair = 1, 0
    while at < d:
        if d - at >= 2:
            decay_s, period_s = _PAIRS[n_pair % len(_PAIRS)]
            angle = 2 * np.pi * bin_s / period_s
            turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
            transition[at : at + 2, at : at + 2] = np.exp(-bin_s / decay_s) * turn
            at, n_pair = at + 2, n_pair + 1
        else:
            transition[at, at] = np.exp(-bin_s / _SINGLES[n_pair % len(_SINGLES)])
            at += 1
    return transition


def _direction(rng: np.random.Generator, size: int) -> np.ndarray:
    vector = rng.standard_normal(size)
    return vector / np.linalg.norm(vector) if size else vector


def _lasting_reach(transition: np.ndarray, n_reference: int) -> np.ndarray:
    """How far a lasting push of one moves each dimension: root mean square over a reference trial, (D,)."""
    d = len(transition)
    moved, square = np.zeros((d, d)), np.zeros(d)
    for _ in range(n_reference):
        moved = transition @ moved + np.eye(d) / n_reference
        square += (moved**2).sum(axis=0)
    return np.sqrt(square / n_reference)


def _side_pushes(
    rng: np.random.Generator, columns: tuple[Column, ...], setup: Setup, transition: np.ndarray
) -> np.ndarray:
    """Pushes in the dimensions without timing, (D - 1, column), of one size over the levels of a source."""
    d = setup.latent_dim
    out = np.zeros((d - 1, len(columns)))
    if d == 1:
        return out
    reach = _lasting_reach(transition, setup.n_reference)[1:]
    for h in (0.0, float("inf")):
        size = _PROMPT if h == 0 else _LASTING / reach[:, None]
        for source in ("interval", "context"):
            places = [k for k, c in enumerate(columns) if c.source == source and c.persistence_s == h]
            if not places:
                continue
            levels = rng.standard_normal((d - 1, len(places) + (source == "context")))
            if source == "context":
                levels -= levels.mean(axis=1, keepdims=True)
            levels /= np.sqrt((levels**2).sum(axis=0).mean())
            out[:, places] = (size * levels)[:, : len(places)]
    return out


def _draw_rates(rng: np.random.Generator, scenario: Scenario) -> np.ndarray:
    """Mean rates of all units (spikes/s); which of them are silent is left to chance."""
    n = scenario.n_units + scenario.n_silent
    spread = scenario.rate_spread
    rates = scenario.mean_rate_hz * np.exp(spread * rng.standard_normal(n) - 0.5 * spread**2)
    rates = np.clip(rates, min(1.0, scenario.mean_rate_hz), 5 * scenario.mean_rate_hz)
    rates[rng.permutation(n)[: scenario.n_silent]] = rng.uniform(0.1, 0.3, scenario.n_silent)
    return rates


def _mean_gain(
    params: dict[str, np.ndarray], setup: Setup, rows: np.ndarray, length_s: np.ndarray
) -> np.ndarray:
    """Log of what the mean paths make of each unit's rate, averaged over conditions and time, (unit,)."""
    n_time = max(2, int(length_s.max() / setup.bin_s))
    path = carry(params, setup, path_inputs(params, setup, rows, n_time))
    live = np.arange(n_time)[None] < np.maximum(length_s / setup.bin_s, 1)[:, None]
    return np.log(np.exp(path[live] @ params["readout"].T).mean(axis=0))
