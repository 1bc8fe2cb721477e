"""A job: what to read, what to do with it, and where to leave the results."""

from __future__ import annotations

import math
import os
import tomllib
from collections.abc import Mapping
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from types import MappingProxyType
from typing import Any

from portfire.errors import InputError, nearest
from portfire.job._atomic import finite
from portfire.job._rules import read_settings


@dataclass(frozen=True)
class Window:
    """Which spikes count, and how they are binned.

    Parameters
    ----------
    bin_s : float
        Width of a bin (s).
    before_set_s : float
        Length of the run-up before the set cue (s).
    min_rate_hz : float
        Units below this rate (spikes/s) are left out.
    """

    bin_s: float
    before_set_s: float
    min_rate_hz: float


@dataclass(frozen=True)
class Models:
    """The model files, each of which is fitted and scored."""

    files: tuple[Path, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """File names without suffix: how results call the models."""
        return tuple(path.stem for path in self.files)


@dataclass(frozen=True)
class Compare:
    """What is compared, and on which folds.

    Parameters
    ----------
    sources : tuple of str
        Sources whose routes are contrasted; empty skips the contrasts.
    folds : int
        Number of folds.
    latent_dims : tuple of int or None
        Numbers of latent dimensions to choose from, ascending; None: settled by `check_job`.
    min_gain : float
        A gain below this (nats/trial) is no gain worth having.
    """

    sources: tuple[str, ...]
    folds: int
    latent_dims: tuple[int, ...] | None
    min_gain: float


@dataclass(frozen=True)
class Decode:
    """At which cutoffs (s from the set cue) to predict, and how many null draws at most."""

    cutoffs_s: tuple[float, ...]
    draws: int


@dataclass(frozen=True)
class Tests:
    """How tests are done.

    Parameters
    ----------
    level : float
        Of all tests.
    thorough : bool
        Whether persistence, time course, rivals, tests that survive a wrong model, predictive checks and
        unseen units are computed too; they cost several times the rest of the job.
    bootstrap : int
        Sessions drawn at most for each p of the contrasts; 0: none are drawn.
    assignment : {"free", "blocked", "sequence"}
        How the task dealt intervals and contexts to trials.
    unseen_conditions : bool
        Whether every condition is predicted from the others.
    """

    level: float
    thorough: bool = False
    bootstrap: int = 0
    assignment: str = "free"
    unseen_conditions: bool = False


@dataclass(frozen=True)
class Job:
    """Everything that a run is told, with all defaults filled in and all paths resolved.

    Parameters
    ----------
    sessions : tuple of Path
        Session folders or NWB files.
    out : Path
        Folder for the results.
    seed : int
        Seed of everything random.
    columns : mapping of str to str
        The file's name for each column that has another name there.
    window, model, compare, decode, tests
        The tables of the job file.
    source : Path or None
        The job file, or None for a bare session.
    """

    sessions: tuple[Path, ...]
    out: Path
    seed: int
    columns: Mapping[str, str]
    window: Window
    model: Models
    compare: Compare
    decode: Decode
    tests: Tests
    source: Path | None = None

    def to_dict(self) -> dict[str, Any]:
        """Return the job as plain values, laid out as a job file is.

        Paths start at the job file's folder, as in a job file, or at the out folder where there is no job
        file; models that the package ships go by their names.
        """
        base = self.out if self.source is None else self.source.absolute().parent
        sessions = [_relative(path, base) for path in self.sessions]
        models = [_shipped_name(path) or _relative(path, base) for path in self.model.files]
        plain: dict[str, Any] = finite(
            {
                "session": sessions[0] if len(sessions) == 1 else sessions,
                "out": _relative(self.out, base),
                "seed": self.seed,
                "columns": dict(self.columns),
                "window": asdict(self.window),
                "model": {"file": models},
                "compare": asdict(self.compare),
                "decode": asdict(self.decode),
                "tests": asdict(self.tests),
            }
        )
        return plain


def read_job(path: str | Path, out: str | Path | None = None) -> Job:
    """Read a job file, or take a bare session with all defaults.

    Parameters
    ----------
    path : str or Path
        A TOML job file, a session folder or an NWB file.
    out : str or Path, optional
        Folder for the results, relative to the current folder. Default: what the job file says
        (relative to that file), else ``fits/<session name>``.

    Returns
    -------
    Job
        Checked; nothing of the sessions has been read yet, only that they exist.

    Raises
    ------
    InputError
        If a path does not exist, the file is not TOML, a key is not known or a value not allowed.
    """
    path = Path(path)
    if not path.exists():
        beside = [p.name for p in path.parent.iterdir()] if path.parent.is_dir() else []
        near = nearest(path.name, beside)
        hint = f"did you mean {path.parent / near}?" if near else "a session or a job file is needed"
        raise InputError(f"{path}: there is no such file or folder; {hint}")
    if path.suffix.lower() == ".toml":
        job = _from_file(path)
    else:
        _check_session(path, str(path))
        job = _resolve({"session": str(path)}, Path(), str(path), source=None)
    if out is not None:
        job = replace(job, out=Path(out).absolute())
    for session in job.sessions:
        if job.out.resolve() == session.resolve():
            raise InputError(f"{job.out}: the results cannot go into the session itself; give another folder")
    return job


DEFAULT_DIMS, FEW_UNITS = (2, 3, 4, 5), 4
LEAST_TRAINING = 4


def check_job(job: Job, n_units: int, n_trials: int) -> Job:
    """Check a job against the size of a session, and settle the defaults that hang on it.

    Parameters
    ----------
    job : Job
        The job.
    n_units, n_trials : int
        Units and trials of the session that can be used.

    Returns
    -------
    Job
        With numbers of latent dimensions: where the job gives none, 2 to 5 as far as there are units, and
        1 too where there are fewer than four units.

    Raises
    ------
    InputError
        If there are more latent dimensions than units, or too few trials for the folds.
    """
    where = job.source or job.sessions[0]
    dims = job.compare.latent_dims
    if dims is None:
        dims = tuple(d for d in DEFAULT_DIMS if d <= n_units)
        if n_units < FEW_UNITS:
            dims = (1, *dims)
    if max(dims) > n_units:
        raise InputError(
            f"{where}: [compare] latent_dims goes up to {max(dims)}, but the session has {n_units} usable "
            f"units; at most {n_units} dimensions can be fitted"
        )
    needed = 4 * job.compare.folds
    if n_trials < needed:
        raise InputError(
            f"{where}: [compare] folds is {job.compare.folds}, which needs {needed} trials, "
            f"but the session has {n_trials} usable ones"
        )
    # Loads what computes, so only where trials have been read already.
    from portfire.comparison import count_fewest

    fewest = count_fewest(n_trials, job.compare.folds)
    if fewest < LEAST_TRAINING:
        advice = "use more folds, or more trials" if job.compare.folds < 5 else "use more trials"
        raise InputError(
            f"{where}: [compare] folds is {job.compare.folds}, which leaves {fewest} of the session's "
            f"{n_trials} usable trials to train on where the size is chosen; {LEAST_TRAINING} are needed: "
            f"{advice}"
        )
    return replace(job, compare=replace(job.compare, latent_dims=dims))


def _from_file(path: Path) -> Job:
    if path.is_dir():
        raise InputError(f"{path}: is a folder, but a job file was expected under this name")
    try:
        raw = tomllib.loads(path.read_text(encoding="utf-8"))
    except UnicodeDecodeError as error:
        raise InputError(f"{path}: is not UTF-8 text (byte {error.start}); a job file is TOML") from None
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{path}: is not valid TOML: {_lower(str(error))}") from None
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error.strerror})") from None
    if "session" not in raw:
        wrong = [key for key in raw if key == "path" or nearest(key, ("session",))]
        hint = f" instead of {wrong[0]!r}" if wrong else ""
        raise InputError(f'{path}: names no session; add a line such as session = "session/"{hint}')
    return _resolve(raw, path.parent, str(path), source=path)


def _resolve(raw: Mapping[str, Any], base: Path, where: str, source: Path | None) -> Job:
    settings = read_settings(raw, where)
    top = settings[""]
    base = base.absolute()
    sessions = tuple(base / name for name in top["session"])
    for session in sessions:
        if source is not None:
            _check_session(session, f"{where}: session {session}")
    window = Window(**settings["window"])
    decode = Decode(**settings["decode"])
    _check_cutoffs(window, decode, where)
    from portfire.dynamics import find_model  # loads what computes, so only when all else is right

    try:
        files = tuple(find_model(name, base) for name in settings["model"]["file"])
    except InputError as error:
        raise InputError(f"{where}: [model] file: {error}") from None
    models = Models(files)
    for name in models.names:
        if models.names.count(name) > 1:
            raise InputError(f"{where}: [model] file has two models called {name!r}; rename one of the files")
    name = session_name(sessions[0]) if len(sessions) == 1 else Path(where).stem
    return Job(
        sessions=sessions,
        out=base / (top["out"] or f"fits/{name}"),
        seed=top["seed"],
        columns=MappingProxyType({k: v for k, v in settings["columns"].items() if v is not None}),
        window=window,
        model=models,
        compare=Compare(**settings["compare"]),
        decode=decode,
        tests=Tests(**settings["tests"]),
        source=source,
    )


def session_name(path: Path) -> str:
    """Return how a session is called: its folder's name, or its file's without the suffix."""
    whole = path.resolve()
    return (whole.name if whole.is_dir() else whole.stem) or "session"


def _check_session(path: Path, where: str) -> None:
    if not path.exists():
        raise InputError(f"{where}: does not exist; a session folder or an .nwb file is needed")
    if not path.is_dir() and path.suffix.lower() != ".nwb":
        raise InputError(f"{where}: is neither a session folder, nor an .nwb file, nor a job file (.toml)")


def _check_cutoffs(window: Window, decode: Decode, where: str) -> None:
    bins = [_count_bins(cutoff, window.bin_s) for cutoff in decode.cutoffs_s]
    n_before = _count_bins(window.before_set_s, window.bin_s)
    for position, (cutoff, n_bins) in enumerate(zip(decode.cutoffs_s, bins, strict=True)):
        if n_bins == 0 and n_before == 0:
            raise InputError(
                f"{where}: [decode] cutoffs_s has {cutoff:g}, before which there is no whole bin of "
                f"{window.bin_s:g} s; give a run-up ([window] before_set_s) or a later cutoff"
            )
        if n_bins in bins[:position]:
            raise InputError(
                f"{where}: [decode] cutoffs_s has {decode.cutoffs_s[bins.index(n_bins)]:g} and {cutoff:g}, "
                f"which are the same in whole bins of {window.bin_s:g} s; leave one out"
            )


def _relative(path: Path, base: Path) -> str:
    try:
        return Path(os.path.relpath(path, base)).as_posix()
    except ValueError:  # another drive
        return path.as_posix()


def _shipped_name(path: Path) -> str | None:
    from portfire.dynamics import find_model, shipped_models

    return path.stem if path.stem in shipped_models() and find_model(path.stem) == path else None


def _count_bins(seconds: float, bin_s: float) -> int:
    return math.floor(seconds / bin_s + 0.5)


def _lower(text: str) -> str:
    return text[:1].lower() + text[1:]
