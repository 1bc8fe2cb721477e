"""The demo: a session with known truth, and a job file to copy."""

from __future__ import annotations

from pathlib import Path

_JOB = """\
# The job of `portfire demo`: copy it, point `session` at your recording, and do
# `portfire run job.toml`. Keys that are left out have defaults.
session = "session/"
out = "."
seed = {seed}

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
    """
    from portfire.simulate import write_demo_session

    write_demo_session(out / "session", seed=seed)
    job = out / "job.toml"
    job.write_text(_JOB.format(seed=seed), encoding="utf-8")
    return job
