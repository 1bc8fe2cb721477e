"""What a run says while it works: to the terminal, and with times to its log."""

from __future__ import annotations

import sys
import time
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from types import TracebackType
from typing import IO, TYPE_CHECKING, Any

if TYPE_CHECKING:
    from rich.progress import Progress as Bars
    from rich.progress import TaskID

_SECONDS_PER_LINE = 5.0


@dataclass
class _Stage:
    known: set[str] = field(default_factory=set)
    done: set[str] = field(default_factory=set)
    n_expected: int = 0
    n_run: int = 0
    seconds: float = 0.0

    @property
    def total(self) -> int:
        return max(len(self.known), self.n_expected)

    @property
    def left(self) -> int:
        return self.total - len(self.done)


class Progress:
    """Stages of a run, each with a number of fits, done and to do.

    Parameters
    ----------
    log : Path, optional
        File that every line is added to, with its time.
    quiet : bool
        Say nothing on the terminal but warnings.
    stream : text stream, optional
        Standard error by default. On a terminal there are bars, elsewhere plain lines, one every
        few seconds at most.
    n_workers : int
        How many fits run at once, for the time left.
    """

    def __init__(
        self,
        log: Path | None = None,
        quiet: bool = False,
        stream: IO[str] | None = None,
        n_workers: int = 1,
    ) -> None:
        self._stream = sys.stderr if stream is None else stream
        self._quiet = quiet
        self._log_path = log
        self._log: IO[str] | None = None
        self._n_workers = n_workers
        self._stages: dict[str, _Stage] = {}
        self._bars: Bars | None = None
        self._bar_of: dict[str, TaskID] = {}
        self._last_line = -_SECONDS_PER_LINE

    def __enter__(self) -> Progress:
        if self._log_path is not None:
            self._log = self._log_path.open("a", encoding="utf-8")
        if not self._quiet and self._stream.isatty():
            self._bars = _make_bars(self._stream)
            self._bars.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._bars is not None:
            self._bars.stop()
            self._bars = None
        if self._log is not None:
            self._log.close()
            self._log = None

    def plan(self, stage: str, n_fits: int) -> None:
        """Announce how many fits a stage will have, before they are known one by one."""
        self._stages.setdefault(stage, _Stage()).n_expected = n_fits
        self._draw(stage)

    def expect(self, stage: str, key: str) -> None:
        """Announce one fit of a stage."""
        self._stages.setdefault(stage, _Stage()).known.add(key)

    def finish(
        self,
        stage: str,
        key: str,
        name: str,
        seconds: float = 0.0,
        numbers: Mapping[str, float] | None = None,
        reused: bool = False,
    ) -> None:
        """Count one fit as done, after `seconds` of work, or because its result was there."""
        state = self._stages.setdefault(stage, _Stage())
        state.known.add(key)
        state.done.add(key)
        if not reused:
            state.n_run += 1
            state.seconds += seconds
        how = "was there" if reused else f"done in {seconds:.1f} s"
        values = "".join(f", {label} {number:.6g}" for label, number in (numbers or {}).items())
        self.log(f"{stage}: {name} {how}{values}")
        self._draw(stage)

    def say(self, text: str) -> None:
        """Say one line, unless quiet, and log it."""
        self.log(text)
        if not self._quiet:
            self._print(text)

    def warn(self, text: str) -> None:
        """Say one warning, quiet or not, and log it."""
        self.log(f"warning: {text}")
        self._print(f"warning: {text}")

    def log(self, text: str) -> None:
        """Add a line to the log only."""
        if self._log is not None:
            stamp = datetime.now().isoformat(sep=" ", timespec="milliseconds")
            self._log.write(f"{stamp}  {text}\n")
            self._log.flush()

    def seconds_left(self) -> float | None:
        """Return how long the known fits will still take (s), or None before the first has ended."""
        n_run = sum(stage.n_run for stage in self._stages.values())
        if n_run == 0:
            return None
        mean = sum(stage.seconds for stage in self._stages.values()) / n_run
        each = ((s.left, s.seconds / s.n_run if s.n_run else mean) for s in self._stages.values())
        return sum(n_left * seconds for n_left, seconds in each) / self._n_workers

    def _draw(self, stage: str) -> None:
        if self._quiet:
            return
        state = self._stages[stage]
        left = self.seconds_left()
        if self._bars is not None:
            if stage not in self._bar_of:
                self._bar_of[stage] = self._bars.add_task(stage, total=state.total, left="")
            text = "" if left is None else f"{format_seconds(left)} left"
            self._bars.update(
                self._bar_of[stage],
                total=state.total,
                completed=len(state.done),
                left=text if state.left else "",
            )
            return
        now = time.monotonic()
        if now - self._last_line >= _SECONDS_PER_LINE:
            self._last_line = now
            text = "" if left is None else f", about {format_seconds(left)} left"
            self._print(f"{stage}: {len(state.done)}/{state.total} fits{text}")

    def _print(self, text: str) -> None:
        if self._bars is not None:
            self._bars.console.print(text, markup=False, highlight=False)
            return
        try:
            print(text, file=self._stream, flush=True)
        except BrokenPipeError:
            # Whoever read along has gone; the job itself is still wanted.
            self._quiet = True


def format_seconds(seconds: float) -> str:
    """Write a duration as a person would: ``8 s``, ``2 min 5 s``, ``1 h 20 min``."""
    whole = round(seconds)
    if whole < 60:
        return f"{whole} s"
    minutes, rest = divmod(whole, 60)
    if minutes < 60:
        return f"{minutes} min {rest} s"
    return f"{minutes // 60} h {minutes % 60} min"


def _make_bars(stream: IO[str]) -> Any:
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn

    return Progress(
        TextColumn("{task.description}", markup=False),
        BarColumn(),
        MofNCompleteColumn(),
        TextColumn("fits", markup=False),
        TextColumn("{task.fields[left]}", markup=False),
        console=Console(file=stream),
    )
