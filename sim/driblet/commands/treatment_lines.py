"""What run summaries say of lumped enzymes: why they are, and how regular their work is in truth."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from driblet.commands.screen import number

VISIBLE = 0.01  # share of a variance below which nothing is said


def treatment_lines(lumping: Mapping[str, Mapping[str, Any]], leaps: bool = False) -> list[str]:
    """Lines about the enzymes of a run; lumping : Run.lumping; leaps : which carry the noise of turnover."""
    lines = []
    for fact in lumping.values():
        if fact["asked"] == "auto":
            lines.append(f"{fact['why']} (auto)")
    for name, fact in lumping.items():
        if fact["taken"] != "lumped" or leaps:
            continue
        parts = []
        for reaction, true in fact["fano"].items():
            shown = fact["firing_fano"][reaction]
            if true is not None and shown is not None and shown > true * (1.0 + VISIBLE):
                parts.append(f"{reaction} {number(true)}, fired {number(shown)}")
        if parts:
            lines.append(
                f"{name} is lumped: firings are independent of each other, its turnovers are not. Variance over mean of "
                f"net turnovers at the start: {'; '.join(parts)}"
            )
    return lines
