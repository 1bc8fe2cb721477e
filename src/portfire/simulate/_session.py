"""Sessions with known truth: in memory, as a folder, and the one of the demo."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from portfire.accounts import Account
from portfire.dynamics import ModelFile, read_model, shipped_models
from portfire.errors import InputError, nearest
from portfire.session import Session
from portfire.simulate._draw import Drawn, Mishaps, draw
from portfire.simulate._folder import check_folder, write_folder
from portfire.simulate._make import make_system
from portfire.simulate._scenario import Scenario, demo_scenario, scenario_of_model
from portfire.simulate._system import System

if TYPE_CHECKING:
    from portfire.estimation import Fit

_DEMO = """\
The task. A ferret, head fixed, hears two clicks, the lead and the set click, 0.5, 0.7 or 0.9 s apart, and
licks when the same interval has passed again and an extra with it. A hum in the background, there from
before the lead click, tells the extra: low hum none, mid hum 0.15 s, high hum 0.3 s. Hums and intervals
change at random from trial to trial. On a few trials the ferret does not lick, licks far too late, or
observation ends early; a few units hardly fire.

The truth. The sample interval acts on the latent state until the response (sustained). The context, which
hum it is, shifts the state at the set click (initial). Trials of one condition differ in where the state is
at the set click (trial, initial). One dimension of the state is the timer: the lick follows its first
passage through a boundary."""


def draw_session(scenario: Scenario, seed: int = 0) -> tuple[Session, Drawn]:
    """Draw a session in memory.

    Parameters
    ----------
    scenario : Scenario
    seed : int, default 0

    Returns
    -------
    Session
    Drawn
        The session with what is otherwise hidden; see also `true_parameters`.
    """
    drawn = draw_scenario(scenario, seed)
    return Session.from_arrays(drawn.spike_times, drawn.trials), drawn


def draw_scenario(scenario: Scenario, seed: int) -> Drawn:
    """Draw a session of a scenario, with parameters and trials from one seed."""
    mishaps = Mishaps(scenario.share_aborted, scenario.share_missed, scenario.n_late)
    return draw(make_system(scenario, seed), scenario.n_trials, seed, mishaps)


def simulate_session(
    model_or_fit: str | Path | Mapping[str, Any] | ModelFile | Fit,
    out: str | Path,
    n_trials: int | None = None,
    n_units: int | None = None,
    account: str | Account | Mapping[str, str] | None = None,
    seed: int = 0,
) -> Path:
    """Draw a session and write it with its truth.

    Parameters
    ----------
    model_or_fit : str, path, dict, ModelFile or Fit
        A shipped model's name or a model file, whose ``[simulate]`` table says what is drawn; or a fit or
        its folder, whose parameters, conditions and response hazard are used.
    out : path
        Folder for ``spikes.csv``, ``trials.csv``, ``truth.json`` and ``README.txt``; new, empty, or one
        with an earlier simulated session, which is replaced.
    n_trials, n_units : int, optional
        The model's or fit's own by default.
    account : str or Account, optional
        By which routes the sources push; a source left out does not. The model's or fit's own by default.
    seed : int, default 0
        The same arguments give the same files.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    InputError
        If the model, fit or account cannot be drawn from, a number is below one, or the folder holds
        anything but a simulated session.
    """
    out = Path(out)
    check_folder(out)
    for name, value in (("n_trials", n_trials), ("n_units", n_units)):
        if value is not None and value < 1:
            raise InputError(f"{name} = {value} is too few; give 1 or more.")
    wanted = None if account is None else Account.parse(account)
    source = _read_source(model_or_fit)
    made_from: dict[str, Any] = {"n_trials": n_trials, "n_units": n_units, "seed": seed}
    made_from["account"] = None if wanted is None else str(wanted)
    if isinstance(source, ModelFile):
        scenario = scenario_of_model(source, n_trials, n_units, wanted)
        made_from = {"model": scenario.model.name, **made_from}
        drawn = draw_scenario(scenario, seed)
        story = f"Made by `portfire simulate` from the model {scenario.model.name!r}, seed {seed}."
    else:
        drawn = draw(_system(source, n_units, wanted, seed), n_trials or source.session["n_trials"], seed)
        made_from = {"fit": source.session["digest"], "fit_account": str(source.account), **made_from}
        story = f"Made by `portfire simulate` from a fit of {source.account}, seed {seed}."
    story += f"\nTruth: {drawn.system.account}."
    write_folder(out, drawn, made_from, story)
    return out


def write_demo_session(out: str | Path, seed: int = 0) -> Path:
    """Write the demo session: ferrets that lick after an interval between clicks and a hum's extra.

    A folder that already holds it is left as it is.

    Parameters
    ----------
    out : path
        The folder.
    seed : int, default 0

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    InputError
        If the folder holds anything but a simulated session.
    """
    out = Path(out)
    check_folder(out)
    drawn = draw_scenario(demo_scenario(), seed)
    write_folder(out, drawn, {"demo": True, "seed": seed}, _DEMO)
    return out


def _read_source(model_or_fit: str | Path | Mapping[str, Any] | ModelFile | Fit) -> ModelFile | Fit:
    if isinstance(model_or_fit, Mapping | ModelFile):
        return read_model(model_or_fit)
    if not isinstance(model_or_fit, str | Path):
        return model_or_fit
    text, known = str(model_or_fit), shipped_models()
    if text in known or Path(text).is_file():
        return read_model(text)
    if not Path(text).exists():
        near = nearest(text, known)
        hint = f"did you mean {near!r}?" if near else f"shipped is {', '.join(known)}."
        raise InputError(f"{text}: there is no such model or fit, neither a file nor a folder; {hint}")
    from portfire.estimation import load_fit

    return load_fit(model_or_fit)


def _system(fitted: Fit, n_units: int | None, account: Account | None, seed: int) -> System:
    from portfire.simulate._from_fit import system_of_fit

    return system_of_fit(fitted, n_units, account, seed)
