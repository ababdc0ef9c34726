"""`driblet compare`: one system simulated in two ways, tested against each other."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from driblet.commands.screen import console, number, print_json, table, time_option
from driblet.errors import EXIT_CANNOT_ANSWER, EXIT_CHECK_SAYS_NO, EXIT_DONE, one_problem
from driblet.quantities import QuantityError, read_quantity

EXIT = {"consistent": EXIT_DONE, "inconsistent": EXIT_CHECK_SAYS_NO, "cannot answer": EXIT_CANNOT_ANSWER}
REPLICATES = 400


def volume_option(ctx: click.Context, param: click.Parameter, value: str | None) -> float | None:
    """A volume in L from an option's text."""
    if value is None:
        return None
    name = param.opts[-1]
    try:
        volume = read_quantity(value).to("volume")
    except QuantityError as error:
        raise one_problem("command line", name, str(error)) from error
    if not volume > 0:
        raise one_problem("command line", name, f'"{value}" will not do: a volume above zero is needed')
    return float(volume)


@click.command(short_help="Hold one way to simulate a system against another.")
@click.argument("file", type=click.Path(path_type=Path))
@click.option(
    "--treatments",
    metavar="A,B",
    help='Two of "elementary", "lumped", "auto"; default: elementary,lumped, or with --engines as FILE says.',
)
@click.option("--engines", metavar="A,B", help='Two of "exact", "leap", "auto"; default: exact,exact.')
@click.option("--volume", callback=volume_option, metavar="VOLUME", help='Of one compartment, such as "0.02 fL".')
@click.option("--duration", callback=time_option, metavar="TIME", help="Simulated time; default: as FILE says.")
@click.option("--replicates", type=click.IntRange(20, 1_000_000), help=f"Of each; default: {REPLICATES}.")
@click.option("--seed", type=click.IntRange(0, 2**63 - 1), help="Seed; default: as FILE says.")
@click.option("--threads", type=click.IntRange(1, 4096), help="Threads; default: one per core.")
@click.option("-o", "--output", type=click.Path(path_type=Path), metavar="FIG", help="Draw it: .png, .pdf or .svg.")
@click.option("--json", "as_json", is_flag=True, help="Print the result as JSON.")
def compare(
    file: Path,
    treatments: str | None,
    engines: str | None,
    volume: float | None,
    duration: float | None,
    replicates: int | None,
    seed: int | None,
    threads: int | None,
    output: Path | None,
    as_json: bool,
) -> int:
    """Simulate the system in FILE in two ways, its enzymes treated or its engine chosen, and test whether the counts agree.

    At ten times the mean, the variance and the distribution of each species' total and each readout are compared over
    compartments, all tests corrected together. A smaller --volume keeps concentrations and makes step-by-step simulation
    affordable; a short --duration too. Exit status 0: no departure; 1: one departs; 3: nothing to compare. Ways
    that agree are told apart in at most 5 % of cases.
    """
    from driblet.system import load
    from driblet.volume import at_volume
    from driblet_analysis import compare as comparing

    ways = _ways(treatments, engines)
    system = load(file)
    if volume is not None:
        system = at_volume(system, volume)
    span = duration or system.settings.duration_s
    if not span > 0:
        raise one_problem(str(file), "run.duration", "is missing: state it there or with --duration")
    result = comparing.compare(
        system,
        ways,
        replicates or REPLICATES,
        span,
        system.settings.seed if seed is None else seed,
        threads,
    )
    if output is not None:
        from driblet_analysis.compare_figure import compare_figure
        from driblet_analysis.figures import save

        save(compare_figure(result), output)
    if as_json:
        print_json(_facts(file, result))
    else:
        _print(result)
        if output is not None:
            console().print(f"written: {output}", markup=False, soft_wrap=True)
    return EXIT[result.verdict]


def _ways(treatments: str | None, engines: str | None) -> Any:
    """The two ways that the options ask for."""
    from driblet_analysis.compare import Way

    if treatments is None and engines is None:
        treatments = "elementary,lumped"
    hows: list[str | None] = (
        [None, None] if treatments is None else [*_two("--treatments", treatments, "elementary,lumped")]
    )
    chosen = ["exact", "exact"] if engines is None else _two("--engines", engines, "exact,leap")
    return tuple(Way(how, engine) for how, engine in zip(hows, chosen, strict=True))


def _two(option: str, text: str, example: str) -> list[str]:
    pair = [part.strip() for part in text.split(",")]
    if len(pair) != 2:
        raise click.UsageError(f'{option}: "{text}" is not two of them, such as {example}')
    return pair


def _facts(file: Path, result: Any) -> dict[str, Any]:
    from driblet_analysis.compare import FALSE_ALARM_RATE

    return {
        "file": str(file),
        "ways": list(result.ways),
        "engines": [str(run.provenance.get("engine_taken", "exact")) for run in result.runs],
        "verdict": result.verdict,
        "reason": result.reason,
        "false_alarm_rate": FALSE_ALARM_RATE,
        "replicates": result.replicates,
        "events": list(result.events),
        "differences": [row._asdict() for row in result.rows],
        "turnovers": [row._asdict() for row in result.turnovers],
    }


def _print(result: Any) -> None:
    out = console()
    out.print(f"{result.verdict}: ", style="bold", end="")
    out.print(result.reason, markup=False, soft_wrap=True)
    first, second = result.ways
    for run in result.runs:
        if run.provenance.get("engine_why"):
            out.print(str(run.provenance["engine_why"]), markup=False, soft_wrap=True)
    ratio = result.events[0] / result.events[1] if result.events[1] else 1.0
    if not 0.8 < ratio < 1.25:
        out.print(f"{first} fires {number(ratio, 3)} times the events of {second}", markup=False)
    if result.rows:
        rows = [
            [
                row.quantity,
                f"{row.time_s:g}",
                number(row.mean[0]),
                _percent(row.mean),
                _percent(row.sd),
                f"{row.distance:.3f} ({row.noise:.3f})",
                number(row.smallest_p, 2),
            ]
            for row in result.worst()
        ]
        columns = ["quantity", "at (s)", f"mean, {first}", "mean", "sd", "distance (chance)", "corrected p"]
        out.print(table(f"{second} less {first}, where each departs most", columns, rows))
    if result.turnovers:
        rows = [
            [
                row.reaction,
                number(row.mean[0]),
                number(row.mean[1]),
                number(row.fano[0], 3),
                number(row.fano[1], 3),
                "–" if row.predicted is None else f"{number(row.predicted[0], 3)}, {number(row.predicted[1], 3)}",
            ]
            for row in result.turnovers
        ]
        columns = [
            "net turnovers",
            f"mean, {first}",
            second,
            f"variance / mean, {first}",
            second,
            "enzyme alone, at the start",
        ]
        out.print(table("turnovers by the end", columns, rows))


def _percent(pair: tuple[float, float]) -> str:
    return "–" if not pair[0] else f"{100 * (pair[1] / pair[0] - 1):+.2g} %"
