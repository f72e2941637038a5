"""The command line: the only place that prints or exits.

Each command lives in a file of its own and is imported only when it is called, so that
``screener --help`` answers at once.
"""

from __future__ import annotations

import importlib
import os
import sys
import traceback

import click

__all__ = ["main"]

# One numeric thread per process, set before numpy is imported: two threads on two busy cores make
# small factorisations hundreds of times slower. Work is spread over processes instead.
for _variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_variable, "1")

EXIT_DEFECT, EXIT_INPUT = 1, 2

_COMMANDS = {
    "candidate": "Screen one star and write its dossier.",
    "catalogue": "Screen a folder, a list or a catalogue table of stars; resumes where it stopped.",
    "decide": "Record a decision on a signal in the ledger.",
    "dossier": "Draw the dossier of a star that was screened already.",
    "ledger": "Show, verify or export the recorded decisions.",
    "reproduce": "Rerun a verdict from its recorded inputs and compare number by number.",
    "rules": "List, explain or check grading rules.",
}


class _LazyGroup(click.Group):
    """A group whose commands are imported when they are called."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return sorted(_COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in _COMMANDS:
            return None
        module = importlib.import_module(f"screener.cli.{cmd_name}")
        command: click.Command = module.command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(sorted(_COMMANDS.items()))


@click.group(cls=_LazyGroup, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="activity-screener", prog_name="screener")
def _cli() -> None:
    """Planet, or the star itself? Grades the periods in radial velocities."""


def main(arguments: list[str] | None = None) -> None:
    """Run the command line and exit with its code.

    Exit codes: 0 done, 1 a defect of ours, 2 the command line or an input is wrong,
    3 a catalogue run ended with some stars failed.
    """
    try:
        code = _cli.main(arguments, prog_name="screener", standalone_mode=False)
    except click.exceptions.Exit as stop:
        code = stop.exit_code
    except click.ClickException as fault:
        fault.show()
        code = EXIT_INPUT
    except click.Abort:
        click.echo("Stopped.", err=True)
        code = 130
    except BrokenPipeError:
        code = 0
    except Exception as error:
        code = _explain(error)
    sys.exit(code if isinstance(code, int) else 0)


def _explain(error: Exception) -> int:
    from screener.core.errors import InputFault, InputFaults, ScreenerError

    if isinstance(error, InputFaults):
        for fault in error.faults:
            click.echo(f"screener: {fault}", err=True)
        return EXIT_INPUT
    if isinstance(error, InputFault):
        click.echo(f"screener: {error}", err=True)
        return EXIT_INPUT
    if isinstance(error, ScreenerError):
        click.echo(f"screener: {error}", err=True)
        return EXIT_DEFECT
    if isinstance(error, OSError) and error.filename is not None:
        click.echo(
            f"screener: {error.filename}: {error.strerror}. "
            "Check the path, its permissions and the free space.",
            err=True,
        )
        return EXIT_INPUT
    traceback.print_exc()
    click.echo("screener: this is a defect of ours; please report the lines above.", err=True)
    return EXIT_DEFECT
