"""What a job found on one session, before it is written."""

from __future__ import annotations

from dataclasses import dataclass, field

from portfire.job._file import Job
from portfire.job._stages import Sizes
from portfire.job._tested import Tested
from portfire.session import Trials
from portfire.timing import Decoding


@dataclass(frozen=True)
class Findings:
    """Everything that a job found on one session, before it is written.

    Parameters
    ----------
    job : Job
        With its defaults settled.
    trials : Trials
    sizes : Sizes
    ladders : dict of (int, int, str) to str
        Key of the ladder entry by shift of the size (-1, 0, 1), training set and source (empty: all).
    decodings : tuple of Decoding
    describe, causal : str, tuple of str
        Keys of the described fit and of the causal states.
    warnings, not_run : tuple of str
    tested : Tested
        Keys of tests, rivals and checks.
    """

    job: Job
    trials: Trials
    sizes: Sizes
    ladders: dict[tuple[int, int, str], str]
    decodings: tuple[Decoding, ...]
    describe: str
    causal: tuple[str, ...]
    warnings: tuple[str, ...]
    not_run: tuple[str, ...]
    tested: Tested = field(default_factory=Tested)
