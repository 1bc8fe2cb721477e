"""A clean end on Ctrl-C and SIGTERM."""

from __future__ import annotations

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

from portfire.errors import PortfireError


class Stopped(PortfireError):
    """The run was asked to stop; the next run resumes."""

    def __init__(self, message: str = "Stopped; the same command resumes from what is stored.") -> None:
        super().__init__(message)


class Stop:
    """Whether somebody asked the run to stop.

    While the run waits for fits it looks here by itself, and a signal only sets the flag; anywhere
    else a signal raises `Stopped` where the program is.
    """

    def __init__(self) -> None:
        self._asked = threading.Event()
        self._is_polled = False
        self._is_ending = False

    def ask(self) -> None:
        """Ask the run to stop."""
        self._asked.set()

    @property
    def asked(self) -> bool:
        """Whether the run was asked to stop."""
        return self._asked.is_set()

    def check(self) -> None:
        """Raise `Stopped` if the run was asked to stop."""
        if self.asked:
            raise Stopped

    @contextmanager
    def polled(self) -> Iterator[None]:
        """Promise that the block looks at `asked` often, so that a signal need not interrupt it."""
        self._is_polled = True
        try:
            yield
        finally:
            self._is_polled = False
        self.check()

    @contextmanager
    def ending(self) -> Iterator[None]:
        """Hold further signals back while the block cleans up."""
        self._is_ending = True
        try:
            yield
        finally:
            self._is_ending = False

    def receive(self, number: int, frame: FrameType | None) -> None:
        """Take a signal."""
        self.ask()
        if not (self._is_polled or self._is_ending):
            raise Stopped


@contextmanager
def stop_on_signals(stop: Stop) -> Iterator[Stop]:
    """Let Ctrl-C and SIGTERM ask `stop` while the block runs.

    Outside the main thread, where Python takes no signals, the block runs without.
    """
    if threading.current_thread() is not threading.main_thread():
        yield stop
        return
    numbers = (signal.SIGINT, signal.SIGTERM)
    before = {number: signal.signal(number, stop.receive) for number in numbers}
    try:
        yield stop
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
