"""Claims: which worker works on which shard, without file locks.

A claim is a small file DIR/claims/SHARD.GENERATION, made by hard link from a finished temporary file, which succeeds for
exactly one of any number of workers on every file system that keeps directories consistent (NFS included, where locks may be
switched off or lie; where hard links do not exist, by exclusive creation). Claims are never deleted while a sweep has work
left. A shard is free when it has no claim, or when its newest one was released by its owner or is stale; then the taker makes
the next generation, which again exactly one can. An owner that finds a newer generation than its own has lost the shard and
stops. Should a worker be declared dead that was only suspended, a point may be simulated twice, to the same bits; files are
never shared between writers, so nothing can be corrupted.

A claim is stale when its owner ran on this machine and is gone, or when it has shown no sign of life for STALE_SECONDS by the
file server's own clock; owners touch their claim every BEAT_SECONDS. The claim on a shard that is complete says "done" and
is left alone even by a worker whose view of the folder is minutes old.
"""

from __future__ import annotations

import contextlib
import json
import os
import platform
import re
import secrets
import threading
import time
from collections import defaultdict
from functools import lru_cache
from pathlib import Path
from typing import Any, NamedTuple

from driblet.errors import InputError
from driblet_analysis.sweep.files import writing

FOLDER = "claims"
BEAT_SECONDS = 15.0
STALE_SECONDS = 240.0
_FILE_NAME = re.compile(r"(\d{6,})\.(\d+)")


class Standing(NamedTuple):
    """The newest claim on a shard.

    Attributes: generation; state : "held" (its owner runs on this machine), "beating" (elsewhere, and showed a sign of life
    lately), "silent" (elsewhere, not stale yet), "free" or "done"; suspects : points at which earlier owners died; beat : time
    of the last sign of life by the file server's clock, s.
    """

    generation: int
    state: str
    suspects: tuple[int, ...]
    beat: float

    @property
    def taken(self) -> bool:
        """Whether a worker seems to be at it."""
        return self.state in ("held", "beating", "silent")


class Pulse:
    """Tells which claims of workers elsewhere may be those of dead ones: all that have not beaten while we watched."""

    def __init__(self) -> None:
        self._first: dict[int, float] = {}

    def doubtful(self, shard: int, standing: Standing) -> bool:
        """Whether a claim may still turn out to be stale."""
        if standing.state not in ("beating", "silent"):
            return False
        return self._first.setdefault(shard, standing.beat) == standing.beat


def in_doubt(shards: int) -> str:
    """What is waited for while workers elsewhere may be dead, in words."""
    return (
        f"{shards} shards are with workers elsewhere that may be dead; they are taken over "
        f"{STALE_SECONDS:g} s after the last sign of life"
    )


class Claim:
    """A shard that this worker holds; a thread shows signs of life until it is released. Use as a context manager."""

    def __init__(
        self, path: Path, shard: int, generation: int, facts: dict[str, Any], suspects: tuple[int, ...]
    ) -> None:
        self.path, self.shard, self.generation, self.suspects = path, shard, generation, suspects
        self._facts = facts
        self._ended = threading.Event()
        self._thread = threading.Thread(target=self._beat, name=f"claim {path.name}", daemon=True)
        self._thread.start()

    def _beat(self) -> None:
        while not self._ended.wait(BEAT_SECONDS):
            try:
                os.utime(self.path)
            except OSError:
                continue  # a file server that is away for a moment: the next beat will tell

    def at(self, point: int) -> None:
        """Note the point that is worked on, so that whoever takes over knows what was deadly."""
        self._facts["at"] = point
        with contextlib.suppress(OSError):  # a disk that is full will be told when results are written
            self._write()

    def complete(self) -> None:
        """Note that nothing is left to do in this shard."""
        self._facts["state"] = "done"

    def lost(self) -> bool:
        """Whether another worker has taken the shard over, this one having been taken for dead."""
        return os.path.lexists(self.path.with_name(f"{self.shard:06d}.{self.generation + 1}"))

    def release(self) -> None:
        """Give the shard up, done or not; it can be taken at once."""
        self._ended.set()
        self._thread.join()
        done = self._facts["state"] == "done"
        self._facts.update(state="done" if done else "released", at=None)
        with writing(self.path.parent.parent):
            self._write()

    def _write(self) -> None:
        """Replace the contents; without fsync: after a power cut there is no owner, and any contents will do."""
        temporary = self.path.with_name(f".{secrets.token_hex(4)}.tmp")
        try:
            temporary.write_text(json.dumps(self._facts), encoding="utf-8")
            os.replace(temporary, self.path)
        except OSError:
            temporary.unlink(missing_ok=True)
            raise

    def __enter__(self) -> Claim:
        return self

    def __exit__(self, kind: object, *_: object) -> None:
        try:
            self.release()
        except InputError:
            if kind is None:  # else the first fault is the one to tell
                raise


def take(directory: Path, shard: int, standing: Standing | None, reopen: bool = False) -> Claim | None:
    """Take a free shard, or None when another worker was quicker.

    standing : as seen last, None when there is no claim; reopen : take a shard that was done, too. Raises InputError when
    the disk refuses.
    """
    if standing is not None and standing.state != "free" and not (reopen and standing.state == "done"):
        return None
    folder = directory / FOLDER
    generation = 0 if standing is None else standing.generation + 1
    suspects = standing.suspects if standing is not None else ()
    facts = {**_this_process(), "state": "held", "at": None, "suspects": list(suspects)}
    path = folder / f"{shard:06d}.{generation}"
    with writing(directory):
        folder.mkdir(exist_ok=True)
        temporary = folder / f".{secrets.token_hex(4)}.tmp"
        temporary.write_text(json.dumps(facts), encoding="utf-8")
        try:
            won = _link(temporary, path)
        finally:
            temporary.unlink(missing_ok=True)
    return Claim(path, shard, generation, facts, suspects) if won else None


def _link(temporary: Path, path: Path) -> bool:
    try:
        os.link(temporary, path)
        return True
    except FileExistsError:
        # a server's answer can be lost and the request repeated: the link count tells whether ours was the first
        return temporary.stat().st_nlink == 2
    except OSError:  # a file system without hard links
        try:
            handle = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o666)
        except FileExistsError:
            return False
        with os.fdopen(handle, "w", encoding="utf-8") as stream:
            stream.write(temporary.read_text("utf-8"))
        return True


def standings(directory: Path) -> dict[int, Standing]:
    """The newest claim on every shard that has one, from one look at the folder."""
    folder = directory / FOLDER
    newest: dict[int, int] = defaultdict(lambda: -1)
    for name in os.listdir(folder) if folder.is_dir() else ():
        match = _FILE_NAME.fullmatch(name)
        if match:
            newest[int(match[1])] = max(newest[int(match[1])], int(match[2]))
    if not newest:
        return {}
    now = _server_time(folder)
    return {shard: _standing(folder, shard, generation, now) for shard, generation in newest.items()}


def standing_of(directory: Path, shard: int) -> Standing | None:
    """The newest claim on one shard."""
    folder = directory / FOLDER
    generations = [
        int(match[2])
        for name in (os.listdir(folder) if folder.is_dir() else ())
        if (match := _FILE_NAME.fullmatch(name)) and int(match[1]) == shard
    ]
    return _standing(folder, shard, max(generations), _server_time(folder)) if generations else None


def _standing(folder: Path, shard: int, generation: int, now: float) -> Standing:
    path = folder / f"{shard:06d}.{generation}"
    try:
        beat = path.stat().st_mtime
        facts = _facts(path.read_text("utf-8", "replace"))
    except OSError:
        return Standing(generation, "silent", (), now)  # being replaced at this moment
    suspects = tuple(s for s in facts.get("suspects", ()) if isinstance(s, int))
    if facts.get("state") in ("released", "done"):
        return Standing(generation, "done" if facts["state"] == "done" else "free", suspects, beat)
    if isinstance(facts.get("at"), int):
        suspects = (*suspects, facts["at"])
    alive = _alive(facts)
    if alive is None:
        silent = now - beat
        state = "free" if silent > STALE_SECONDS else "silent" if silent > 2 * BEAT_SECONDS else "beating"
    else:
        state = "held" if alive else "free"
    return Standing(generation, state, suspects, beat)


def _facts(text: str) -> dict[str, Any]:
    """What a claim says; nothing where a power cut has left it empty or torn, so that its age alone decides."""
    try:
        facts = json.loads(text)
    except ValueError:
        return {}
    return facts if isinstance(facts, dict) else {}


def _server_time(folder: Path) -> float:
    """Now, by the clock that stamps the files: clocks of machines differ."""
    probe = folder / f".{secrets.token_hex(4)}.tmp"
    try:
        probe.touch()
        return probe.stat().st_mtime
    except OSError:  # a folder that may only be read: status still wants an answer
        return time.time()
    finally:
        with contextlib.suppress(OSError):
            probe.unlink(missing_ok=True)


@lru_cache(maxsize=1)
def _machine() -> dict[str, str]:
    """What tells one running system, and one view of its processes, from another."""
    facts = {"host": platform.node()}
    for name, path in (("boot", "/proc/sys/kernel/random/boot_id"), ("space", "/proc/self/ns/pid")):
        try:
            facts[name] = os.readlink(path) if name == "space" else Path(path).read_text("ascii").strip()
        except OSError:
            facts[name] = ""
    return facts


def _started(pid: int) -> str:
    """When a process was started, "" if it is gone (or a zombie), "?" where that cannot be known."""
    try:
        fields = Path(f"/proc/{pid}/stat").read_text("utf-8", "replace").rpartition(")")[2].split()
    except FileNotFoundError:
        if Path("/proc/self/stat").exists():
            return ""
        try:
            os.kill(pid, 0)
        except ProcessLookupError:
            return ""
        except OSError:
            pass
        return "?"
    except OSError:
        return "?"
    return "" if fields[0] == "Z" else fields[19]


def _this_process() -> dict[str, Any]:
    return {
        **_machine(),
        "pid": os.getpid(),
        "started": _started(os.getpid()),
        "token": secrets.token_hex(8),
        "job": os.environ.get("SLURM_JOB_ID", ""),
    }


def _alive(facts: dict[str, Any]) -> bool | None:
    """Whether a claim's owner is running, None when it ran elsewhere and only its signs of life can tell."""
    if any(facts.get(name) != value for name, value in _machine().items()):
        return None
    started = _started(int(facts.get("pid", -1)))
    return started != "" and (started == "?" or facts.get("started") in (started, "?"))
