"""Requirements that cannot be meant: one line each, with the key and what would be right."""

from __future__ import annotations

from pathlib import Path

import pytest

import driblet
from driblet.commands.main import main
from tests.texts import MIXED, SMALL, changed

GOOD = """
[requirements.half]
must = "part >= 0.5"
when = "throughout"
during = ["0.5 s", "2 s"]
share = 0.9
"""


def problems(text: str) -> list[tuple[str, str]]:
    with pytest.raises(driblet.InputError) as caught:
        driblet.loads(text)
    return [(p.key, p.text) for p in caught.value.problems]


def with_must(must: str) -> str:
    return changed(SMALL + GOOD, ('"part >= 0.5"', f"'{must}'"))


def test_the_good_one_is_read() -> None:
    (requirement,) = driblet.loads(SMALL + GOOD).requirements
    assert (requirement.when, requirement.during_s, requirement.share) == ("throughout", (0.5, 2.0), 0.9)
    assert requirement.span_s(2.0) == (0.5, 2.0)


@pytest.mark.parametrize(
    ("must", "complaint"),
    [
        ("parts >= 0.5", 'is not a species or readout; did you mean "part"?'),
        ("C > 3", "is not a species or readout"),
        ("conc(C) > 3 mM", "is not a species"),
        ("gibbs(turned) < 0 kJ/mol", 'is not a reaction; did you mean "turn"?'),
        ("energy_charge > 0.8", "needs the species ATP and ADP and AMP"),
        ("A_per_C > 2", "is not a species or readout"),
        ("part", "compares nothing"),
        ("3 > 2", "compares constants"),
        ("3 mM > 2 mM and A > 2", "compares constants"),
        ("conc(A) > 2", 'a unit is needed there, such as "1 mM"'),
        ("2 > conc(A)", 'a unit is needed there, such as "1 mM"'),
        ("gibbs(turn) < -45", 'a unit is needed there, such as "-45 kJ/mol"'),
        ("1 / conc(A) < 5", 'a unit is needed there, such as "1e4 /M"'),
        ("conc(A) > 2 kJ/mol", "compare only with their like"),
        ("A > 2 mM", "compares a number of copies with a concentration; conc(...) is one"),
        ("A > conc(B)", "compare only with their like"),
        ("gibbs(turn) < conc(A)", "compare only with their like"),
        ("1 < A < 5", 'join two comparisons with "and"'),
        ("A == 3", "outside the grammar"),
        ("A = 3", "outside the grammar"),
        ("A != 3", "outside the grammar"),
        ("A > 3 & B > 2", "outside the grammar"),
        ("A > 3 or", "ends too early"),
        ("and A > 3", "out of place"),
        ("A > 3 and B", "join comparisons"),
        ("not A", "join comparisons"),
        ("A and B > 2", "join comparisons"),
        ("(A > 3) + 1 > 2", "true or false and no number"),
        ("(A > 3) > 2", "compares twice in a row"),
        ("A > (B > 2)", "true or false and no number"),
        ("-(A > 3)", "true or false and no number"),
        ("A > 3 B", "out of place"),
        ("max(A, B) > 3", "is outside the grammar"),
        ("exp(A) > 3", "is not a function"),
        ("__import__(1) > 3", "outside the grammar"),
        ("A > 5 s", "has no place here"),
        ("A > 5 parsec", "is not a unit"),
        ("(A > 3", "is missing"),
        ("not " * 80 + "A > 3", "nested too deeply"),
        ("(" * 80 + "A > 3" + ")" * 80, "nested too deeply"),
        ("A > 1" + " and A > 1" * 200, "at most"),
        (" ", "a text in quotes is needed"),
    ],
)
def test_conditions_that_cannot_be_meant(must: str, complaint: str) -> None:
    found = problems(with_must(must))
    assert [key for key, _ in found] == ["requirements.half.must"]
    assert complaint in found[0][1]


@pytest.mark.parametrize(
    ("old", "new", "key", "complaint"),
    [
        ('"throughout"', '"always"', "when", '"throughout" or "at end" or "once" or "on average"'),
        ('when = "throughout"', "", "when", "is missing"),
        ('must = "part >= 0.5"', "", "must", "is missing"),
        ('must = "part >= 0.5"', "must = 3", "must", "a text in quotes is needed"),
        ("share = 0.9", "share = 1.5", "share", "at most 1"),
        ("share = 0.9", "share = 90", "share", "write 0.95 for 95 %"),
        ("share = 0.9", "share = 0", "share", "above 0"),
        ("share = 0.9", "share = -0.2", "share", "above 0"),
        ("share = 0.9", "share = true", "share", "a plain number"),
        ("share = 0.9", 'share = "90 %"', "share", "a plain number"),
        ("share = 0.9", "share = nan", "share", "a plain number"),
        ("share = 0.9", "shares = 0.9", "shares", 'did you mean "share"?'),
        ('["0.5 s", "2 s"]', '["0.5 s", "3 s"]', "during", "beyond the run of 2 s"),
        ('["0.5 s", "2 s"]', '["1 s", "1 s"]', "during", "ends after it starts"),
        ('["0.5 s", "2 s"]', '["2 s", "1 s"]', "during", "ends after it starts"),
        ('["0.5 s", "2 s"]', '["-1 s", "1 s"]', "during", "negative"),
        ('["0.5 s", "2 s"]', "[0.5, 2]", "during", "has no unit"),
        ('["0.5 s", "2 s"]', '["0.5 mM", "2 s"]', "during", "a time is needed"),
        ('["0.5 s", "2 s"]', '["0.5 s"]', "during", "two times are needed"),
        ('["0.5 s", "2 s"]', '"2 s"', "during", "two times are needed"),
        ("share = 0.9", 'averaged_over = "1.6 s"', "averaged_over", "longer than the span of 1.5 s"),
        ("share = 0.9", 'averaged_over = "0 s"', "averaged_over", "above zero"),
        ("share = 0.9", 'averaged_over = "1 mM"', "averaged_over", "a time is needed"),
        ('"throughout"', '"on average"\naveraged_over = "1 s"', "averaged_over", "takes the whole span"),
    ],
)
def test_keys_that_cannot_be_meant(old: str, new: str, key: str, complaint: str) -> None:
    found = problems(changed(SMALL + GOOD, (old, new)))
    assert [k for k, _ in found] == [f"requirements.half.{key}"]
    assert complaint in found[0][1]


def test_all_problems_are_told_at_once() -> None:
    text = changed(SMALL + GOOD, ("part >= 0.5", "parts > 1"), ("0.9", "2"), ("throughout", "often"))
    assert {key.split(".")[-1] for key, _ in problems(text)} == {"must", "share", "when"}


def test_a_name_that_is_a_species_and_a_readout_is_no_name_for_a_requirement() -> None:
    text = changed(SMALL, ("part = ", "A = ")) + '[requirements.x]\nmust = "A > 2"\nwhen = "once"\n'
    assert "is a species and a readout" in problems(text)[0][1]


def test_a_one_way_reaction_has_no_energy_to_require() -> None:
    text = MIXED + '[requirements.x]\nmust = "gibbs(leak) < -3 kJ/mol"\nwhen = "once"\n'
    assert "is not a reaction" in problems(text)[0][1]


def test_a_shorter_run_than_the_span_is_refused(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "small.toml"
    file.write_text(SMALL + GOOD)
    assert main(["run", str(file), "-o", str(tmp_path / "x.h5"), "--duration", "1 s"]) == 2
    err = capsys.readouterr().err
    assert "requirements.half.during: ends at 2 s, beyond the run of 1 s" in err
    assert not (tmp_path / "x.h5").exists()


def test_what_only_samples_can_judge_is_never_decided_early(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "small.toml"
    file.write_text(changed(SMALL + GOOD, ("part >= 0.5", "gibbs(turn) / gibbs(turn) > 0.5")))
    assert main(["run", str(file), "-o", str(tmp_path / "x.h5"), "--stop-when-decided"]) == 2
    assert "judged on samples only (something is divided by an energy)" in capsys.readouterr().err


def test_division_by_a_count_that_reaches_zero_is_never_infinite_in_a_table(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = tmp_path / "small.toml"
    file.write_text(changed(SMALL, ("B / (A + B)", "A / B")) + '[requirements.x]\nmust = "part < 2"\nwhen = "at end"\n')
    assert main(["run", str(file), "-o", str(tmp_path / "x.h5")]) == 0
    out = capsys.readouterr().out
    assert "part: undefined in" in out
    assert main(["lifetime", str(tmp_path / "x.h5"), "--json"]) == 0
    assert main(["export", "--as", "csv", str(tmp_path / "x.h5")]) == 0
    text = capsys.readouterr().out
    assert "inf" not in text.lower()
    assert "nan" not in text.lower()
