"""Titles and labels are printed as they stand, whatever they hold: brackets, quotes, other alphabets."""

from __future__ import annotations

from pathlib import Path

import pytest

from driblet.commands.main import main
from tests.texts import SMALL, changed

ODD = "[/b] [red]磷酸 ☃ [/x] :smile: % {0}"


def test_brackets_are_no_markup(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    text = changed(
        SMALL,
        ('title = "small"', f'title = "{ODD}"'),
        ('A = "10 copies"', 'A = { amount = "10 copies", label = "[/A]" }'),
        ("K = 2", 'K = 2\nlabel = "[bold]"'),
    )
    system, run = tmp_path / "odd.toml", tmp_path / "odd.h5"
    system.write_text(text, encoding="utf-8")
    for argv in (["run", str(system), "-o", str(run)], ["show", str(run)], ["audit", str(system)]):
        assert main(argv) == 0, argv
        printed = capsys.readouterr()
        assert ODD in printed.out, argv
        assert printed.err == ""
    assert main(["show", str(run)]) == 0
    assert "[/A]" in capsys.readouterr().out
    assert main(["check", str(run)]) in (0, 3)
