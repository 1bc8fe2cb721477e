"""The demo: a session with known truth, and a job file to copy."""

from __future__ import annotations

from pathlib import Path

from portfire.errors import InputError

_HEADING = "# The job of `portfire demo`"
_JOB = """\
# The job of `portfire demo`: copy it, point `session` at your recording, and do
# `portfire run job.toml`. Keys that are left out have defaults.
session = "session/"
out = "."
seed = {seed}

[window]
bin_s = 0.025

[compare]
latent_dims = [2, 3]

[decode]
cutoffs_s = [0.1, 0.2, 0.3]
draws = 200
"""


def write_demo_job(out: Path, seed: int) -> Path:
    """Write the demo session and its job file into a folder.

    Parameters
    ----------
    out : Path
        The folder; the session goes to ``<out>/session``.
    seed : int
        Seed of the session and of the job.

    Returns
    -------
    Path
        The job file.

    Raises
    ------
    InputError
        If the folder holds something else.
    """
    from portfire.simulate import write_demo_session

    job = out / "job.toml"
    _check_folder(out, job)
    # The job file comes first: with it there, a folder that was left half written is known as a demo's.
    job.write_text(_JOB.format(seed=seed), encoding="utf-8")
    write_demo_session(out / "session", seed=seed)
    return job


def _check_folder(out: Path, job: Path) -> None:
    names = sorted(path.name for path in out.iterdir() if not path.name.startswith("."))
    if job.is_file() and job.read_text(encoding="utf-8", errors="replace").startswith(_HEADING):
        return
    if names:
        raise InputError(f"{out}: holds {names[0]!r} and is no earlier demo; give a new or an empty folder")
