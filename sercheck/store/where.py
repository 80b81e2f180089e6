"""Where a store lies: a folder, the URL of objects, or the URL of a database; depends on ``errors``."""

from __future__ import annotations

import os
import re
from pathlib import Path
from urllib.parse import unquote

from sercheck.errors import StoreError

DEFAULT_STORE = ".sercheck"
LOCAL = ("file", "local")
"""Schemes of URLs that are folders of this machine."""


def ledger_place(store: str | None, url: str | None, file: str) -> tuple[str | None, Path | None]:
    """The ledger's URL, or the path of its ``file`` in the store's folder.

    The first that is given: ``url``, a store that is the URL of a database, ``SERCHECK_LEDGER``, the store's folder.
    A ``store`` that is not given is that of ``SERCHECK_STORE``, else ``.sercheck``.

    Raises:
        StoreError: the store is a place for objects, where no database can lie, and no other place is given.
    """
    named = _named(store)
    url = url or (named if _is_database(named) else None) or os.environ.get("SERCHECK_LEDGER")
    if url:
        return url, None
    root = _root(named)
    if isinstance(root, Path):
        return None, root / file
    raise StoreError(
        without_password(root), "a store of objects has no room for the ledger, which is a database",
        "SERCHECK_LEDGER, an SQLAlchemy URL such as postgresql+psycopg://host/database or sqlite:////var/ledger.db",
        "Set it, or name a folder as the store.",
    )  # fmt: skip


def archive_place(store: str | Path | None) -> Path | str:
    """The folder of the archive, or its URL where the store is a place for objects.

    Beside a store that is the URL of a database, the archive lies in the default folder.
    """
    named = _named(None if store is None else str(store))
    root = Path(DEFAULT_STORE) if _is_database(named) else _root(named)
    return root / "archive" if isinstance(root, Path) else f"{root.rstrip('/')}/archive"


def without_password(url: str) -> str:
    """The URL as it may be shown."""
    return re.sub(r"//[^/@]*@", "//***@", url)


def _named(store: str | None) -> str:
    return store or os.environ.get("SERCHECK_STORE") or DEFAULT_STORE


def _root(named: str) -> Path | str:
    scheme, sign, path = named.partition("://")
    if not sign:
        return Path(named)
    return Path(unquote(path.removeprefix("localhost"))) if scheme in LOCAL else named


def _is_database(named: str) -> bool:
    """A URL of a kind that SQLAlchemy knows, or one without a kind."""
    scheme, sign, _ = named.partition("://")
    if not sign or scheme in LOCAL:
        return False
    kind = scheme.partition("+")[0]
    if not kind:
        return True
    from sqlalchemy.dialects import registry
    from sqlalchemy.exc import NoSuchModuleError

    try:
        registry.load(kind)
    except NoSuchModuleError:
        return False
    except ImportError:  # known, and what it needs is not there: opening it says so
        return True
    return True
