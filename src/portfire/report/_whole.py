"""The whole job, with its report: what the command and `portfire.run` both do."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from portfire.job import Job, Result


def run(
    job: Job | str | Path,
    out: str | Path | None = None,
    workers: int | None = None,
    quiet: bool = False,
) -> Result:
    """Do the whole job and draw its report.

    What an earlier run left in the out folder is used again. A script that calls this must do so under
    ``if __name__ == "__main__":``, since worker processes import the script.

    Parameters
    ----------
    job : Job, str or Path
        A job, a job file, a session folder or an NWB file.
    out : str or Path, optional
        Folder for the results; by default what the job file says, else ``fits/<session name>``.
    workers : int, optional
        Number of processes that fits run in. Default: one for every core.
    quiet : bool
        Show no progress; warnings still go to standard error.

    Returns
    -------
    Result
        What was found, as tables.

    Raises
    ------
    InputError
        If the input is wrong.
    PortfireError
        If the job failed, or was stopped by Ctrl-C or SIGTERM: the next run resumes.
    """
    from portfire.job import run as run_without_report

    result = run_without_report(job, out, workers, quiet)
    draw_reports(result)
    return result


def draw_reports(result: Result) -> None:
    """Draw the report of a result, and that of each session where it names several."""
    from portfire.report import draw_report

    for row in result.raw.get("sessions", []):
        draw_report(result.path / row["folder"])
    draw_report(result.path)
