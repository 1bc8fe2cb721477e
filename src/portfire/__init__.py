"""Tells from single-trial spike counts whether an initial or a sustained push sets off a timed act.

Names are loaded when they are first asked for, so that importing the package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from portfire.estimation import Fit, fit, load_fit
    from portfire.job import Result
    from portfire.report import run
    from portfire.session import Session, inspect_session, read_session
    from portfire.simulate import simulate_session

__version__ = "0.1.0"

__all__ = [
    "read_session",
    "Session",
    "inspect_session",
    "fit",
    "load_fit",
    "Fit",
    "run",
    "Result",
    "simulate_session",
    "__version__",
]

_HOME_OF = {
    "read_session": "session",
    "Session": "session",
    "inspect_session": "session",
    "fit": "estimation",
    "load_fit": "estimation",
    "Fit": "estimation",
    "run": "report",
    "Result": "job",
    "simulate_session": "simulate",
}


def __getattr__(name: str) -> object:
    if name not in _HOME_OF:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(f"{__name__}.{_HOME_OF[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
