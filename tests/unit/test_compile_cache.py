"""Where kernels are kept: never in the current folder, never in a folder someone else could write, never a failed import."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

import pytest
from numba.core import config

from driblet.engines import compile_cache


@pytest.fixture
def fresh(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Path:
    """A home, a temporary folder and a current folder of our own, and numba's setting put back afterwards."""
    for name in ("home", "tmp", "here"):
        (tmp_path / name).mkdir()
    monkeypatch.setattr(config, "CACHE_DIR", config.CACHE_DIR)
    monkeypatch.setenv("HOME", str(tmp_path / "home"))
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path / "tmp"))
    monkeypatch.delenv("XDG_CACHE_HOME", raising=False)
    monkeypatch.delenv("NUMBA_CACHE_DIR", raising=False)
    monkeypatch.chdir(tmp_path / "here")
    return tmp_path


def nothing_here(fresh: Path) -> bool:
    return not list((fresh / "here").iterdir())


def test_the_users_cache_folder_carries_the_hash_of_the_sources(fresh: Path) -> None:
    assert compile_cache.use_cache()
    assert Path(config.CACHE_DIR) == fresh / "home/.cache/driblet" / compile_cache.source_hash()
    assert Path(config.CACHE_DIR).is_dir()
    assert nothing_here(fresh)


def test_xdg_cache_home_is_followed(fresh: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("XDG_CACHE_HOME", str(fresh / "elsewhere"))
    assert compile_cache.use_cache()
    assert Path(config.CACHE_DIR).parent == fresh / "elsewhere/driblet"


@pytest.mark.parametrize("value", ["", "relative/folder", "."])
def test_an_empty_or_relative_cache_home_never_means_the_current_folder(
    fresh: Path, monkeypatch: pytest.MonkeyPatch, value: str
) -> None:
    monkeypatch.setenv("XDG_CACHE_HOME", value)
    assert compile_cache.use_cache()
    assert Path(config.CACHE_DIR).parent == fresh / "home/.cache/driblet"
    assert nothing_here(fresh)


@pytest.mark.parametrize("home", ["/dev/null", "/proc/nowhere", ""])
def test_an_unwritable_home_falls_back_to_a_private_temporary_folder(
    fresh: Path, monkeypatch: pytest.MonkeyPatch, home: str
) -> None:
    monkeypatch.setenv("HOME", home)
    monkeypatch.setattr(os.path, "expanduser", lambda path: path.replace("~", home))
    assert compile_cache.use_cache()
    folder = Path(config.CACHE_DIR)
    assert folder.parent == fresh / f"tmp/driblet-{os.getuid()}"
    assert folder.parent.stat().st_mode & 0o077 == 0
    assert nothing_here(fresh)


def test_a_temporary_folder_that_others_can_write_is_not_trusted(fresh: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Whoever can write the cache decides what code runs."""
    monkeypatch.setattr(os.path, "expanduser", lambda path: "/dev/null")
    trap = fresh / f"tmp/driblet-{os.getuid()}"
    trap.mkdir()
    trap.chmod(0o777)
    assert not compile_cache.use_cache()
    trap.rmdir()
    trap.symlink_to(fresh / "here")
    assert not compile_cache.use_cache()
    assert nothing_here(fresh)


def test_nothing_writable_means_no_cache_and_no_error(fresh: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(os.path, "expanduser", lambda path: "/dev/null")
    monkeypatch.setattr(tempfile, "tempdir", "/proc/nowhere")
    assert not compile_cache.use_cache()


def test_numba_cache_dir_is_respected(fresh: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    before = config.CACHE_DIR
    monkeypatch.setenv("NUMBA_CACHE_DIR", str(fresh / "stated"))
    assert compile_cache.use_cache()
    assert before == config.CACHE_DIR
    monkeypatch.setenv("NUMBA_CACHE_DIR", "/dev/null/no")
    assert not compile_cache.use_cache()


def test_any_kernel_source_and_numbas_version_enter_the_hash(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    copy = tmp_path / "engines"
    shutil.copytree(compile_cache._KERNEL_FOLDER, copy, ignore=shutil.ignore_patterns("__pycache__"))
    before = compile_cache.source_hash()
    monkeypatch.setattr(compile_cache, "_KERNEL_FOLDER", copy)
    assert compile_cache.source_hash() == before
    for path in sorted(copy.glob("*.py")):
        text = path.read_text()
        path.write_text(text + "# changed\n")
        assert compile_cache.source_hash() != before, path.name
        path.write_text(text)
    monkeypatch.setattr("numba.__version__", "0.0.0")
    assert compile_cache.source_hash() != before


TINY = """\
import sys, driblet
run = driblet.run(driblet.loads(sys.stdin.read()), replicates=1, duration=0.5, threads=1)
print(int(run.events.sum()))
"""


@pytest.mark.parametrize(
    "change",
    [
        {"HOME": "/dev/null", "TMPDIR": "/proc/nowhere", "XDG_CACHE_HOME": ""},
        {"NUMBA_CACHE_DIR": "/dev/null/no"},
    ],
    ids=["nothing writable", "a stated folder that cannot be"],
)
def test_a_run_works_without_any_cache(tmp_path: Path, change: dict[str, str]) -> None:
    """The whole package in a process of its own, from a folder it must not write into."""
    from tests.texts import SMALL

    environment = {k: v for k, v in os.environ.items() if k not in ("NUMBA_CACHE_DIR", "XDG_CACHE_HOME", "TMPDIR")}
    done = subprocess.run(
        [sys.executable, "-c", TINY], input=SMALL, capture_output=True, text=True, cwd=tmp_path,
        env={**environment, **change}, timeout=180,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    assert int(done.stdout) > 0
    assert list(tmp_path.iterdir()) == []
