"""Numbers, times and lists as a person reads them on a telephone; depends on ``plain``."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import datetime
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from sercheck.plain import plain, without_secrets

NAME, SENTENCE, TEXT = 120, 600, 2_000
"""Letters shown of a name, of a sentence and of a text that a person wrote."""
NOTHING = "–"


def name(text: object) -> str:
    """A name of a feed, rule or series."""
    return plain(without_secrets(str(text)), NAME)


def sentence(text: object) -> str:
    """A sentence of a record."""
    return plain(without_secrets(str(text)), SENTENCE)


def prose(text: object) -> str:
    """What a rule's author or another person wrote, of one or several lines."""
    return plain(" ".join(without_secrets(str(text)).split()), TEXT)


def number(value: float | None) -> str:
    """Four significant digits, no exponent from 0.0001 to 10^9."""
    if value is None:
        return NOTHING
    if value == 0 or 1e-4 <= abs(value) < 1e4:
        return f"{value:.4g}"
    return f"{value:.0f}" if 1e4 <= abs(value) < 1e9 else f"{value:.2e}"


def many(count: int, what: str, plural: str = "") -> str:
    """``1 rule``, ``2 rules``, ``12,345 records``."""
    return f"{count:,} {what if count == 1 else plural or what + 's'}"


def listed(names: Sequence[str], most: int) -> str:
    """The first names, and how many more there are."""
    shown = list(names[:most])
    more = len(names) - len(shown)
    if more:
        return f"{', '.join(shown)} and {more:,} more"
    return " and ".join([", ".join(shown[:-1]), shown[-1]]) if len(shown) > 1 else "".join(shown)


def zone_of(text: object) -> ZoneInfo:
    """The zone of a feed; UTC for a name that this machine does not know."""
    try:
        return ZoneInfo(str(text))
    except (ZoneInfoNotFoundError, ValueError, OSError):
        return ZoneInfo("UTC")


def moment(stamp: str | None, zone: ZoneInfo) -> str:
    """``Mon 19 Jan 2026, 14:00`` on the zone's clock."""
    if stamp is None:
        return NOTHING
    local = datetime.fromisoformat(stamp).astimezone(zone)
    return f"{local:%a} {local.day} {local:%b %Y, %H:%M}"


def day(stamp: str | None, zone: ZoneInfo) -> str:
    """``Mon 19 Jan``."""
    if stamp is None:
        return NOTHING
    local = datetime.fromisoformat(stamp).astimezone(zone)
    return f"{local:%a} {local.day} {local:%b}"


def local_date(stamp: str, zone: ZoneInfo) -> str:
    """``2026-01-19``."""
    return f"{datetime.fromisoformat(stamp).astimezone(zone):%Y-%m-%d}"


def stretch(first: str | None, last: str | None, zone: ZoneInfo) -> str:
    """From the first to the last row; the day is said once where it is one."""
    if first is None or last is None:
        return "no rows"
    begin, end = (datetime.fromisoformat(stamp).astimezone(zone) for stamp in (first, last))
    if begin.date() == end.date():
        return f"{moment(first, zone)} to {end:%H:%M}"
    return f"{moment(first, zone)} to {moment(last, zone)}"
