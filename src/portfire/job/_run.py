"""The whole job."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

from portfire.job._file import Job, read_job
from portfire.job._result import Result, load_result
from portfire.job._workspace import check_out, open_workspace


def run(
    job: Job | str | Path,
    out: str | Path | None = None,
    workers: int | None = None,
    quiet: bool = False,
) -> Result:
    """Do the whole job: choose size, fit, compare accounts, decode, test.

    What an earlier run left in the out folder is used again. The same job and seed give the same
    result. A script that calls this must do so under ``if __name__ == "__main__":``, since worker
    processes import the script.

    Parameters
    ----------
    job : Job, str or Path
        A job, a job file, a session folder or an NWB file.
    out : str or Path, optional
        Folder for the results; see `read_job`.
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
    if not isinstance(job, Job):
        job = read_job(job, out)
    elif out is not None:
        job = replace(job, out=Path(out).absolute())
    check_out(job.out)

    from portfire.job._pipeline import run_job  # loads what computes, so only when the paths are right

    with open_workspace(job.out, workers, quiet) as workspace:
        run_job(job, workspace)
    return load_result(job.out)
