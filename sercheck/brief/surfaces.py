"""A brief in one of its formats; depends on the formats' own files."""

from __future__ import annotations

import json
import re

from sercheck.brief.text import markdown, plain_data, text
from sercheck.brief.view import Brief

_HIDDEN = re.compile("[\x7f-\x9f\u061c\u200b-\u200f\u2028-\u202e\u2060-\u2069\ufeff]")
"""What a terminal would obey or hide when a program's output is looked at."""


def shown(brief: Brief, form: str) -> str:
    """The brief as ``text``, ``markdown``, ``json`` (one object on one line) or ``html``."""
    match form:
        case "markdown":
            return markdown(brief)
        case "json":
            return json_line(plain_data(brief))
        case "html":
            from sercheck.brief.html import page

            return page(brief)
        case _:
            return text(brief)


def json_line(told: object) -> str:
    """Plain data as JSON on one line, readable beyond ASCII."""
    line = json.dumps(told, ensure_ascii=False, allow_nan=False)
    return _HIDDEN.sub(lambda found: f"\\u{ord(found[0]):04x}", line)
