"""The commands. Each checks its paths first, and loads what computes only then."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from portfire.cli._output import write_line

if TYPE_CHECKING:
    from portfire.job import Job

_PATH = click.Path(path_type=Path)
_seed_option = click.option(
    "--seed",
    type=click.IntRange(min=0, max=2**32 - 1),
    default=0,
    show_default=True,
    metavar="N",
    help="Seed of everything random.",
)
_workers_option = click.option(
    "--workers",
    type=click.IntRange(min=1),
    metavar="N",
    help="Number of processes that fits run in. Default: one for every core.",
)
_quiet_option = click.option("--quiet", is_flag=True, help="Show no progress.")


class _InOrder(click.Group):
    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(self.commands)


def _show_version(ctx: click.Context, option: click.Parameter, wanted: bool) -> None:
    if wanted and not ctx.resilient_parsing:
        from portfire import __version__

        write_line(f"portfire {__version__}")
        ctx.exit()


@click.group(cls=_InOrder, context_settings={"help_option_names": ["-h", "--help"]})
@click.option(
    "--version",
    is_flag=True,
    expose_value=False,
    is_eager=True,
    callback=_show_version,
    help="Show the version.",
)
def portfire() -> None:
    """Tell from single-trial spike counts what sets off a timed act.

    Fits latent dynamics to a recording, separates where the population starts at the set cue from
    what drives it until the response, and tests both on trials that the fit has not seen.
    """


@portfire.command()
@click.option(
    "--out", type=_PATH, default=Path("fits/demo"), show_default=True, help="Folder for everything."
)
@_seed_option
@_workers_option
@_quiet_option
def demo(out: Path, seed: int, workers: int | None, quiet: bool) -> None:
    """Make the demo session, do the whole job on it, write the report."""
    from portfire.cli._demo import write_demo_job
    from portfire.job import check_out, read_job

    out = check_out(out)
    _do_job(read_job(write_demo_job(out, seed)), workers, quiet)


@portfire.command()
@click.argument("session", type=_PATH)
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
def inspect(session: Path, as_json: bool) -> None:
    """Check a recording and its behaviour before anything is fitted.

    SESSION is a session folder, an .nwb file, or a job file that names one.
    """
    path, columns, window = _find_session(session)

    import json

    from portfire.job import finite
    from portfire.session import format_inspection, inspect_session, read_session

    found = inspect_session(read_session(path, columns), **window)
    write_line(
        json.dumps(finite(found), indent=1, ensure_ascii=False) if as_json else format_inspection(found)
    )


@portfire.command()
@click.argument("session", type=_PATH)
@click.option("--model", default="linear", show_default=True, help="A model file or a shipped name.")
@click.option(
    "--account",
    required=True,
    metavar="ACCOUNT",
    help="Such as interval=both,context=initial,trial=initial; a source left out is none.",
)
@click.option("--out", type=_PATH, required=True, help="Folder for the fit.")
@click.option(
    "--latent-dim",
    type=click.IntRange(min=1),
    default=3,
    show_default=True,
    metavar="N",
    help="Number of latent dimensions.",
)
@_seed_option
def fit(session: Path, model: str, account: str, out: Path, latent_dim: int, seed: int) -> None:
    """Fit one account to a session.

    SESSION is a session folder, an .nwb file, or a job file, whose window is then used.
    """
    from portfire.accounts import Account

    wanted = Account.parse(account)
    path, columns, window = _find_session(session)

    from portfire.dynamics import find_model
    from portfire.errors import InputError
    from portfire.job import check_out

    file = find_model(model)
    if out.resolve() == path.resolve():
        raise InputError(f"{out}: the fit cannot go into the session itself; give another folder")
    out = check_out(out)

    from portfire import estimation
    from portfire.session import read_session

    trials = read_session(path, columns).bin(**window)
    fitted = estimation.fit(trials, model=file, account=wanted, latent_dim=latent_dim, seed=seed)
    hazard = estimation.fit_hazard(fitted, trials)
    if hazard is not None:
        # Sessions that are simulated from the fit end by it.
        fitted = estimation.with_hazard(fitted, hazard)
    fitted.save(out)
    write_line(f"account {fitted.account}, {latent_dim} latent dimensions, {len(trials)} trials")
    write_line(f"{fitted.status}: {fitted.advice}")
    write_line(f"fit: {out}")


@portfire.command(short_help="Do the whole job on a session, or as a job file says.")
@click.argument("session_or_job", type=_PATH)
@click.option("--out", type=_PATH, help="Folder for the results. Default: fits/<session name>.")
@_workers_option
@_quiet_option
def run(session_or_job: Path, out: Path | None, workers: int | None, quiet: bool) -> None:
    """Do the whole job: choose size, fit, compare accounts, decode, test, report.

    SESSION_OR_JOB is a session folder, an .nwb file or a job file (.toml). What an earlier run left
    in the out folder is used again.
    """
    from portfire.job import read_job

    _do_job(read_job(session_or_job, out), workers, quiet)


@portfire.command(short_help="Draw a session with known truth.")
@click.argument("model_or_fit")
@click.option("--out", type=_PATH, required=True, metavar="SESSION", help="Folder for the session.")
@click.option(
    "--trials", type=click.IntRange(min=1), metavar="N", help="Default: as many as the model or fit has."
)
@click.option(
    "--units", type=click.IntRange(min=1), metavar="N", help="Default: as many as the model or fit has."
)
@click.option(
    "--account",
    metavar="ACCOUNT",
    help="By which routes the sources push. Default: the model's or fit's own.",
)
@_seed_option
def simulate(
    model_or_fit: str, out: Path, trials: int | None, units: int | None, account: str | None, seed: int
) -> None:
    """Draw a session with known truth, and write the truth to truth.json.

    MODEL_OR_FIT is a model file, a shipped name, or the folder of a fit.
    """
    from portfire.accounts import Account
    from portfire.job import check_out

    wanted = None if account is None else Account.parse(account)
    out = check_out(out)

    from portfire.simulate import simulate_session

    simulate_session(model_or_fit, out, n_trials=trials, n_units=units, account=wanted, seed=seed)
    write_line(f"session: {out}")


@portfire.command()
@click.argument("folder", type=_PATH, metavar="DIR")
def report(folder: Path) -> None:
    """Draw the report of a finished run again."""
    from portfire.job import load_result

    load_result(folder)

    from portfire.report import draw_report

    draw_report(folder)
    write_line(f"report: {folder / 'report.html'}")


def _do_job(job: Job, workers: int | None, quiet: bool) -> None:
    from portfire import job as jobs

    result = jobs.run(job, workers=workers, quiet=quiet)

    from portfire.report import draw_reports

    draw_reports(result)
    write_line(str(result))
    write_line(f"results: {job.out / 'result.json'}")
    write_line(f"report: {job.out / 'report.html'}")


def _find_session(path: Path) -> tuple[Path, dict[str, str] | None, dict[str, Any]]:
    """Return a session's path, the names of its columns and its window, from a job file or bare."""
    if path.suffix.lower() != ".toml":
        return path, None, {}
    from dataclasses import asdict

    from portfire.errors import InputError
    from portfire.job import read_job

    job = read_job(path)
    if len(job.sessions) > 1:
        raise InputError(f"{path}: names {len(job.sessions)} sessions, but this command takes one")
    return job.sessions[0], dict(job.columns), asdict(job.window)
