"""Text from outside made safe to show: one line, no control characters, no secrets, not endless.

Imports nothing of ours.
"""

from __future__ import annotations

import os
import re
from functools import lru_cache

HIDDEN = "\N{REPLACEMENT CHARACTER}"
BLANK = "•••"
"""Stands for a secret."""
_CREDENTIALS = re.compile(r"(?<=://)[^/\s@]*@")
_SIGNED = re.compile(r"(?i)(?<=[?&;])((?:[\w-]*(?:token|signature|secret|password|passwd|key|sig|pwd))=)[^&\s;#]+")
PLACES = ("SERCHECK_DESK_", "SERCHECK_SOURCE_", "SERCHECK_LEDGER")
"""Settings of the environment that may hold a password or are one."""


def plain(text: str, most: int = 200) -> str:
    """At most ``most`` letters; a control, a mark of writing direction or a line break becomes ``U+FFFD``."""
    shown = "".join(c if c.isprintable() else HIDDEN for c in text[: most + 1])
    return shown if len(shown) <= most else shown[: most - 1] + "…"


def without_secrets(text: str) -> str:
    """The text without user and password of a URL, without signed parts of its query, and without what the environment
    keeps for desks, sources and the ledger.
    """
    for secret in _secrets(tuple(value for name, value in os.environ.items() if name.startswith(PLACES))):
        text = text.replace(secret, BLANK)
    if "://" not in text:
        return text
    return _SIGNED.sub(rf"\g<1>{BLANK}", _CREDENTIALS.sub(f"{BLANK}@", text))


@lru_cache(maxsize=8)
def _secrets(values: tuple[str, ...]) -> tuple[str, ...]:
    """The settings and the passwords in them, the longest first; what is too short to be one would blot out words."""
    passwords = [found[1] for value in values for found in re.finditer(r"://[^/\s@:]*:([^/\s@]+)@", value)]
    return tuple(sorted({each for each in (*values, *passwords) if len(each) >= 6}, key=len, reverse=True))
