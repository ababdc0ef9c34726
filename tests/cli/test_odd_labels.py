"""Titles and labels are printed as they stand, whatever they hold: brackets, quotes, other alphabets."""

from __future__ import annotations

from pathlib import Path

import pytest

from driblet.commands.main import main
from tests.texts import SMALL, changed

ODD = "[/b] [red]磷酸 ☃ [/x] :smile: % {0}"


@pytest.mark.filterwarnings("ignore:Glyph")
@pytest.mark.parametrize("ending", ["png", "svg", "pdf"])
def test_dollars_are_no_formulas(tmp_path: Path, ending: str) -> None:
    text = changed(
        SMALL,
        ('title = "small"', r'title = "cost in $ and $\\frac{"'),
        ('A = "10 copies"', r'A = { amount = "10 copies", label = "$A_{$" }'),
        ("replicates = 3", "replicates = 30"),
    )
    system, run, figure = tmp_path / "odd.toml", tmp_path / "odd.h5", tmp_path / f"odd.{ending}"
    system.write_text(text, encoding="utf-8")
    assert main(["run", str(system), "-o", str(run)]) == 0
    assert main(["plot", str(run), "-o", str(figure)]) == 0
    assert figure.stat().st_size > 1000


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
