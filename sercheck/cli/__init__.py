"""The command line: finds a command's file when it is asked for, and turns errors into one sentence and exit status 2.

Exit status: 0 released or done, 1 held, 2 trouble. Trouble never releases a batch.
"""

from __future__ import annotations

import importlib
import os
import sys
import traceback

import click

from sercheck.errors import RuleFileError, SercheckError

COMMANDS = {
    "gate": "judge a batch",
    "ledger": "look up what was judged",
    "measures": "the measures, their fields, formulas and sources",
    "schema": "JSON Schema of rule files and records",
}
TROUBLE = 2


class _ByName(click.Group):
    """A group whose commands are imported when they are called; the list itself needs no import."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        command: click.Command = importlib.import_module(f"sercheck.cli.{cmd_name}").command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))


@click.group(cls=_ByName, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="sercheck")
def group() -> None:
    """Decide for every batch of a scheduled feed whether it may be loaded."""


def main() -> None:
    """Run the command line; the process ends here."""
    try:
        group.main(prog_name="sercheck", standalone_mode=True)
    except RuleFileError as error:
        for mistake in error.mistakes:
            click.echo(mistake.sentence(), err=True)
    except SercheckError as error:
        click.echo(f"sercheck: {error.sentence()}", err=True)
    except Exception as error:  # noqa: BLE001  Python would end with 1, which means 'held'; a bug must say 2
        if os.environ.get("SERCHECK_TRACEBACK"):
            traceback.print_exc()
        what = " ".join(str(error).split())[:300]
        click.echo(
            f"sercheck: internal error, nothing was released: {type(error).__name__}: {what}. "
            "Please report it; SERCHECK_TRACEBACK=1 shows where.",
            err=True,
        )
    sys.exit(TROUBLE)
