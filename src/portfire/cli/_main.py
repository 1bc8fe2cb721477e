"""Runs a command and turns whatever happens into an exit status and one plain line."""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence
from pathlib import Path

import click

from portfire.cli._commands import portfire
from portfire.cli._output import write_error
from portfire.errors import InputError, PortfireError
from portfire.job._stop import Stop, stop_on_signals

DONE, FAILED, WRONG = 0, 1, 2
_SHOW_TRACEBACK = "PORTFIRE_TRACEBACK"


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the ``portfire`` command.

    Parameters
    ----------
    arguments : sequence of str, optional
        Words after ``portfire``. Default: those of this process.

    Returns
    -------
    int
        Exit status: 0 done, 1 the job failed or was stopped, 2 the input or the command is wrong.
    """
    words = list(sys.argv[1:] if arguments is None else arguments)
    try:
        with stop_on_signals(Stop()):
            portfire.main(words, prog_name="portfire", standalone_mode=False)
    except click.exceptions.NoArgsIsHelpError:
        return _report(f"a command is needed: {', '.join(portfire.commands)}; try portfire --help", WRONG)
    except click.UsageError as error:
        return _report(_describe_usage(error), WRONG)
    except click.ClickException as error:
        return _report(error.format_message(), error.exit_code)
    except InputError as error:
        return _report(str(error), WRONG)
    except PortfireError as error:
        return _report(str(error), FAILED)
    except click.Abort:
        return _report("Stopped.", FAILED)
    except MemoryError:
        return _report(
            "There is not enough memory for this session; try fewer workers or wider bins.", FAILED
        )
    except Exception as error:
        return _report_unexpected(error)
    return DONE


def _report(message: str, status: int) -> int:
    write_error(f"portfire: {message}")
    return status


def _describe_usage(error: click.UsageError) -> str:
    message = error.format_message().rstrip(".")
    path = error.ctx.command_path if error.ctx is not None else "portfire"
    return f"{message} (try: {path} --help)"


def _report_unexpected(error: Exception) -> int:
    if os.environ.get(_SHOW_TRACEBACK):
        raise error
    if isinstance(error, OSError) and error.strerror:
        place = f"{error.filename}: " if error.filename else ""
        return _report(f"{place}{error.strerror}", FAILED)
    place = ""
    trace = error.__traceback__
    while trace is not None:
        place = f"{Path(trace.tb_frame.f_code.co_filename).name}, line {trace.tb_lineno}"
        trace = trace.tb_next
    return _report(
        f"An unexpected error, {type(error).__name__}: {error} ({place}); "
        f"please report it, with what {_SHOW_TRACEBACK}=1 shows.",
        FAILED,
    )
