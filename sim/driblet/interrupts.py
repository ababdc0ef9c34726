"""Ctrl-C as a note that is read between two steps of a run, and never as an exception out of nowhere.

Python raises KeyboardInterrupt at any instruction of the main thread. Inside a callback of HDF5's or of a thread pool's it
is swallowed, so that the run goes on as if nothing had happened, or it tears a clean-up apart. Hence: the first Ctrl-C is
noted, the second strikes as Python's own does.
"""

from __future__ import annotations

import signal
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from types import FrameType


@contextmanager
def noted_interrupts() -> Iterator[Callable[[], bool]]:
    """Gives a function that tells whether Ctrl-C was pressed since.

    Nothing is changed outside the main thread, or where a caller handles the signal itself.
    """
    pressed = threading.Event()
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
