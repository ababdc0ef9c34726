"""driblet: counts molecules in small ATP-driven compartments, with every reverse rate tied to the energies.

system = driblet.load("uphill_transfer.toml")
run = driblet.run(system, replicates=400)
run.counts          # (replicates, times, species)
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from driblet.ensemble import Progress, run
    from driblet.errors import CannotAnswerError, DribletError, InputError, InterruptedRunError
    from driblet.network import Network
    from driblet.results import Run
    from driblet.system import System, load, loads
    from driblet.version import __version__

_HOMES = {
    "load": "driblet.system",
    "loads": "driblet.system",
    "System": "driblet.system",
    "Network": "driblet.network",
    "run": "driblet.ensemble",
    "Progress": "driblet.ensemble",
    "Run": "driblet.results",
    "DribletError": "driblet.errors",
    "InputError": "driblet.errors",
    "CannotAnswerError": "driblet.errors",
    "InterruptedRunError": "driblet.errors",
    "__version__": "driblet.version",
}
__all__ = [
    "CannotAnswerError",
    "DribletError",
    "InputError",
    "InterruptedRunError",
    "Network",
    "Progress",
    "Run",
    "System",
    "__version__",
    "load",
    "loads",
    "run",
]


def __getattr__(name: str) -> Any:
    """Import on first use, so that `import driblet` is quick."""
    if name not in _HOMES:
        raise AttributeError(f"module 'driblet' has no attribute {name!r}")
    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(__all__)
