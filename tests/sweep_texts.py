"""A small sweep that tests start from: an invented isomerisation in droplets, over two axes."""

from __future__ import annotations

from pathlib import Path

from tests.texts import SMALL

SWEEP = """\
system = "base.toml"
replicates = 5

[axes]
"species.A" = ["10 copies", "20 copies", "40 copies"]
"reactions.turn.K" = [0.5, 1, 2, 4]

[derived]
"species.B" = "0.5 * species.A"
"""
POINTS = 12


def write_sweep(folder: Path, text: str = SWEEP, base: str = SMALL) -> Path:
    """Write a sweep file and its base system into a folder; returns the sweep file."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "base.toml").write_text(base, encoding="utf-8")
    path = folder / "sweep.toml"
    path.write_text(text, encoding="utf-8")
    return path
