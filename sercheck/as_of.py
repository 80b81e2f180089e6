"""The clock that a batch is judged by; depends on ``errors``."""

from __future__ import annotations

import time
from datetime import UTC, datetime, timedelta

from sercheck.errors import UsageError

EARLIEST, LATEST = 1678, 2261
"""Whole years that nanoseconds since 1970 reach in 64 bits."""


def clock(as_of: str | None) -> int:
    """The time to judge by as nanoseconds since 1970 UTC."""
    if as_of is None:
        return time.time_ns()
    wanted = "a time such as 2026-01-20T06:00:00Z"
    try:
        stamp = datetime.fromisoformat(as_of)
        utc = stamp.replace(tzinfo=UTC) if stamp.tzinfo is None else stamp.astimezone(UTC)
    except (TypeError, ValueError, OverflowError) as trouble:
        raise UsageError("--as-of", f"'{as_of}' is no time", wanted) from trouble
    if not EARLIEST <= utc.year <= LATEST:
        raise UsageError("--as-of", f"the year {utc.year}", f"{wanted}, in the years {EARLIEST} to {LATEST}")
    return (utc - datetime(1970, 1, 1, tzinfo=UTC)) // timedelta(microseconds=1) * 1000
