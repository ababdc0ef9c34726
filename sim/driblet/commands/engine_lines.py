"""What run summaries say of the engine: which was taken and why, what leaps did, and how far an approximation may be off."""

from __future__ import annotations

from typing import Any

from driblet.commands.screen import duration, number
from driblet.error_estimate import ErrorEstimate

WORTH_A_WORD = 0.5  # standard deviations from which an estimated error asks for a remedy


def engine_lines(result: Any) -> list[str]:
    """Lines about the engine of a run."""
    provenance = result.provenance
    lines = []
    if provenance.get("engine_why"):
        asked = " (auto)" if provenance["engine"] == "auto" else ""
        lines.append(f"{provenance['engine_why']}{asked}")
    leaping = result.leaping
    if leaping:
        done = {name: float(values.mean()) for name, values in leaping.items()}
        longest = float(leaping["longest_leap"].max())
        lines.append(
            f"a compartment took {done['leaps']:,.0f} leaps and {done['exact_events'] + done['critical_events']:,.0f} single "
            f"events on average, the longest leap {duration(longest)}; net firings are exact, gross ones estimates where leaped"
        )
    estimate = ErrorEstimate.read(provenance)
    if estimate is not None:
        lines += _estimate(estimate, float(provenance.get("leap_tolerance", 0.0)))
    return lines


def _estimate(estimate: ErrorEstimate, tolerance: float) -> list[str]:
    parts = []
    for name, error in (("lumping", estimate.lumping), ("leaps", estimate.leaps)):
        if error is not None:
            size, share, quantity, time_s = error
            parts.append(
                f"{name} at most {number(size, 2)} sd (total {quantity} at {duration(time_s)}, {number(100 * share, 2)} % of it)"
            )
    if not parts:
        return [f"error of the mean not estimated: {estimate.why}"] if estimate.why else []
    lines = [f"estimated error of means, in standard deviations between compartments: {'; '.join(parts)}"]
    if estimate.leaps is not None and estimate.leaps[0] > WORTH_A_WORD:
        lines.append(f"  a smaller run.leap_tolerance than {tolerance:g} makes the error of leaps smaller")
    if estimate.lumping is not None and estimate.lumping[0] > WORTH_A_WORD:
        lines.append("  hold the lumping against the steps: `driblet compare` with a smaller --volume")
    return lines
