"""Where compiled kernels are kept, decided before the first of them is imported.

numba's own choice fails the import when nothing is writable, and misses that a function called from another module has
changed. So the folder carries a hash of numba's version and of all kernel sources, and without a writable folder kernels
are compiled anew in each process.
"""

from __future__ import annotations

import hashlib
import os
import stat
import tempfile
from pathlib import Path
from typing import Any

from numba import njit

_KERNEL_FOLDER = Path(__file__).parent


def source_hash() -> str:
    """Hash over numba's version and every kernel source, 16 hex digits."""
    import numba

    digest = hashlib.sha256(numba.__version__.encode())
    for path in sorted(_KERNEL_FOLDER.glob("*.py")):
        digest.update(path.name.encode() + b"\0" + path.read_bytes())
    return digest.hexdigest()[:16]


def _usable(folder: Path, private: bool) -> bool:
    try:
        folder.mkdir(parents=True, exist_ok=True, mode=0o700)
        status = folder.lstat()
        if private and (not stat.S_ISDIR(status.st_mode) or status.st_uid != os.getuid() or status.st_mode & 0o022):
            return False
        with tempfile.TemporaryFile(dir=folder):
            return True
    except OSError:
        return False


def use_cache() -> bool:
    """Point numba at a cache folder; returns whether kernels can be cached at all.

    An explicit NUMBA_CACHE_DIR is respected. Otherwise the user's cache folder, then a private one below the temporary
    folder; an empty XDG_CACHE_HOME means unset, never the current folder.
    """
    from numba.core import config

    if os.environ.get("NUMBA_CACHE_DIR"):
        return _usable(Path(os.environ["NUMBA_CACHE_DIR"]), private=False)
    name = source_hash()
    home = os.environ.get("XDG_CACHE_HOME", "")
    if not os.path.isabs(home):  # the XDG standard: a relative path is to be ignored
        home = os.path.join(os.path.expanduser("~"), ".cache")
    user_id = os.getuid() if hasattr(os, "getuid") else 0
    temporary = Path(tempfile.gettempdir()) / f"driblet-{user_id}"
    candidates = [(Path(home) / "driblet" / name, False)] if os.path.isabs(home) else []
    if _usable(temporary, private=True) if not candidates or not _usable(candidates[0][0], False) else False:
        candidates.append((temporary / name, True))
    for folder, private in candidates:
        if _usable(folder, private):
            config.CACHE_DIR = str(folder)  # type: ignore[attr-defined]
            return True
    return False


CACHE = use_cache()

# For functions that kernels alone call: no way in from Python is compiled, which takes as long as much of the rest.
inner: Any = njit(nogil=True, cache=CACHE, error_model="numpy", no_cpython_wrapper=True, no_cfunc_wrapper=True)  # type: ignore[call-overload]

# kernels that allocate nothing and keep no array, compiled without reference counts: those of arrays handed to a function are
# atomic operations, and took half of the time of a leap
bare: Any = njit(nogil=True, cache=CACHE, error_model="numpy", _nrt=False)  # type: ignore[call-overload]
