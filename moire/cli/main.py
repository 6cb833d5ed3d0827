"""The `moire` group: version, and errors turned into exit codes."""

from __future__ import annotations

import sys
from importlib import import_module
from typing import Any

import click

import moire
from moire.errors import BadRequest, EngineLost, MoireError, OutputRefused, RecipeMismatch, ScanUnreadable

EXIT_USAGE, EXIT_UNREADABLE, EXIT_OUTPUT, EXIT_PARTIAL, EXIT_VERDICT = 2, 3, 4, 5, 10
_COMMANDS = {
    "examine": "find and explain every periodic pattern in one scan",
    "mend": "remove what is artifact, keep what is picture",
    "plan": "which ppi, turn or derivative size shows no beat",
    "intake": "triage a folder of scans, resumable",
    "proof": "make a test scan with known truth",
}


class _Commands(click.Group):
    """Loads a command's room only when it is called, so that help stays quick."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(_COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in _COMMANDS:
            return None
        command: click.Command = getattr(import_module(f"moire.cli.{cmd_name}"), "command")  # noqa: B009
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(_COMMANDS.items()))


@click.command(
    cls=_Commands, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80}
)
@click.version_option(moire.__version__, prog_name="moire")
def group() -> None:
    """Periodic artifacts in scans: find them, explain them, mend them.

    \b
    Example:
      moire examine page.tif
      moire mend page.tif -o page-mended.tif --report page.html

    Exit codes: 0 done, 2 usage, 3 an input could not be read, 4 an output could
    not be written, 5 some inputs of a batch failed, 10 a verdict named by
    --fail-on occurred.
    """


def main(arguments: list[str] | None = None) -> Any:
    """Run the command line and exit with its code."""
    try:
        code = group.main(args=arguments, prog_name="moire", standalone_mode=False)
    except click.ClickException as error:
        error.show()
        sys.exit(error.exit_code)
    except click.exceptions.Abort:
        sys.exit(130)
    except MoireError as error:
        click.echo(f"moire: {error}", err=True)
        sys.exit(_exit_code(error))
    sys.exit(code if isinstance(code, int) else 0)


def _exit_code(error: MoireError) -> int:
    if isinstance(error, OutputRefused):
        return EXIT_OUTPUT
    if isinstance(error, BadRequest | RecipeMismatch):
        return EXIT_USAGE
    if isinstance(error, EngineLost):
        return EXIT_PARTIAL
    return EXIT_UNREADABLE if isinstance(error, ScanUnreadable) else 1
