"""Recordings in: tables, NWB, validation, and binning into trial batches."""

from portfire.session._inspect import inspect_session
from portfire.session._inspect_text import format_inspection
from portfire.session._intervals import fit_weber_fraction, tabulate_conditions
from portfire.session._read import read_session
from portfire.session._session import Session
from portfire.session._smooth import explain_by_time
from portfire.session._trials import Trials

__all__ = [
    "Session",
    "Trials",
    "explain_by_time",
    "fit_weber_fraction",
    "format_inspection",
    "inspect_session",
    "read_session",
    "tabulate_conditions",
]
