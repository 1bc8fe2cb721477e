"""The whole job and the demo, each as a command of its own, with time and peak memory."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

_PERIOD_S = 0.1
_JOB = """\
session = "session/"
seed = 0

[model]
file = "linear"

[compare]
sources = ["interval", "context", "trial"]
folds = {folds}
latent_dims = {latent_dims}
"""


@dataclass(frozen=True)
class Spent:
    """What a command took.

    Parameters
    ----------
    wall_s : float
    rss_mib : float or None
        Greatest sum of resident memory over the command and every process it started, looked at ten
        times a second. Pages that processes share count once for each. None where there is no /proc.
    """

    wall_s: float
    rss_mib: float | None


def watch(command: Sequence[str], folder: Path, cache: Path) -> Spent:
    """Run a command with its compiled code in ``cache``, and see what it takes.

    Raises
    ------
    SystemExit
        If the command fails; its last lines are in the message.
    """
    start = time.perf_counter()
    with open(folder / "output.txt", "w+", encoding="utf-8") as output:
        process = subprocess.Popen(
            command,
            cwd=folder,
            env={**os.environ, "PORTFIRE_CACHE": str(cache)},
            stdin=subprocess.DEVNULL,
            stdout=output,
            stderr=subprocess.STDOUT,
            start_new_session=True,
        )
        peak: float | None = None
        try:
            while True:
                seen = _resident_mib(process.pid)
                peak = seen if peak is None or seen is None else max(peak, seen)
                try:
                    process.wait(_PERIOD_S)
                    break
                except subprocess.TimeoutExpired:
                    continue
        finally:
            if process.poll() is None:
                os.killpg(process.pid, signal.SIGTERM)
                process.wait()
        wall_s = time.perf_counter() - start
        if process.returncode:
            output.seek(0)
            last = "".join(output.readlines()[-5:]).strip()
            raise SystemExit(f"bench: {' '.join(command)} ended with {process.returncode}: {last}")
    return Spent(wall_s, peak)


def _resident_mib(session: int) -> float | None:
    """Resident memory of all processes of an operating-system session (MiB)."""
    if not Path("/proc/self/statm").exists():
        return None
    pages = 0
    for entry in os.scandir("/proc"):
        if not entry.name.isdigit():
            continue
        try:
            # The name of a program, in brackets, may hold spaces.
            fields = Path(entry.path, "stat").read_text(errors="replace").rpartition(")")[2].split()
            if int(fields[3]) == session:
                pages += int(fields[21])
        except (FileNotFoundError, ProcessLookupError):
            continue
    return pages * os.sysconf("SC_PAGE_SIZE") / 2**20


def measure_job(n_trials: int, n_units: int, folds: int, latent_dims: Sequence[int]) -> dict[str, Any]:
    """`portfire run` on a simulated session of nine conditions, all three sources, from a cold start."""
    from portfire.simulate import simulate_session

    with tempfile.TemporaryDirectory(prefix="portfire-bench-") as scratch:
        folder = Path(scratch)
        simulate_session("linear", folder / "session", n_trials=n_trials, n_units=n_units, seed=0)
        job = _JOB.format(folds=folds, latent_dims=list(latent_dims))
        (folder / "job.toml").write_text(job, encoding="utf-8")
        command = [sys.executable, "-m", "portfire", "run", "job.toml", "--out", "out", "--quiet"]
        spent = watch(command, folder, folder / "cache")
        return {"spent": spent, **_verdicts(folder / "out")}


def measure_demo() -> dict[str, Any]:
    """`portfire demo` from a cold start: no compiled code, no earlier results."""
    with tempfile.TemporaryDirectory(prefix="portfire-bench-") as scratch:
        folder = Path(scratch)
        command = [sys.executable, "-m", "portfire", "demo", "--out", "out", "--quiet"]
        spent = watch(command, folder, folder / "cache")
        return {"spent": spent, **_verdicts(folder / "out")}


def _verdicts(out: Path) -> dict[str, Any]:
    result = json.loads((out / "result.json").read_text(encoding="utf-8"))
    if not (out / "report.html").is_file():
        raise SystemExit(f"bench: the run left no report in {out}.")
    return {
        "session": {name: result["session"][name] for name in ("units_used", "trials_used", "conditions")},
        "latent_dim": result["chosen"]["latent_dim"],
        "verdicts": {row["source"]: row["verdict"] for row in result["contrasts"]},
    }
