"""`driblet check`: hold a run against the exact equilibrium of its energies."""

from __future__ import annotations

from pathlib import Path

import click

from driblet.commands.screen import console, duration, number, print_json, table
from driblet.errors import EXIT_CANNOT_ANSWER, EXIT_CHECK_SAYS_NO, EXIT_DONE
from driblet.quantities import power_unit

EXIT = {"consistent": EXIT_DONE, "inconsistent": EXIT_CHECK_SAYS_NO, "cannot answer": EXIT_CANNOT_ANSWER}


@click.command(short_help="Hold a run against the exact equilibrium of its energies.")
@click.argument("run_file", metavar="RUN.h5", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print the result as JSON.")
def check(run_file: Path, as_json: bool) -> int:
    """Test whether the counts in RUN.h5 follow the equilibrium that the energies of its system file imply.

    Each compartment is held against the exact law on its own class (its conserved sums and volume). Exit status 0:
    consistent; 1: inconsistent; 3: cannot answer, with what would be needed. A correct run is called inconsistent in at
    most 5 % of cases.
    """
    from driblet.results import Run
    from driblet_analysis.equilibrium_check import FALSE_ALARM_RATE, check_equilibrium

    with Run(run_file) as run:
        result = check_equilibrium(run)
    if as_json:
        print_json(
            {
                "file": str(run_file),
                "verdict": result.verdict,
                "reason": result.reason,
                "false_alarm_rate": FALSE_ALARM_RATE,
                "window_s": result.window_s,
                "tests": [row._asdict() for row in result.tests],
                "ratios": [row._asdict() for row in result.ratios],
            }
        )
        return EXIT[result.verdict]
    out = console()
    out.print(f"[bold]{result.verdict}[/bold]: ", end="")
    out.print(result.reason, markup=False)
    if result.window_s is not None:
        out.print(
            f"averages over {duration(result.window_s[0])} to {duration(result.window_s[1])}; the compartment is the "
            "sampling unit",
            markup=False,
        )
    if result.tests:
        rows = [[row.name, number(row.statistic), number(row.p, 3), str(row.samples)] for row in result.tests]
        out.print(table("tests against the exact law", ["test", "statistic", "corrected p", "compartments"], rows))
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
        out.print(
            table(
                "ratios of mean concentrations, products over reactants",
                ["reaction", "measured", "exact for these counts", "K′ (many molecules)", "unit"],
                rows,
            )
        )
    return EXIT[result.verdict]
