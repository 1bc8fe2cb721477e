"""The ``portfire`` command: a thin shell around the package."""

from portfire.cli._main import main

__all__ = ["main"]
