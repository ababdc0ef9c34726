"""Ctrl-C: the first is noted, the second strikes, and nobody else's handler is touched."""

from __future__ import annotations

import signal
import subprocess
import sys
import threading
from collections.abc import Iterator

import pytest

import driblet
from driblet import store
from driblet.interrupts import noted_interrupts
from tests.texts import SMALL


@pytest.fixture(autouse=True)
def pythons_own_handler() -> Iterator[None]:
    before = signal.signal(signal.SIGINT, signal.default_int_handler)
    yield
    signal.signal(signal.SIGINT, before)


def test_the_first_is_noted_and_the_second_strikes() -> None:
    with noted_interrupts() as interrupted:
        assert not interrupted()
        signal.raise_signal(signal.SIGINT)
        assert interrupted()
        with pytest.raises(KeyboardInterrupt):
            signal.raise_signal(signal.SIGINT)
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler
    with pytest.raises(KeyboardInterrupt):
        signal.raise_signal(signal.SIGINT)


def test_the_handler_comes_back_after_a_fault() -> None:
    with pytest.raises(ZeroDivisionError), noted_interrupts():
        raise ZeroDivisionError
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler


def test_a_callers_own_handler_is_left_alone() -> None:
    seen = []
    signal.signal(signal.SIGINT, lambda number, frame: seen.append(number))
    with noted_interrupts() as interrupted:
        signal.raise_signal(signal.SIGINT)
        assert not interrupted()
    assert seen == [signal.SIGINT]


def test_other_threads_change_nothing() -> None:
    told = []

    def work() -> None:
        with noted_interrupts() as interrupted:
            told.append((interrupted(), signal.getsignal(signal.SIGINT) is signal.default_int_handler))

    thread = threading.Thread(target=work)
    thread.start()
    thread.join()
    assert told == [(False, True)]


def test_ctrl_c_while_the_last_file_is_written_is_not_lost(tmp_path, monkeypatch) -> None:  # type: ignore[no-untyped-def]
    """Pressed when nothing is left to simulate: the run file is whole, and the caller still learns of it."""
    finish = store.RunWriter.finish

    def pressed(writer: store.RunWriter, closing: dict[str, object]) -> object:
        signal.raise_signal(signal.SIGINT)
        return finish(writer, closing)

    monkeypatch.setattr(store.RunWriter, "finish", pressed)
    system, path = driblet.loads(SMALL), tmp_path / "run.h5"
    with pytest.raises(driblet.InterruptedRunError, match=r"run\.h5 was complete already"):
        driblet.run(system, path)
    assert driblet.Run(path).complete
    with pytest.raises(driblet.InterruptedRunError, match="in memory"):
        driblet.run(system)


SECOND_SIGNAL_IN_THE_HANDLER_OF_THE_FIRST = """
import faulthandler, signal, sys, threading
from driblet_analysis.sweep.work import stopping_on_signals

sent = 0

def trace(frame, event, argument):
    global sent
    if frame.f_code.co_name in ("__call__", "set", "is_set", "wait") and event == "line" and sent < {sent}:
        sent += 1
        if sent == {sent}:
            signal.raise_signal(signal.SIGUSR1)
    return trace

with stopping_on_signals() as stop:
    {twin}
    faulthandler.dump_traceback_later(5, exit=True)  # a dead lock ends here
    sys.settrace(trace)
    try:
        signal.raise_signal(signal.SIGTERM)
    except KeyboardInterrupt:
        pass  # the second one strikes
    sys.settrace(None)
    assert sent == {sent}, sent
    print("stopped", stop.asked.is_set())
"""


def _stopped_twice(line: int, twin: str = "pass") -> str:
    """What comes of a second signal at the given line of the handler of the first: as Slurm sends them, or an impatient user."""
    code = SECOND_SIGNAL_IN_THE_HANDLER_OF_THE_FIRST.format(sent=line, twin=twin)
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60, check=False)
    return "hung" if "Timeout (" in done.stderr else done.stdout


def test_a_second_signal_in_the_middle_of_the_first_does_not_hang() -> None:
    for line in (1, 2, 3, 4, 5):
        assert _stopped_twice(line) == "stopped True\n"


def test_with_an_event_of_the_threading_module_it_would() -> None:
    """Broken twin: at some line of Event.set the second handler waits for a lock that the first one holds."""
    assert _stopped_twice(6, "stop.asked = threading.Event()") == "hung"
