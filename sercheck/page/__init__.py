"""Pages: one base template and style sheet, and how a template becomes one self-contained HTML text; needs Jinja2."""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from jinja2 import Environment


def render(template: str, **values: object) -> str:
    """A template of this folder filled in; every text is escaped unless it is an ``svg.Drawing``.

    The style sheet is written into the page: it needs no other file and no network.
    """
    return _environment().get_template(template).render(**values)


@cache
def fingerprint() -> str:
    """A hash of the templates and the style sheet: other pages come of others."""
    from hashlib import blake2b
    from importlib.resources import files

    parts = sorted((each.name, each.read_bytes()) for each in files("sercheck.page").iterdir() if each.is_file())
    return blake2b(b"".join(content for _, content in parts), digest_size=8).hexdigest()


@cache
def _environment() -> Environment:
    from jinja2 import Environment, PackageLoader, StrictUndefined

    environment = Environment(
        loader=PackageLoader("sercheck", "page"), autoescape=True, undefined=StrictUndefined,
        trim_blocks=True, lstrip_blocks=True,
    )  # fmt: skip
    environment.filters["count"] = lambda number: f"{number:,}"
    return environment
