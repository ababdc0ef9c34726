"""The `driblet` command: a table of names, each command loaded when it is called, and the exit statuses."""

from __future__ import annotations

import os
import sys
import traceback
from collections.abc import Sequence
from importlib import import_module

import click

from driblet.errors import (
    EXIT_BAD_INPUT,
    EXIT_DONE,
    EXIT_INTERRUPTED,
    EXIT_OWN_FAULT,
    DribletError,
    InputError,
)

# name -> ("module:function", one line of help); modules of driblet_analysis appear here by name only
COMMANDS: dict[str, tuple[str, str]] = {
    "new": ("driblet.commands.new:new", "Write a commented starter file, or copy a ready system."),
    "audit": ("driblet_analysis.commands.audit:audit", "Show what a system's energies imply before anything runs."),
    "reconcile": ("driblet.commands.reconcile:reconcile", "Show the nearest energies that close every cycle."),
    "run": ("driblet.commands.run:run", "Simulate an ensemble of compartments into a run file."),
    "show": ("driblet.commands.show:show", "Print what a run file holds."),
    "check": ("driblet_analysis.commands.check:check", "Hold a run against the energies of its system."),
    "compare": (
        "driblet_analysis.commands.compare:compare",
        "Hold one treatment of a system's enzymes against another.",
    ),
    "lifetime": (
        "driblet_analysis.commands.lifetime:lifetime",
        "Tell how long requirements hold, in how many compartments.",
    ),
    "plot": ("driblet_analysis.commands.plot:plot", "Draw trajectories and histograms of a run."),
    "reference": ("driblet.commands.reference:reference", "List or explain the energies of the reference table."),
    "sweep": ("driblet_analysis.commands.sweep:sweep", "Simulate many points of a system, here or on a cluster."),
    "size": ("driblet_analysis.commands.size:size", "Find the least or greatest value that meets a requirement."),
    "export": ("driblet.commands.export:export", "Print a network as JSON, or a run's trajectories as CSV."),
}


class LazyGroup(click.Group):
    """Loads a command's module when it is called; `--help` reads the table alone."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, name: str) -> click.Command | None:
        if name not in COMMANDS:
            return None
        module, function = COMMANDS[name][0].split(":")
        command = getattr(import_module(module), function)
        assert isinstance(command, click.Command)
        return command

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        if args and args[0] not in COMMANDS:
            from difflib import get_close_matches

            close = get_close_matches(args[0], COMMANDS, 1)
            hint = f'did you mean "{close[0]}"?' if close else f"commands: {', '.join(COMMANDS)}"
            raise click.UsageError(f'"{args[0]}" is not a command; {hint}', ctx)
        return super().resolve_command(ctx, args)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl([(name, text) for name, (_, text) in COMMANDS.items()])


def _tell_version(ctx: click.Context, _: click.Parameter, wanted: bool) -> None:
    if wanted and not ctx.resilient_parsing:
        from driblet.version import __version__  # takes longer to find out than the help does to print

        click.echo(f"driblet, version {__version__}")
        ctx.exit()


@click.group(
    cls=LazyGroup,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
    epilog="Exit status: 0 done or consistent, 1 a check says no, 2 bad input or bad use, 3 the data cannot answer, "
    "4 a fault of driblet's own, 130 interrupted.",
)
@click.option(
    "--version",
    is_flag=True,
    expose_value=False,
    is_eager=True,
    callback=_tell_version,
    help="Show the version and exit.",
)
def cli() -> None:
    """Count molecules in small ATP-driven compartments, with every reverse rate tied to the energies.

    A simulation is a design aid: confirm by experiment. It is no basis for medical or dosing decisions.
    """


def _complain(line: str) -> None:
    print(line, file=sys.stderr)


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command line; returns the exit status. argv : arguments without the program's name."""
    try:
        result = cli.main(args=list(argv) if argv is not None else None, prog_name="driblet", standalone_mode=False)
        sys.stdout.flush()
        return result if isinstance(result, int) else EXIT_DONE
    except click.exceptions.Abort:
        _complain("interrupted")
        return EXIT_INTERRUPTED
    except KeyboardInterrupt:
        _complain("interrupted")
        return EXIT_INTERRUPTED
    except click.exceptions.NoArgsIsHelpError as error:
        _complain(error.format_message())
        return EXIT_BAD_INPUT
    except click.ClickException as error:
        context = getattr(error, "ctx", None)
        path = context.command_path if context else "driblet"
        message = " ".join(error.format_message().split()).rstrip(".")
        _complain(f"{path}: {message}; see `{path} --help`")
        return EXIT_BAD_INPUT
    except InputError as error:
        for line in error.lines():
            _complain(line)
        return error.exit_status
    except DribletError as error:
        _complain(str(error))
        return error.exit_status
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return EXIT_DONE
    except Exception as error:
        traceback.print_exc()
        _complain(f"driblet: a fault of its own, not of your input: {type(error).__name__}: {error}")
        return EXIT_OWN_FAULT


def script() -> None:
    """Entry point of the console script."""
    sys.exit(main())


if __name__ == "__main__":
    script()
