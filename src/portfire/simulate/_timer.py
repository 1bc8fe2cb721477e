"""The timer: one latent dimension that moves to a boundary, and pushes that make it arrive in time."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.optimize import least_squares

from portfire.accounts import Account

TIME_CONSTANT_S = 2.0
NOISE = 0.01
DELAY_S = 0.03
DELAY_SD_S = 0.004
_DRAWS = 600
_ROUNDS = 4


@dataclass(frozen=True)
class TimerTask:
    """What the timer has to do; hashable.

    Parameters
    ----------
    account : Account
    sample_s, extra_s : tuple of float
        Sample intervals, and what each context adds (s).
    cv, pull, trial_ratio : float
        As in `Scenario`.
    bin_s : float
    n_reference, initial_bins : int
        As in `dynamics.Setup`.
    """

    account: Account
    sample_s: tuple[float, ...]
    extra_s: tuple[float, ...]
    cv: float
    pull: float
    trial_ratio: float
    bin_s: float
    n_reference: int
    initial_bins: int

    @property
    def scaled_samples(self) -> np.ndarray:
        """Sample intervals, centred and divided by their SD, (sample,)."""
        samples = np.array(self.sample_s)
        return (samples - samples.mean()) / (samples.std() or 1.0)

    @property
    def aims(self) -> np.ndarray:
        """Mean produced intervals aimed at (s), (context, sample); a source without a route changes none."""
        samples, extras = np.array(self.sample_s), np.array(self.extra_s)
        wanted = samples.mean() + (1 - self.pull) * (samples - samples.mean())
        if self.account.route("interval") == "none":
            wanted = np.full(len(samples), wanted.mean())
        if self.account.route("context") == "none":
            extras = np.full(len(extras), extras.mean())
        return extras[:, None] + wanted[None, :]


@dataclass(frozen=True)
class Timer:
    """The timer's dimension, in units in which noise of variance `NOISE` enters every bin.

    Parameters
    ----------
    decay : float
        Factor from one bin to the next.
    threshold : float
        The boundary.
    offset : float
        Input of every bin.
    interval : float
        Push for one SD of the sample interval, by each route that the account allows.
    context : array, shape (context,)
        Push of each context, by each route that the account allows; sums to zero.
    initial_sd, sustained_sd : float
        SD of the trial's own pushes.
    mean_s, cv : arrays, shape (context, sample)
        Mean and coefficient of variation of the produced interval that follow.
    """

    decay: float
    threshold: float
    offset: float
    interval: float
    context: np.ndarray
    initial_sd: float
    sustained_sd: float
    mean_s: np.ndarray
    cv: np.ndarray


def noise_at_cue(factor: np.ndarray, noise: float, n_bins: int) -> np.ndarray:
    """Covariance that dynamics with this transition accumulate from nothing in ``n_bins`` bins."""
    cov = np.zeros_like(factor)
    for _ in range(n_bins):
        cov = factor @ cov @ factor.T + noise * np.eye(len(factor))
    return cov


def first_passage(timer: np.ndarray, threshold: float, bin_s: float) -> np.ndarray:
    """When paths first reach a boundary from below, interpolated between bin centres.

    Parameters
    ----------
    timer : array, shape (time, …)
        Value in every bin from the set cue on.

    Returns
    -------
    array, shape (…)
        Seconds from the set cue; NaN where the boundary is not reached.
    """
    above = timer >= threshold
    place = np.argmax(above, axis=0)[None]
    after = np.take_along_axis(timer, place, axis=0)[0]
    before = np.take_along_axis(timer, np.maximum(place - 1, 0), axis=0)[0]
    rise = np.where(after > before, after - before, 1.0)
    share = np.where(place[0] > 0, (threshold - before) / rise, 1.0)
    return np.where(above.any(axis=0), (place[0] - 0.5 + share) * bin_s, np.nan)


class _Population:
    """Many timers with the same noise whatever the pushes, so that means change smoothly with them."""

    def __init__(self, task: TimerTask) -> None:
        self.task = task
        rng = np.random.default_rng(20)
        self.decay = float(np.exp(-task.bin_s / TIME_CONSTANT_S))
        at_cue = float(noise_at_cue(np.array([[self.decay]]), NOISE, task.initial_bins)[0, 0])
        own = np.sqrt(task.trial_ratio * at_cue)
        self.initial_sd = own if task.account.allows("trial", 0.0) else 0.0
        self.sustained_sd = own if task.account.allows("trial", np.inf) else 0.0
        self.n_time = int(np.ceil(2.5 * task.aims.max() / task.bin_s)) + 5
        unit = rng.standard_normal((self.n_time + 2, _DRAWS))
        unit = (unit - unit.mean(axis=1, keepdims=True)) / unit.std(axis=1, keepdims=True)
        start = np.sqrt(at_cue + self.initial_sd**2) * unit[0]
        # Noise carried along once: the dynamics are linear, so the pushes add to it.
        carried = np.empty((self.n_time, _DRAWS))
        carried[0] = start
        for t in range(1, self.n_time):
            carried[t] = self.decay * carried[t - 1] + np.sqrt(NOISE) * unit[t]
        powers = self.decay ** np.arange(self.n_time)
        self.step = np.cumsum(powers)
        self.lasting = self.step / task.n_reference
        self.prompt = powers
        self.noise = carried + self.sustained_sd * self.lasting[:, None] * unit[-1]
        delay = DELAY_S + DELAY_SD_S * rng.standard_normal(_DRAWS)
        self.delay = delay - delay.mean() + DELAY_S

    def drive(self, source: str) -> np.ndarray:
        """Course of the timer after a push of one by the routes of ``source``, (time,)."""
        account = self.task.account
        allowed = [account.allows(source, h) for h in (0.0, np.inf)]
        courses = [c for c, use in zip((self.prompt, self.lasting), allowed, strict=True) if use]
        return np.sum(courses, axis=0) if courses else np.zeros(self.n_time)

    def intervals(self, offset: float, interval: float, context: np.ndarray, threshold: float) -> np.ndarray:
        """Produced intervals (s), (context, sample, draw); the longest possible where none is produced."""
        # The offset enters from the second bin on, as in the model.
        course = offset * np.concatenate([[0.0], self.step[:-1]])
        between = interval * self.task.scaled_samples[None, :, None] * self.drive("interval")
        between = between + context[:, None, None] * self.drive("context")
        mean = np.moveaxis(course + between, -1, 0)
        passed = first_passage(mean[..., None] + self.noise[:, None, None, :], threshold, self.task.bin_s)
        return np.where(np.isnan(passed), self.n_time * self.task.bin_s, passed) + self.delay


def _level_pushes(free: np.ndarray, n_levels: int) -> np.ndarray:
    return np.append(free, -free.sum()) if len(free) else np.zeros(n_levels)


@lru_cache(maxsize=64)
def solve_timer(task: TimerTask) -> Timer:
    """Find the pushes that bring mean produced intervals as near to the aims as additive pushes can.

    Offset, push sizes and the distance to the boundary follow by least squares from many drawn timers;
    the distance sets the coefficient of variation.
    """
    population = _Population(task)
    n_context = len(task.extra_s)
    with_interval = task.account.route("interval") != "none" and len(task.sample_s) > 1
    with_context = task.account.route("context") != "none" and n_context > 1
    n_free = 1 + with_interval + with_context * (n_context - 1)
    n_mid = max(2, round((task.aims.mean() - DELAY_S) / task.bin_s))
    threshold = 8.0
    free = np.zeros(n_free)
    free[0] = 1.0

    def unpack(values: np.ndarray, boundary: float) -> tuple[float, float, np.ndarray]:
        # In units in which the middle condition needs about 1.
        offset = values[0] * boundary / population.step[n_mid - 1]
        interval = -values[1] * boundary if with_interval else 0.0
        context = -values[1 + with_interval :] * boundary if with_context else np.zeros(0)
        return offset, interval, _level_pushes(context, n_context)

    for _ in range(_ROUNDS):
        boundary = threshold

        def miss(values: np.ndarray, boundary: float = boundary) -> np.ndarray:
            produced = population.intervals(*unpack(values, boundary), boundary)
            return (produced.mean(axis=-1) - task.aims).ravel()

        free = least_squares(miss, free, diff_step=np.full(n_free, 1e-3), xtol=1e-6, ftol=1e-8).x
        produced = population.intervals(*unpack(free, boundary), boundary)
        mean = produced.mean(axis=-1)
        cv = produced.std(axis=-1) / mean
        threshold = boundary * float(cv.mean()) / task.cv
    offset, interval, context = unpack(free, boundary)
    return Timer(
        population.decay,
        boundary,
        offset,
        interval,
        context,
        population.initial_sd,
        population.sustained_sd,
        mean,
        cv,
    )
