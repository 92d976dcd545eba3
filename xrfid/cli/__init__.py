"""The command line: one file a command, no computation here, heavy imports only when a command runs."""

from __future__ import annotations

import os
import sys
from importlib import import_module

import click

from xrfid import __version__
from xrfid.errors import XrfidError, one_line

_COMMANDS = {
    "identify": "Say which elements spectra show, how sure that is, and why.",
    "calibrate": "Find energy scale and resolution from reference measurements.",
    "batch": "Fit every spectrum of an HDF5 run.",
    "reach": "Tell which elements an instrument can show at all.",
    "simulate": "Make a spectrum with known content from a recipe.",
    "convert": "Write spectra in another format.",
}


class _Commands(click.Group):
    """Loads a command's module when it is called, so that ``--help`` answers at once."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(_COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in _COMMANDS:
            return None
        command: click.Command = import_module(f"xrfid.cli.{cmd_name}").command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(_COMMANDS.items()))

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        if args and args[0] not in _COMMANDS:
            from xrfid.errors import did_you_mean

            ctx.fail(f'there is no command "{args[0]}"; {did_you_mean(args[0], _COMMANDS)}')
        return super().resolve_command(ctx, args)


@click.command(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="xrfid")
def cli() -> None:
    """Read X-ray fluorescence spectra and say which elements are there, and why.

    Exit status: 0 done; 2 the command line is wrong; 3 an input could not be read or makes no sense;
    4 the work ran, but its result must not be trusted.
    """


def main() -> None:
    """Run the command line; every failure is one line on standard error and a status."""
    try:
        cli.main(standalone_mode=False)
    except click.exceptions.Abort:
        complain("stopped")
        sys.exit(130)
    except click.ClickException as error:
        error.show()
        sys.exit(error.exit_code)
    except XrfidError as error:
        complain(str(error))
        sys.exit(error.exit_status)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(1)
    except Exception as error:
        if os.environ.get("XRFID_TRACEBACK"):
            raise
        complain(one_line(f"internal error, please report it ({type(error).__name__}: {error}); "
                          "XRFID_TRACEBACK=1 shows where"))  # fmt: skip
        sys.exit(1)


def complain(text: str) -> None:
    """Print one line on standard error."""
    click.echo(f"xrfid: {text}", err=True)
