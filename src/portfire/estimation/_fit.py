"""A fitted model as a value, and the one function that makes it."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any
from zipfile import BadZipFile

import numpy as np

from portfire.accounts import Account, Column
from portfire.dynamics import ModelFile, Setup, make_setup, model_from_dict, model_to_dict, read_model
from portfire.errors import InputError
from portfire.estimation._kinds import kind_of
from portfire.session import Trials

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr

DEFAULT_LATENT_DIM = 3
STATUS_WORDS = {
    "converged": "The objective no longer rises.",
    "iterations": "The objective still rose when its iterations were spent; fit again with start= this fit.",
    "unconverged paths": "Some trials' paths did not settle; look at those trials, or use wider bins.",
}


@dataclass(frozen=True)
class Hazard:
    """Discrete-time hazard of the response, sigmoid(level + weights·x_t) a bin.

    Parameters
    ----------
    level : float
    weights : array, shape (D,)
        On the state in the fit's own coordinates.
    """

    level: float
    weights: np.ndarray


@dataclass(frozen=True)
class Fit:
    """A model fitted to trials; immutable.

    Parameters
    ----------
    setup : Setup
        Sizes, time grid and bases.
    account : Account
    params : dict of arrays
        As `dynamics.parameter_shapes` names them, in the coordinates of the fit.
    canonical : array, shape (D, D)
        Map from the fit's coordinates to the canonical ones: orthonormal readout columns, ordered by
        the variance of log rate that they explain.
    value : float
        Penalised variational lower bound on the log likelihood of the training trials (nats).
    trace : tuple of float
        Objective after every iteration.
    status : str
        A key of the sentences that `advice` gives.
    seed : int
    session : dict
        Labels and scales that new trials must share: units, contexts, sample centre and scale, digest.
    drift : bool
        Whether rates were free to change slowly over the session.
    hazard : Hazard or None
    """

    setup: Setup
    account: Account
    params: dict[str, np.ndarray]
    canonical: np.ndarray
    value: float
    trace: tuple[float, ...]
    status: str
    seed: int
    session: dict[str, Any]
    drift: bool = True
    hazard: Hazard | None = None

    @property
    def latent_dim(self) -> int:
        """Number of latent dimensions D."""
        return self.setup.latent_dim

    @property
    def advice(self) -> str:
        """What the status means and what to do, in one sentence."""
        return STATUS_WORDS[self.status]

    def check(self, trials: Trials) -> None:
        """Refuse trials of other units, bins, contexts or scales than those of the fit."""
        mine = self.session
        if list(trials.unit) != mine["units"]:
            raise InputError("these trials have other units than the fit; bin them from the same session.")
        if trials.bin_s != self.setup.bin_s or trials.n_before != self.setup.n_before:
            raise InputError(
                f"these trials have bins of {trials.bin_s} s and {trials.n_before} run-up bins, the fit "
                f"{self.setup.bin_s} s and {self.setup.n_before}; bin them alike."
            )
        if list(trials.contexts) != mine["contexts"]:
            raise InputError(
                f"these trials have the contexts {list(trials.contexts)}, the fit {mine['contexts']}."
            )
        scales = (trials.sample_center, trials.sample_scale), (mine["sample_center"], mine["sample_scale"])
        if not np.allclose(*scales):
            raise InputError(
                "these trials have another mean and spread of the sample interval "
                f"({scales[0][0]:.4g} and {scales[0][1]:.4g} s) than the fit ({scales[1][0]:.4g} and "
                f"{scales[1][1]:.4g} s), and pushes are in these units; bin them from the same session."
            )

    def score(self, trials: Trials) -> pd.DataFrame:
        """Log marginal likelihood of every trial.

        Returns
        -------
        DataFrame
            Columns trial, loglik and loglik_se (nats; with a run-up, of the counts after the set cue
            given those before), n_spikes, n_bins.
        """
        from portfire.estimation._score import score_trials

        self.check(trials)
        return score_trials(self, trials)

    def infer(self, trials: Trials, until_s: float | None = None) -> xr.Dataset:
        """Posterior of state and pushes, in canonical coordinates.

        Parameters
        ----------
        until_s : float, optional
            Use spikes up to this time after the set cue (s, rounded to whole bins) and none after it;
            by default all of the trial.

        Returns
        -------
        Dataset
            ``state`` (trial, time, latent), ``initial`` and ``sustained`` (trial, latent), and their
            covariances ``state_cov``, ``initial_cov``, ``sustained_cov``.
        """
        from portfire.estimation._infer import infer_trials

        self.check(trials)
        return infer_trials(self, trials, until_s)

    def save(self, folder: str | Path) -> Path:
        """Write ``fit.json`` and ``arrays.npz`` into a folder, which is made where it is missing."""
        folder = Path(folder)
        folder.mkdir(parents=True, exist_ok=True)
        np.savez(folder / "arrays.npz", allow_pickle=False, **self.arrays())
        (folder / "fit.json").write_text(
            json.dumps(self.to_dict(), indent=1, allow_nan=False), encoding="utf-8"
        )
        return folder

    def arrays(self) -> dict[str, np.ndarray]:
        """Everything numeric that is saved."""
        out = {f"param_{name}": value for name, value in self.params.items()}
        out["canonical"] = self.canonical
        out["trace"] = np.array(self.trace)
        if self.hazard is not None:
            out["hazard"] = np.concatenate([[self.hazard.level], self.hazard.weights])
        return out

    def to_dict(self) -> dict[str, Any]:
        """Everything else that is saved, JSON-able."""
        return {
            "account": str(self.account),
            "model": model_to_dict(self.setup.model),
            "model_name": self.setup.model.name,
            "setup": self.setup.to_dict(),
            "value": self.value,
            "status": self.status,
            "advice": self.advice,
            "seed": self.seed,
            "drift": self.drift,
            "session": self.session,
        }


def fit_from_parts(content: Mapping[str, Any], arrays: Mapping[str, np.ndarray]) -> Fit:
    """Rebuild a fit from what `Fit.to_dict` and `Fit.arrays` gave."""
    model = model_from_dict(content["model"], content["model_name"], "fit.json")
    stored = dict(content["setup"])
    columns = tuple(
        Column(s, level, float("inf") if h is None else h) for s, level, h in stored.pop("columns")
    )
    sources = tuple(stored.pop("sources"))
    setup = Setup(model=model, columns=columns, sources=sources, **stored)
    hazard = arrays.get("hazard")
    return Fit(
        setup=setup,
        account=Account.parse(content["account"]).restrict(sources),
        params={name[6:]: np.asarray(v) for name, v in arrays.items() if name.startswith("param_")},
        canonical=np.asarray(arrays["canonical"]),
        value=float(content["value"]),
        trace=tuple(np.asarray(arrays["trace"]).tolist()),
        status=content["status"],
        seed=int(content["seed"]),
        session=dict(content["session"]),
        drift=bool(content["drift"]),
        hazard=None if hazard is None else Hazard(float(hazard[0]), np.asarray(hazard[1:])),
    )


def load_fit(folder: str | Path) -> Fit:
    """Read a fit that `Fit.save` wrote.

    Raises
    ------
    InputError
        If the folder holds no readable fit.
    """
    folder = Path(folder)
    for name in ("fit.json", "arrays.npz"):
        if not (folder / name).is_file():
            raise InputError(f"{folder}: there is no {name} here; give the folder of one fit.")
    try:
        content = json.loads((folder / "fit.json").read_text(encoding="utf-8"))
        # Opened here, since NumPy leaves a file that it cannot read open.
        with open(folder / "arrays.npz", "rb") as file, np.load(file, allow_pickle=False) as stored:
            arrays = {name: stored[name] for name in stored.files}
        return fit_from_parts(content, arrays)
    except (ValueError, KeyError, TypeError, OSError, EOFError, BadZipFile) as error:
        raise InputError(f"{folder}: this fit cannot be read ({error}); fit again.") from error


def describe_session(trials: Trials) -> dict[str, Any]:
    """What a fit keeps of the session that it was fitted to."""
    return {
        "units": list(trials.unit),
        "contexts": list(trials.contexts),
        "sample_center": trials.sample_center,
        "sample_scale": trials.sample_scale,
        "conditions": [list(pair) for pair in trials.conditions],
        "n_trials": len(trials),
        "digest": trials.digest,
    }


def fit(
    trials: Trials,
    model: str | Path | Mapping[str, Any] | ModelFile = "linear",
    account: str | Account | Mapping[str, str] | None = None,
    latent_dim: int | None = None,
    seed: int = 0,
    *,
    start: Fit | None = None,
    drift: bool | None = None,
    n_reference: int | None = None,
    tolerance: float = 0.05,
    max_iterations: int = 300,
) -> Fit:
    """Fit latent dynamics to the counts of single trials by a variational bound on their likelihood.

    Parameters
    ----------
    trials : Trials
    model : str, path, dict or ModelFile
        A shipped name, a model file, or its tables.
    account : str or Account, optional
        Which source may push by which route; the full account by default.
    latent_dim : int, optional
        Latent dimensions D, at most the number of units; 3 by default, or those of ``start``.
    seed : int, default 0
        Kept with the fit; scores hang on it, and the search where it is a random one.
    start : Fit, optional
        Start from this fit (of the same size and nuisance terms) instead of from the data.
    drift : bool, optional
        Whether rates may change slowly; by default as the model file says (``choose`` means yes here).
    n_reference : int, optional
        Bins over which push kernels sum to one; by default the median of these trials.
    tolerance : float, default 0.05
        The ascent ends when four iterations together gain less, in nats.
    max_iterations : int, default 300

    Returns
    -------
    Fit

    Raises
    ------
    InputError
        If there are more latent dimensions than units, or no trials, or ``start`` is of another size or
        of other units than these trials.
    """
    spec = read_model(model)
    if len(trials) == 0:
        raise InputError("there are no trials to fit.")
    if latent_dim is None:
        latent_dim = start.latent_dim if start else DEFAULT_LATENT_DIM
    if not 1 <= latent_dim <= len(trials.unit):
        raise InputError(
            f"latent_dim = {latent_dim} does not suit {len(trials.unit)} units; give 1 to {len(trials.unit)}."
        )
    if start is not None:
        start.check(trials)
        if start.latent_dim != latent_dim:
            raise InputError(
                f"latent_dim = {latent_dim}, but the fit to start from has {start.latent_dim}; give the same."
            )
    if drift is None:
        drift = start.drift if start else spec.drift != "off"
    setup = start.setup if start else make_setup(trials, spec, latent_dim, spec.drift != "off", n_reference)
    whole = Account.full(setup.sources) if account is None else Account.parse(account).restrict(setup.sources)
    params = start.params if start else None
    search = kind_of(setup).search
    found = search(trials, setup, whole, drift, params, tolerance, max_iterations, seed)
    return Fit(
        setup=setup,
        account=whole,
        params=found.params,
        canonical=found.canonical,
        value=found.value,
        trace=found.trace,
        status=found.status,
        seed=seed,
        session=describe_session(trials),
        drift=drift and setup.n_drift > 0,
    )


def with_hazard(fitted: Fit, hazard: Hazard) -> Fit:
    """The same fit with a response hazard."""
    return replace(fitted, hazard=hazard)
