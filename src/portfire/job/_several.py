"""Several sessions in one job: each in a folder of its own, and one result that names them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

from portfire.job._atomic import write_json_atomic
from portfire.job._file import Job, session_name
from portfire.job._result import RESULT, load_result
from portfire.job._store import Store
from portfire.job._workspace import Workspace


def run_several(job: Job, workspace: Workspace, run_one: Callable[[Job, Workspace], None]) -> None:
    """Run a job's sessions one after the other, each with its own fits and results."""
    rows = []
    names: list[str] = []
    for session in job.sessions:
        name = session_name(session)
        while name in names:
            name += "-again"
        names.append(name)
        folder = workspace.out / name
        folder.mkdir(parents=True, exist_ok=True)
        own = replace(workspace, out=folder, store=Store(folder / "fits"))
        run_one(replace(job, sessions=(session,), out=folder), own)
        raw = load_result(folder).raw
        rows.append({"session": name, "folder": name, "chosen": raw["chosen"], "contrasts": raw["contrasts"]})
    from portfire import __version__

    write_json_atomic(
        workspace.out / RESULT,
        {
            "portfire": __version__,
            "seed": job.seed,
            "settings": job.to_dict(),
            "sessions": rows,
            "contrasts": [{"session": row["session"], **c} for row in rows for c in row["contrasts"]],
            "decode": [],
            "accounts": [],
            "warnings": [
                f"Several sessions: the results of each are in the folder of its name ({', '.join(names)})."
            ],
        },
    )
