"""What commands that work on clusters share: Slurm's options, and lines that say what is waited for."""

from __future__ import annotations

import re
import sys
from collections.abc import Callable, Mapping
from typing import Any

import click

_SLURM = {
    "--partition": click.option("--partition", help="Slurm: partition."),
    "--account": click.option("--account", help="Slurm: account."),
    "--time": click.option("--time", "limit", metavar="LIMIT", help="Slurm: time limit of a task, such as 2:00:00."),
    "--memory": click.option("--memory", metavar="SIZE", help="Slurm: memory of a task, such as 2G."),
    "--throttle": click.option("--throttle", type=click.IntRange(1, 100_000), help="Slurm: most tasks at a time."),
    "--setup": click.option(
        "--setup",
        multiple=True,
        metavar="LINE",
        help="Slurm: a shell line before the work, such as a module; may be repeated.",
    ),
}


def slurm_options(command: Callable[..., Any]) -> Callable[..., Any]:
    """Adds the options that any job array takes: partition, account, limit, memory, throttle, setup."""
    for option in reversed(_SLURM.values()):
        command = option(command)
    return command


def only_with_slurm(slurm: bool, given: Mapping[str, object]) -> None:
    """Raises UsageError for options of Slurm's that were given without it."""
    extra = [name for name, value in given.items() if value]
    if extra and not slurm:
        raise click.UsageError(f"{', '.join(extra)}: goes with --slurm")


class WaitingLines:
    """Says on stderr what is waited for: a line for each kind, however its numbers change."""

    def __init__(self) -> None:
        self._told: set[str] = set()

    def __call__(self, text: str) -> None:
        """Tell, unless that was told; "" is nothing to tell."""
        kind = re.sub(r"\d+", "", text)
        if kind and kind not in self._told:
            self._told.add(kind)
            print(f"waiting: {text}", file=sys.stderr, flush=True)
