"""Where text for people goes, and how it is set; depends on click and ``plain``."""

from __future__ import annotations

import os
import sys
import textwrap

import click

from sercheck.plain import plain

__all__ = ["WIDTH", "folded", "plain", "say", "strong"]
WIDTH = 100
"""Columns of a line at most (common practice: two windows side by side on a wide screen)."""


def say(text: str) -> None:
    """Text for people: to the terminal, or to stderr when stdout belongs to a program."""
    to_program = not sys.stdout.isatty()
    stream = sys.stderr if to_program else sys.stdout
    click.echo(text, err=to_program, color=None if stream.isatty() and "NO_COLOR" not in os.environ else False)


def strong(text: str, *, good: bool) -> str:
    """A word that carries the answer: bold, and in a colour where there is one; the word alone says the same."""
    return click.style(text, bold=True, fg="cyan" if good else "magenta")


def folded(text: str, first: str = "", rest: str = "") -> str:
    """Text broken into lines of at most ``WIDTH`` columns."""
    return textwrap.fill(text, WIDTH, initial_indent=first, subsequent_indent=rest, break_on_hyphens=False)
