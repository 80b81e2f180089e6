"""The command line: finds a command's file when it is asked for, and turns errors into one sentence and exit status 2.

Exit status: 0 released or done, 1 held, 2 trouble. Trouble never releases a batch.
"""

from __future__ import annotations

import importlib
import os
import sys
import traceback
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

import click

from sercheck.cli.say import plain
from sercheck.errors import OutputError, RuleFileError, SercheckError

COMMANDS = {
    "study": "what the feed's serial correlation looks like",
    "draft": "a first rule file, with bounds from history",
    "learn": "learn the baseline, fill the archive",
    "gate": "judge a batch",
    "settle": "a person overrules: release or discard a held batch, or declare a new regime",
    "rehearse": "false holds and fault detection before going live",
    "brief": "the page for the person on call",
    "ledger": "look up what was judged",
    "measures": "the measures, their fields, formulas and sources",
    "schema": "JSON Schema of rule files and records",
}
TROUBLE = 2
HEAD, TAIL = 400, 1_400
"""Letters of a sentence about trouble, from its beginning and its end: names from outside may be endless."""


@contextmanager
def _to_the_end() -> Iterator[None]:
    """A reader that went away is trouble like any other; click would end with 1, which means 'held'."""
    try:
        yield
    except BrokenPipeError as error:
        raise OutputError("stdout", "whoever was reading has closed the pipe; not all was written") from error


class _ByName(click.Group):
    """A group whose commands are imported when they are called; the list itself needs no import."""

    def make_context(
        self, info_name: str | None, args: list[str], parent: click.Context | None = None, **extra: Any
    ) -> click.Context:
        with _to_the_end():
            return super().make_context(info_name, args, parent, **extra)

    def invoke(self, ctx: click.Context) -> Any:
        with _to_the_end():
            return super().invoke(ctx)

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
    _open_streams()
    status = _run()
    try:
        sys.stdout.flush()
    except (OSError, ValueError) as error:  # what was to be read is lost: no answer may say otherwise
        if status != TROUBLE:
            _tell(f"sercheck: stdout: cannot be written: {getattr(error, 'strerror', None) or error}")
        status = TROUBLE
    _leave_streams()
    sys.exit(status)


def _run() -> int:
    """Run the command; its exit status."""
    try:
        return group.main(prog_name="sercheck", standalone_mode=False) or 0
    except SystemExit as end:
        return end.code if isinstance(end.code, int) else TROUBLE if end.code else 0
    except RuleFileError as error:
        for mistake in error.mistakes:
            _tell(mistake.sentence())
    except SercheckError as error:
        _tell(f"sercheck: {error.sentence()}")
    except click.ClickException as error:
        with suppress(OSError):
            error.show()
    except click.Abort:
        _tell("sercheck: interrupted. What was decided before stands, and a repeat does no harm.")
    except OSError as error:
        _tell(f"sercheck: {error.filename or 'output'}: {error.strerror or error}")
        _trace()
    except Exception as error:  # noqa: BLE001  Python would end with 1, which means 'held'; a bug must say 2
        _trace()
        what = " ".join(str(error).split())[:300]
        _tell(
            f"sercheck: internal error, nothing was released: {type(error).__name__}: {what}. "
            "Please report it; SERCHECK_TRACEBACK=1 shows where."
        )
    return TROUBLE


def _tell(sentence: str) -> None:
    """One line on stderr, without the control characters that names from outside may hold."""
    with suppress(OSError):
        line = " ".join(sentence.splitlines())
        if len(line) > HEAD + TAIL:
            line = f"{line[:HEAD]} … {line[-TAIL:]}"
        click.echo(plain(line, len(line)), err=True)


def _trace() -> None:
    if os.environ.get("SERCHECK_TRACEBACK"):
        traceback.print_exc()


def _open_streams() -> None:
    """Give closed streams a place to go, so that no file of ours is opened under their number and written to."""
    for name, mode in (("stdin", "r"), ("stdout", "w"), ("stderr", "w")):
        if getattr(sys, name) is None:
            setattr(sys, name, Path(os.devnull).open(mode, encoding="utf-8"))  # noqa: SIM115  open until the end


def _leave_streams() -> None:
    """Python flushes once more on its way out and would end with its own status when that fails."""
    for stream in (sys.stdout, sys.stderr):
        try:
            stream.flush()
        except (OSError, ValueError):
            with suppress(OSError, ValueError):
                os.dup2(os.open(os.devnull, os.O_WRONLY), stream.fileno())
