"""What driblet raises, and the exit status each kind of failure means on the command line."""

from __future__ import annotations

from collections.abc import Iterable
from typing import NamedTuple

EXIT_DONE = 0
EXIT_CHECK_SAYS_NO = 1
EXIT_BAD_INPUT = 2
EXIT_CANNOT_ANSWER = 3
EXIT_OWN_FAULT = 4
EXIT_INTERRUPTED = 130
_LONGEST_LINE = 600


class Problem(NamedTuple):
    """One fault of the input: where it stands (`species.ATP.amount`, or "" for the whole file) and what is wrong."""

    key: str
    text: str


class DribletError(Exception):
    """Base class of every error driblet raises on purpose."""

    exit_status = EXIT_OWN_FAULT


class InputError(DribletError, ValueError):
    """Bad input or bad use; `problems` holds all of them, `source` names the file."""

    exit_status = EXIT_BAD_INPUT

    def __init__(self, source: str, problems: Iterable[Problem | tuple[str, str]]) -> None:
        self.source = source
        self.problems = tuple(dict.fromkeys(Problem(*p) for p in problems))
        super().__init__("\n".join(self.lines()))

    def lines(self) -> list[str]:
        """One line a problem: `FILE: key.path: what is wrong, what would be right`."""
        return [_one_line(": ".join(part for part in (self.source, p.key, p.text) if part)) for p in self.problems]


def _one_line(text: str) -> str:
    """`text` with control characters escaped and its middle left out when a user's value is very long."""
    plain = "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in text)
    return plain if len(plain) <= _LONGEST_LINE else f"{plain[: _LONGEST_LINE // 2]} ... {plain[-_LONGEST_LINE // 2 :]}"


class CannotAnswerError(DribletError):
    """The data cannot answer the question; the text says what would be needed."""

    exit_status = EXIT_CANNOT_ANSWER


class InterruptedRunError(DribletError):
    """The user interrupted; the text says what was kept and how to go on."""

    exit_status = EXIT_INTERRUPTED


def one_problem(source: str, key: str, text: str) -> InputError:
    """An InputError of a single problem."""
    return InputError(source, [Problem(key, text)])
