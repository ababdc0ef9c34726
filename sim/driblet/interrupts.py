"""Ctrl-C as a note that is read between two steps of a run, and never as an exception out of nowhere.

Python raises KeyboardInterrupt at any instruction of the main thread. Inside a callback of HDF5's or of a thread pool's it
is swallowed, so that the run goes on as if nothing had happened, or it tears a clean-up apart. Hence: the first Ctrl-C is
noted, the second strikes as Python's own does.
"""

from __future__ import annotations

import signal
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from types import FrameType


class Flag:
    """Raised once, by a signal handler or a thread, and looked at by others.

    threading.Event will not do: it holds a lock while it is set or waited for, and a second signal in that moment, whose
    handler runs on top of the first one's, waits for that lock for ever.
    """

    _SLICE_SECONDS = 0.05

    def __init__(self) -> None:
        self._up = False

    def is_set(self) -> bool:
        """Whether it was raised."""
        return self._up

    def set(self) -> None:
        """Raise it."""
        self._up = True

    def wait(self, seconds: float) -> bool:
        """Wait until it is raised, `seconds` at most; returns whether it was."""
        limit = time.monotonic() + seconds
        while not self._up and (left := limit - time.monotonic()) > 0:
            time.sleep(min(left, self._SLICE_SECONDS))
        return self._up


@contextmanager
def noted_interrupts() -> Iterator[Callable[[], bool]]:
    """Gives a function that tells whether Ctrl-C was pressed since.

    Nothing is changed outside the main thread, or where a caller handles the signal itself.
    """
    pressed = Flag()
    ours = (
        threading.current_thread() is threading.main_thread()
        and signal.getsignal(signal.SIGINT) is signal.default_int_handler
    )

    def note(number: int, frame: FrameType | None) -> None:
        if pressed.is_set():
            signal.default_int_handler(number, frame)
        pressed.set()

    if ours:
        signal.signal(signal.SIGINT, note)
    try:
        yield pressed.is_set
    finally:
        if ours:
            signal.signal(signal.SIGINT, signal.default_int_handler)
