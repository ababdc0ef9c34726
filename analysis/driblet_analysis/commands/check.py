"""`driblet check`: hold a run against the energies of its system."""

from __future__ import annotations

from pathlib import Path

import click

from driblet.commands.screen import console, duration, number, print_json, table
from driblet.errors import EXIT_CANNOT_ANSWER, EXIT_CHECK_SAYS_NO, EXIT_DONE
from driblet.quantities import power_unit
from driblet_analysis.check_rows import CheckResult

EXIT = {"consistent": EXIT_DONE, "inconsistent": EXIT_CHECK_SAYS_NO, "cannot answer": EXIT_CANNOT_ANSWER}


@click.command(short_help="Hold a run against the energies of its system.")
@click.argument("run_file", metavar="RUN.h5", type=click.Path(path_type=Path))
@click.option(
    "--against",
    type=click.Path(path_type=Path),
    metavar="OTHER.toml",
    help="Test the same counts against these energies.",
)
@click.option(
    "-o", "--output", type=click.Path(path_type=Path), metavar="FIG", help="Draw the result: .png, .pdf or .svg."
)
@click.option("--json", "as_json", is_flag=True, help="Print the result as JSON.")
def check(run_file: Path, against: Path | None, output: Path | None, as_json: bool) -> int:
    """Test whether RUN.h5 follows from the energies of its system file, and say how small an error would have shown.

    Firings are held against integrated propensities, driven or not; where there is an equilibrium, each compartment is
    held against the exact law on its own class. Exit status 0: consistent; 1: inconsistent; 3: cannot answer, with what
    would be needed. A correct run is called inconsistent in at most 5 % of cases.
    """
    from driblet.results import Run
    from driblet.system import load
    from driblet_analysis.run_check import FALSE_ALARM_RATE, check_run

    with Run(run_file) as run:
        result = check_run(run, None if against is None else load(against))
        if output is not None:
            from driblet_analysis.check_figure import check_figure
            from driblet_analysis.figures import save

            save(check_figure(run, result), output)
    if as_json:
        print_json(
            {
                "file": str(run_file),
                "against": None if against is None else str(against),
                "verdict": result.verdict,
                "reason": result.reason,
                "false_alarm_rate": FALSE_ALARM_RATE,
                "window_s": result.window_s,
                "tests": [row._asdict() for row in result.tests],
                "ratios": [row._asdict() for row in result.ratios],
                "reactions": [row._asdict() for row in result.energies],
                "notes": list(result.notes),
            }
        )
        return EXIT[result.verdict]
    _print(result)
    if output is not None:
        console().print(f"written: {output}", markup=False, soft_wrap=True)
    return EXIT[result.verdict]


def _print(result: CheckResult) -> None:
    out = console()
    out.print(f"{result.verdict}: ", style="bold", end="")
    out.print(result.reason, markup=False, soft_wrap=True)
    if result.window_s is not None:
        out.print(
            f"averages over {duration(result.window_s[0])} to {duration(result.window_s[1])}; the compartment is the "
            "sampling unit",
            markup=False,
        )
    if result.tests:
        rows = [[row.name, number(row.statistic), number(row.p, 3), str(row.samples)] for row in result.tests]
        out.print(table("tests", ["test", "statistic", "corrected p", "compartments"], rows))
    if result.energies:
        rows = [
            [
                row.name,
                number(row.stated),
                "–" if row.measured is None else f"{number(row.measured)} ± {number(row.standard_error, 2)}",
                "blind" if row.detectable_kJ_per_mol is None else number(row.detectable_kJ_per_mol, 2),
            ]
            for row in result.energies
        ]
        columns = ["reaction", "stated", "shown by its firings", "error that would have shown"]
        out.print(table("energies ΔG°′, kJ/mol", columns, rows))
    if result.ratios:
        rows = [
            [
                row.reaction,
                f"{number(row.measured)} ± {number(row.standard_error, 2)}",
                number(row.expected),
                number(row.K),
                power_unit(row.order_change),
            ]
            for row in result.ratios
        ]
        columns = ["reaction", "measured", "exact for these counts", "K′ (many molecules)", "unit"]
        out.print(table("ratios of mean concentrations, products over reactants", columns, rows))
    for note in result.notes:
        out.print(f"note: {note}", markup=False)
