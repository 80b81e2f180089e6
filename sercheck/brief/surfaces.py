"""A brief, or the digest of all feeds, in one of its formats; depends on the formats' own files."""

from __future__ import annotations

import json
import re

from sercheck.brief import review, text
from sercheck.brief.review import Review
from sercheck.brief.view import Brief

_HIDDEN = re.compile("[\x7f-\x9f\u061c\u200b-\u200f\u2028-\u202e\u2060-\u2069\ufeff]")
"""What a terminal would obey or hide when a program's output is looked at."""


def shown(told: Brief | Review, form: str) -> str:
    """As ``text``, ``markdown``, ``json`` (one object on one line) or ``html``."""
    if form == "html":
        return _page(told)
    if isinstance(told, Review):
        surfaces = {"markdown": review.markdown, "text": review.text}
        return json_line(review.plain_data(told)) if form == "json" else surfaces[form](told)
    forms = {"markdown": text.markdown, "text": text.text}
    return json_line(text.plain_data(told)) if form == "json" else forms[form](told)


def _page(told: Brief | Review) -> str:
    if isinstance(told, Review):
        return review.page(told)
    from sercheck.brief.html import page

    return page(told)


def json_line(told: object) -> str:
    """Plain data as JSON on one line, readable beyond ASCII."""
    line = json.dumps(told, ensure_ascii=False, allow_nan=False)
    return _HIDDEN.sub(lambda found: f"\\u{ord(found[0]):04x}", line)
