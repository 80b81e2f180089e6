"""Lengths in time, cadences, zones and dates as a rule file writes them; depends on nothing of ours.

A length is a whole number and one unit. Every function raises ``ValueError`` with two arguments, what was wanted and
what to do, for a text it cannot read.
"""

from __future__ import annotations

import re
from datetime import date
from difflib import get_close_matches
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError, available_timezones

UNITS = {"ms": 1e-3, "s": 1.0, "min": 60.0, "h": 3600.0, "D": 86400.0, "W": 604800.0}
"""Seconds in each unit of fixed length."""

_MONTH = 365.2425 / 12 * 86400.0
MEAN = {
    "B": 7 / 5 * 86400.0, "MS": _MONTH, "ME": _MONTH, "QS": 3 * _MONTH, "QE": 3 * _MONTH, "YS": 12 * _MONTH,
    "YE": 12 * _MONTH,
}  # fmt: skip
"""Seconds in each unit of the calendar on average: five working days in seven, the Gregorian year of 365.2425 days."""

SIZES = {"kB": 1e3, "MB": 1e6, "GB": 1e9, "TB": 1e12, "KiB": 2.0**10, "MiB": 2.0**20, "GiB": 2.0**30, "TiB": 2.0**40}
"""Bytes in each unit of memory."""

COUNT = "[1-9][0-9]{0,8}"
"""Nine digits at most: a thousand million seconds are 31 years."""
FIXED_PATTERN = f"^{COUNT}(?:{'|'.join(UNITS)})$"
LENGTH_PATTERN = f"^{COUNT}(?:{'|'.join((*UNITS, *MEAN))})$"
CADENCE_PATTERN = (
    f"^(?:irregular|(?:{COUNT})?(?:{'|'.join((*UNITS, *MEAN))})"
    "|W-(?:MON|TUE|WED|THU|FRI|SAT|SUN)|[QY][SE]-(?:JAN|FEB|MAR|APR|MAY|JUN|JUL|AUG|SEP|OCT|NOV|DEC))$"
)
WANTED = "a length in time such as 14D, 6h or 90min"
WANTED_CADENCE = "a cadence such as 1h, 15min, D, B, W, MS, QS, YS or irregular"

_OTHER_WORDS = {
    "d": "D", "day": "D", "days": "D", "daily": "D", "H": "h", "hour": "h", "hours": "h", "hourly": "h", "m": "min",
    "T": "min", "minute": "min", "minutes": "min", "w": "W", "week": "W", "weeks": "W", "weekly": "W", "S": "s",
    "sec": "s", "second": "s", "seconds": "s", "M": "MS", "month": "MS", "months": "MS", "monthly": "MS", "Q": "QS",
    "A": "YS", "Y": "YS", "AS": "YS", "year": "YS", "years": "YS", "yearly": "YS", "BM": "MS", "BMS": "MS", "C": "B",
}  # fmt: skip
"""Units of other tongues and of older pandas, for the hint only."""


def seconds(text: str) -> float:
    """Seconds of a length in time; of one in calendar units its mean."""
    if not re.fullmatch(LENGTH_PATTERN, text):
        raise ValueError(WANTED, _unit_hint(text))
    return _mean(text)


def fixed_seconds(text: str) -> float:
    """Seconds of a length in time that has no calendar unit."""
    if not re.fullmatch(FIXED_PATTERN, text):
        raise ValueError(WANTED, _unit_hint(text))
    return _mean(text)


def _mean(text: str) -> float:
    count, unit = re.findall(r"^([0-9]*)([A-Za-z]+)", text)[0]
    return int(count or 1) * {**UNITS, **MEAN}[unit]


def _unit_hint(text: str) -> str:
    found = re.fullmatch(r"([0-9]*) *([A-Za-z]+)(-[A-Za-z]+)?", text.strip())
    unit = found[2] if found else ""
    if unit in _OTHER_WORDS or unit in UNITS or unit in MEAN:
        count = found[1] if found else ""
        return f"Did you mean '{'' if count in ('', '0') else int(count)}{_OTHER_WORDS.get(unit, unit)}'?"
    return f"A whole number and one of the units {', '.join((*UNITS, *MEAN))}."


def cadence(text: str) -> str:
    """Check a cadence: a pandas offset with a count above 0, or ``irregular``."""
    if not re.fullmatch(CADENCE_PATTERN, text):
        close = get_close_matches(text, ["irregular"], n=1)
        raise ValueError(WANTED_CADENCE, f"Did you mean '{close[0]}'?" if close else _unit_hint(text))
    return text


def mean_seconds(text: str) -> float | None:
    """Seconds between two marks of a cadence on average; None for an irregular one."""
    return None if text == "irregular" else _mean(text)


def fixed(text: str) -> bool:
    """A cadence of equal steps (not one of the calendar, and not irregular)."""
    return bool(re.fullmatch(f"(?:{COUNT})?(?:{'|'.join(UNITS)})", text))


def zone(text: str) -> str:
    """Check that a time zone exists."""
    try:
        ZoneInfo(text)
    except (ZoneInfoNotFoundError, ValueError, OSError) as trouble:
        zones = available_timezones()
        close = [name for name in zones if name.lower() == text.lower()] or get_close_matches(text, zones, n=1)
        hint = f"Did you mean '{close[0]}'?" if close else ""
        raise ValueError("an IANA time zone such as Europe/Oslo or UTC", hint) from trouble
    return text


def day(text: str) -> date:
    """A date written as 2026-12-24."""
    wanted = "a date such as 2026-12-24"
    if not re.fullmatch(r"[0-9]{4}-[0-9]{2}-[0-9]{2}", text):
        raise ValueError(wanted, "")
    try:
        return date.fromisoformat(text)
    except ValueError as trouble:
        raise ValueError(wanted, "There is no such day.") from trouble


def memory(text: str) -> float:
    """Bytes of a size such as ``2GB``."""
    found = re.fullmatch(r"([0-9]{1,9}(?:\.[0-9]+)?) ?([A-Za-z]+)", text)
    if not found or found[2] not in SIZES or float(found[1]) <= 0:
        raise ValueError("a size such as 2GB or 500MB", f"The units are {', '.join(SIZES)}.")
    return float(found[1]) * SIZES[found[2]]


def allowed_alarms(text: str) -> tuple[float, str]:
    """Count and period of ``1 per 90D``."""
    found = re.fullmatch(r"([0-9]{1,9}(?:\.[0-9]+)?) per (\S+)", text)
    if not found or float(found[1]) <= 0:
        raise ValueError("a number of false holds in a length of time, such as 1 per 90D", "")
    seconds(found[2])
    return float(found[1]), found[2]
