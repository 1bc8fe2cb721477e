"""Lines to standard output and standard error, also when nobody reads them."""

from __future__ import annotations

import os
import sys


def write_line(text: str) -> None:
    """Write a line to standard output; where its reader has gone, do without."""
    try:
        print(text, flush=True)
    except BrokenPipeError:
        _silence(sys.stdout.fileno())


def write_error(text: str) -> None:
    """Write one plain line to standard error."""
    try:
        print(" ".join(text.split()), file=sys.stderr, flush=True)
    except BrokenPipeError:
        _silence(sys.stderr.fileno())


def _silence(stream: int) -> None:
    # What is still in Python's buffer would break the pipe once more at exit.
    nowhere = os.open(os.devnull, os.O_WRONLY)
    os.dup2(nowhere, stream)
    os.close(nowhere)
