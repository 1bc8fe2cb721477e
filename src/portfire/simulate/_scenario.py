"""A scenario: what a session with known truth is drawn from."""

from __future__ import annotations

from dataclasses import dataclass, field

from portfire.accounts import Account
from portfire.dynamics import READOUTS, ModelFile, read_model
from portfire.errors import InputError


@dataclass(frozen=True)
class Scenario:
    """A task, a subject and a population, all invented; hashable.

    Parameters
    ----------
    model : ModelFile
        Kind of dynamics, cue response and noise that the fitted model assumes too.
    account : Account
        By which routes the sources push the latent state.
    n_trials, n_units : int
    n_silent : int, default 0
        Further units that fire less than 0.5 spikes/s.
    latent_dim : int, default 3
        Latent dimensions D; one of them carries the timing.
    sample_s : tuple of float
        Sample intervals (s).
    contexts : tuple of str
        Labels of the contexts.
    extra_s : tuple of float
        What each context adds to the interval asked for (s).
    mean_rate_hz : float, default 12.0
        Mean over units of the mean rate (spikes/s); rates are log-normal.
    rate_spread : float, default 0.6
        SD of the log rate over units.
    dispersion : float, default 1.0
        Of every unit's counts in bins of the dynamics' step, where the model's readout is negative binomial:
        their variance is mean + mean² / dispersion.
    ramp : float, default 0.8
        SD over units of the change of log rate while the timer runs from its start to the boundary.
    side_gain : float, default 0.4
        SD over units of the log rate per unit of a dimension without timing.
    cv : float, default 0.11
        Coefficient of variation of the produced interval within conditions, on average.
    pull : float, default 0.15
        Share by which intervals are pulled towards the middle of the sample intervals.
    trial_ratio : float, default 4.0
        Variance of the trial's own initial push, over the noise that every account has at the set cue.
    drift_sd : float, default 0.1
        SD of the slow change of each unit's log rate over the session.
    share_aborted, share_missed : float
        Shares of trials whose observation ends before the response, and of those without a response.
    n_late : int, default 0
        Trials with a response more than three times as late as asked for.
    bin_s : float, default 0.02
        Step of the dynamics (s).
    """

    model: ModelFile = field(default_factory=ModelFile)
    account: Account = field(
        default_factory=lambda: Account.parse("interval=sustained,context=initial,trial=initial")
    )
    n_trials: int = 400
    n_units: int = 60
    n_silent: int = 0
    latent_dim: int = 3
    sample_s: tuple[float, ...] = (0.5, 0.7, 0.9)
    contexts: tuple[str, ...] = ("low hum", "mid hum", "high hum")
    extra_s: tuple[float, ...] = (0.0, 0.15, 0.3)
    mean_rate_hz: float = 12.0
    rate_spread: float = 0.6
    dispersion: float = 1.0
    ramp: float = 0.8
    side_gain: float = 0.4
    cv: float = 0.11
    pull: float = 0.15
    trial_ratio: float = 4.0
    drift_sd: float = 0.1
    share_aborted: float = 0.01
    share_missed: float = 0.005
    n_late: int = 0
    bin_s: float = 0.02

    @property
    def conditions(self) -> tuple[tuple[str, float], ...]:
        """All pairs of context and sample interval (s)."""
        return tuple((context, sample) for context in self.contexts for sample in self.sample_s)


def scenario_of_model(
    model: ModelFile, n_trials: int | None = None, n_units: int | None = None, account: Account | None = None
) -> Scenario:
    """The scenario that a model file's ``[simulate]`` table describes.

    Parameters
    ----------
    model : ModelFile
    n_trials, n_units : int, optional
        Instead of the file's.
    account : Account, optional
        Instead of the file's.

    Raises
    ------
    InputError
        If the table contradicts itself, or spikes cannot be drawn from the model.
    """
    asked = model.simulate
    where = f"model {model.name!r}, [simulate]"
    if not READOUTS[model.readout].of_counts:
        raise InputError(
            f"model {model.name!r}: readout = {model.readout!r} has no spikes to draw; simulate from a model "
            "with readout = 'poisson' or 'negative_binomial'."
        )
    if len(asked.contexts) != len(asked.extra_s):
        raise InputError(
            f"{where}: {len(asked.contexts)} contexts but {len(asked.extra_s)} extra_s; give one for each "
            "context."
        )
    for name in ("contexts", "sample_s"):
        values = getattr(asked, name)
        if len(set(values)) < len(values):
            raise InputError(f"{where}: {name} = {list(values)!r} holds a value twice; give each once.")
    shortest = min(asked.sample_s) + min(asked.extra_s)
    if min(asked.sample_s) < 0.1 or shortest < 0.1 or max(asked.sample_s) + max(asked.extra_s) > 10:
        raise InputError(
            f"{where}: sample_s and sample_s + extra_s should be intervals from 0.1 to 10 s; received "
            f"{list(asked.sample_s)!r} and {list(asked.extra_s)!r}."
        )
    n_units = asked.units if n_units is None else n_units
    if not 1 <= asked.latent_dim <= n_units:
        raise InputError(
            f"{where}: latent_dim = {asked.latent_dim} does not suit {n_units} units; give 1 to {n_units}."
        )
    return Scenario(
        model=model,
        account=Account.parse(asked.account) if account is None else account,
        n_trials=asked.trials if n_trials is None else n_trials,
        n_units=n_units,
        latent_dim=asked.latent_dim,
        sample_s=asked.sample_s,
        contexts=asked.contexts,
        extra_s=asked.extra_s,
        mean_rate_hz=asked.mean_rate_hz,
        dispersion=asked.dispersion,
        drift_sd=0.0 if model.drift == "off" else Scenario.drift_sd,
    )


def demo_scenario() -> Scenario:
    """The scenario of `portfire demo`: ferrets lick after a shown interval and what a hum adds to it."""
    return Scenario(
        model=read_model("linear"),
        n_trials=300,
        n_units=40,
        n_silent=3,
        share_aborted=0.015,
        share_missed=0.01,
        n_late=1,
    )
