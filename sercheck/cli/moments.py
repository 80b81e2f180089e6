"""Times on the command line: dates, times, and lengths back from now; depends on ``rulebook.lengths``."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta

import click

from sercheck.rulebook import lengths


def since(_: click.Context, __: click.Parameter, text: str | None) -> str | None:
    """Callback of ``--since``: where a stretch begins, as text that compares with the ledger's."""
    return moment(text, end=False)


def until(_: click.Context, __: click.Parameter, text: str | None) -> str | None:
    """Callback of ``--until``: where it ends; a date means its last second."""
    return moment(text, end=True)


def moment(text: str | None, *, end: bool, now: datetime | None = None) -> str | None:
    """A date, a time, or a length such as 7D that is counted back from now, as UTC text.

    Raises:
        click.BadParameter: it is none of them.
    """
    if text is None:
        return None
    wanted = "wanted 2026-01-12, 2026-01-12T06:00:00Z or a length back from now such as 7D"
    try:
        stamp = _back(text, now or datetime.now(UTC)) or datetime.fromisoformat(text)
        if end and len(text) == len("2026-01-12"):
            stamp = stamp.replace(hour=23, minute=59, second=59)
        utc = (stamp if stamp.tzinfo else stamp.replace(tzinfo=UTC)).astimezone(UTC)
    except (ValueError, OverflowError):
        raise click.BadParameter(f"{text!r} is no date, time or length; {wanted}") from None
    # Without the Z a start sorts before all fractions of its second; with it an end sorts behind them.
    return f"{utc:%Y-%m-%dT%H:%M:%S}" + ("Z" if end else "")


def _back(text: str, now: datetime) -> datetime | None:
    try:
        return now - timedelta(seconds=lengths.seconds(text))
    except ValueError:
        return None
