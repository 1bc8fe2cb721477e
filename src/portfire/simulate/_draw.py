"""A session drawn from a system: paths, responses, spikes, trial table."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from portfire.errors import PortfireError
from portfire.estimation import kind_of
from portfire.simulate._system import Boundary, System, carry, path_inputs
from portfire.simulate._timer import first_passage

DECIMALS = 4
_MOST_HZ = 5000.0
_BEFORE_LEAD_S = 0.3
_AFTER_S = 0.2
_PAUSE_S = (1.5, 2.5)
_FIRST_S = 2.0
_RUN_UP_S = 0.6


@dataclass(frozen=True)
class Drawn:
    """A drawn session with what is otherwise hidden.

    Parameters
    ----------
    system : System
    seed : int
    spike_times : dict of str to array
        Times of each unit (s).
    trials : DataFrame
        As in ``trials.csv``.
    kind : array of str, shape (trial,)
        ``normal``, ``aborted`` (observation ends early), ``missed`` (no response) or ``late``.
    condition : array of int, shape (trial,)
    path : array, shape (trial, time, D)
        State in every bin from the set cue on.
    n_bins : array of int, shape (trial,)
        Bins until the response, or the end of observation.
    initial, sustained : arrays, shape (trial, D)
        Pushes of the trial's condition and its own together; noise at the set cue is not in them.
    crossing_s : array, shape (trial,)
        When the boundary was reached, from the set cue (s); NaN where it was not, or there is none.
    """

    system: System
    seed: int
    spike_times: dict[str, np.ndarray]
    trials: pd.DataFrame
    kind: np.ndarray
    condition: np.ndarray
    path: np.ndarray
    n_bins: np.ndarray
    initial: np.ndarray
    sustained: np.ndarray
    crossing_s: np.ndarray


@dataclass(frozen=True)
class Mishaps:
    """Shares of aborted and missed trials, and the number of late ones."""

    share_aborted: float = 0.0
    share_missed: float = 0.0
    n_late: int = 0


def draw(system: System, n_trials: int, seed: int, mishaps: Mishaps | None = None) -> Drawn:
    """Draw a session; the same arguments give the same session.

    Raises
    ------
    PortfireError
        If rates run away, as those of an unstable fit may.
    """
    setup = system.setup
    rng = np.random.default_rng(np.random.SeedSequence([seed, 2]))
    condition = rng.permutation(np.arange(n_trials) % len(system.conditions))
    kind = _draw_kinds(rng, n_trials, mishaps or Mishaps())
    target = np.array([c.aimed_s or system.reach_s / 3 for c in system.conditions])[condition]
    long_s = np.where(np.isin(kind, ("missed", "late")), rng.uniform(3.6, 4.2, n_trials) * target, 0.0)
    n_time = int(np.ceil((max(system.reach_s, long_s.max()) + _AFTER_S) / setup.bin_s)) + 2
    path, initial, sustained = _draw_paths(rng, system, condition, kind, n_time)
    produced, crossing = _draw_responses(rng, system, path)
    aborted = rng.uniform(0.3, 0.6, n_trials) * target
    produced = np.where(kind == "late", long_s, np.where(kind == "missed", np.nan, produced))
    kind = np.where((kind == "normal") & np.isnan(produced), "missed", kind)
    end = np.where(kind == "missed", np.maximum(long_s, system.reach_s), np.nan)
    early = (kind == "aborted") & ~(aborted > produced - 2 * setup.bin_s) & (aborted > 2 * setup.bin_s)
    kind = np.where((kind == "aborted") & ~early, "normal", kind)
    end = np.where(early, aborted, end)
    produced = np.where(early, np.nan, produced)
    crossing = np.where(kind == "normal", crossing, np.nan)
    trials = _tabulate(rng, system, condition, produced, end)
    set_s = trials["set_s"].to_numpy()
    stop = trials["response_s"].fillna(trials["end_s"]).to_numpy() - set_s
    spike_times = _draw_spikes(rng, system, path, trials, stop)
    n_bins = np.floor(stop / setup.bin_s + 1e-9).astype(int)
    return Drawn(
        system, seed, spike_times, trials, kind, condition, path, n_bins, initial, sustained, crossing
    )


def _draw_kinds(rng: np.random.Generator, n_trials: int, mishaps: Mishaps) -> np.ndarray:
    kind = np.full(n_trials, "normal", dtype="<U7")
    # The first and the last trial stay normal: they span the slow drift.
    places = rng.permutation(np.arange(1, max(n_trials - 1, 1)))
    wanted = ["aborted"] * round(mishaps.share_aborted * n_trials)
    wanted += ["missed"] * round(mishaps.share_missed * n_trials) + ["late"] * mishaps.n_late
    for place, word in zip(places, wanted, strict=False):
        kind[place] = word
    return kind


def _draw_paths(
    rng: np.random.Generator, system: System, condition: np.ndarray, kind: np.ndarray, n_time: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    setup, params = system.setup, system.params
    n, d = len(condition), setup.latent_dim
    rows = system.rows[condition]
    if setup.model.dynamics != "linear":
        drawn = kind_of(setup).draw_forward(params, setup, rows, n_time, rng)
        return drawn.path, drawn.initial, drawn.sustained
    noise_sd = np.sqrt(float(params["noise"]))
    own_initial = rng.standard_normal((n, d)) @ params["initial_factor"].T
    own_sustained = rng.standard_normal((n, d)) @ params["sustained_factor"].T
    at_cue = system.initial_covariance - params["initial_factor"] @ params["initial_factor"].T
    start = rng.standard_normal((n, d)) @ np.linalg.cholesky(at_cue).T
    inputs = path_inputs(params, setup, rows, n_time)
    inputs += setup.border_kernel(n_time)[None, :, None] * own_sustained[:, None]
    held = np.isin(kind, ("missed", "late"))
    if held.any() and isinstance(system.response, Boundary):
        inputs[held] = _hold_timer(system, inputs[held])
    inputs[:, 0] += start + own_initial
    inputs[:, 1:] += noise_sd * rng.standard_normal((n, n_time - 1, d))
    prompt = [k for k, c in enumerate(setup.columns) if c.persistence_s == 0]
    lasting = [k for k, c in enumerate(setup.columns) if c.persistence_s > 0]
    initial = own_initial + rows[:, prompt] @ params["push"][:, prompt].T
    sustained = own_sustained + rows[:, lasting] @ params["push"][:, lasting].T
    return carry(params, setup, inputs), initial, sustained


def _hold_timer(system: System, inputs: np.ndarray) -> np.ndarray:
    """Take what drives the timer out of the inputs after the set cue: the subject does not time."""
    assert isinstance(system.response, Boundary)
    weights = system.response.weights
    along = inputs @ weights
    along[:, 0] = 0.0
    return inputs - along[..., None] * weights


def _draw_responses(
    rng: np.random.Generator, system: System, path: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Produced intervals and boundary crossings (s), NaN where there is none."""
    setup, rule, n = system.setup, system.response, len(path)
    within = max(2, int(np.ceil(system.reach_s / setup.bin_s)))
    level = np.moveaxis(path[:, :within] @ rule.weights, 1, 0)
    if isinstance(rule, Boundary):
        crossing = first_passage(level, rule.threshold, setup.bin_s)
        delay = np.clip(rule.delay_s + rule.delay_sd_s * rng.standard_normal(n), 0.005, 2 * rule.delay_s)
        return crossing + delay, crossing
    # A response belongs to the last whole bin before it, so it comes within the bin after.
    chance = 1 / (1 + np.exp(-np.clip(rule.level + level, -700, 700)))
    fires = rng.uniform(size=chance.shape) < chance
    place = np.argmax(fires, axis=0)
    produced = (place + 1 + rng.uniform(size=n)) * setup.bin_s
    return np.where(fires.any(axis=0), produced, np.nan), np.full(n, np.nan)


def _tabulate(
    rng: np.random.Generator, system: System, condition: np.ndarray, produced: np.ndarray, end: np.ndarray
) -> pd.DataFrame:
    n = len(condition)
    conditions = [system.conditions[c] for c in condition]
    lead = np.array([_RUN_UP_S if c.sample_s is None else c.sample_s for c in conditions])
    stop = np.where(np.isnan(produced), end, produced)
    pause = rng.uniform(*_PAUSE_S, n)
    lead_s = _FIRST_S + np.concatenate([[0.0], np.cumsum(lead + stop + pause)[:-1]])
    lead_s = np.round(lead_s, DECIMALS)
    set_s = np.round(lead_s + lead, DECIMALS)
    columns: dict[str, object] = {
        "trial": [str(row + 1) for row in range(n)],
        "lead_s": lead_s,
        "set_s": set_s,
        "response_s": np.round(set_s + produced, DECIMALS),
        "end_s": np.round(set_s + end, DECIMALS),
    }
    for name in ("sample_s", "context", "target_s"):
        values = [getattr(c, name) for c in conditions]
        if values[0] is not None:
            columns[name] = values
    if system.conditions[0].sample_s is None:
        del columns["lead_s"]
    return pd.DataFrame(columns)


def _draw_spikes(
    rng: np.random.Generator, system: System, path: np.ndarray, trials: pd.DataFrame, stop: np.ndarray
) -> dict[str, np.ndarray]:
    """Spike times of every unit, from before the lead event to shortly after the response."""
    setup, params = system.setup, system.params
    n, d = len(path), setup.latent_dim
    set_s = trials["set_s"].to_numpy()
    lead = set_s - trials["lead_s"].to_numpy() if "lead_s" in trials else np.full(n, _RUN_UP_S)
    before_s = np.maximum(lead + _BEFORE_LEAD_S, _RUN_UP_S)
    n_before = np.ceil(before_s / setup.bin_s - 1e-9).astype(int)
    n_after = np.ceil((stop + _AFTER_S) / setup.bin_s).astype(int)
    run_up_sd = np.exp(0.5 * float(params["log_run_up_noise"]))
    steps = run_up_sd * rng.standard_normal((n, n_before.max(), d))
    before = (path[:, :1] + np.cumsum(steps, axis=1))[:, ::-1]
    whole = np.concatenate([before, path], axis=1)
    time = np.arange(whole.shape[1]) - n_before.max()
    row, column = np.nonzero((time >= -n_before[:, None]) & (time < n_after[:, None]))
    drift = system.drift(set_s) + params["log_rate"]
    rate = np.exp(np.minimum(whole[row, column] @ params["readout"].T + drift[row], 700.0))
    if not rate.max() <= _MOST_HZ:
        busiest = system.units[int(rate.max(axis=0).argmax())]
        trial = trials["trial"].iloc[int(row[rate.max(axis=1).argmax()])]
        raise PortfireError(
            f"the dynamics run away: unit {busiest!r} would fire {rate.max():.3g} spikes/s in trial {trial}; "
            "draw from another model or fit."
        )
    counts = rng.poisson(setup.bin_s * rate)
    start = set_s[row] + time[column] * setup.bin_s
    out = {}
    for place, label in enumerate(system.units):
        times = np.repeat(start, counts[:, place])
        times = times + setup.bin_s * rng.uniform(size=len(times))
        out[label] = np.sort(np.round(times, DECIMALS))
    return out
