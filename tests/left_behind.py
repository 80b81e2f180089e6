"""All that a command leaves in its working folder and its ledger, without clocks, for comparing two runs."""

from __future__ import annotations

import json
import re
import sqlite3
from hashlib import blake2b
from pathlib import Path
from typing import Any

FILE = "store/ledger.sqlite"
"""Where a ledger in a file lies."""
CLOCKS = {
    "stored_at", "applied_at", "learned_at", "settled_at", "made_at", "sent_at", "claimed_at", "claimed_by", "next_at",
    "received_at", "opened_at", "attempts", "settlement_id", "episode_id", "message_id", "changes", "told_at",
}  # fmt: skip
"""Columns of the ledger that tell when and by whom, or ids made of that."""


def state(folder: Path, url: str | None) -> dict[str, Any]:
    """All that a command leaves, without clocks."""
    found: dict[str, Any] = {}
    for path in sorted(folder.rglob("*")):
        name = str(path.relative_to(folder))
        if path.is_dir() or name.startswith(FILE) or "/log/." in name:  # the draft of an entry at a URL is nothing
            continue
        if "/log/" in name and path.suffix == ".json":
            entry = json.loads(path.read_text())
            states = found.setdefault(f"log of {Path(name).parents[1]}", {})
            states[entry["batch_id"]] = {**states.get(entry["batch_id"], {}), **entry, "number": None}
        else:
            found[name] = blake2b(_without_clock(path), digest_size=8).hexdigest()
    told = folder.parent / "told.txt"
    found["told"] = len(set(told.read_text().split())) if told.exists() else 0
    return found | {f"table {name}": rows for name, rows in tables(folder, url).items()}


def _without_clock(path: Path) -> bytes:
    if path.suffix != ".html":
        return path.read_bytes()
    page = re.sub(r"(?s)<style.*?</style>|<[^>]*>", " ", path.read_text(encoding="utf-8"))
    again = r"(Notes\s+)?this batch was judged by these rules before, at .*? stands"  # what only a repeat says
    page = re.sub(again, "", page)
    page = re.sub(r"\d{4}-\d\d-\d\d[T ]\d\d:\d\d(:\d\d(\.\d+)?)?Z?|[0-9a-f]{12,}", "", page)
    return " ".join(page.split()).encode()


def tables(folder: Path, url: str | None) -> dict[str, list[str]]:
    """The ledger's rows as sorted text."""
    if url is None:
        file = folder / FILE
        if not file.exists():
            return {}
        kept: Any = sqlite3.connect(file)
        kept.row_factory = sqlite3.Row
        assert kept.execute("PRAGMA integrity_check").fetchone()[0] == "ok"
        names = [row[0] for row in kept.execute("SELECT name FROM sqlite_master WHERE type = 'table'")]
    else:
        import psycopg
        from psycopg.rows import dict_row

        kept = psycopg.connect(url.replace("+psycopg", ""), row_factory=dict_row)  # type: ignore[arg-type]
        names = [row["tablename"] for row in kept.execute("SELECT tablename FROM pg_tables WHERE schemaname='public'")]
    found = {}
    for name in sorted(names):
        rows = [dict(row) for row in kept.execute(f'SELECT * FROM "{name}"')]
        plain = [{key: _plain(value) for key, value in row.items() if key not in CLOCKS} for row in rows]
        found[name] = sorted(json.dumps(row, sort_keys=True) for row in plain)
    kept.close()
    return found


def _plain(value: Any) -> Any:
    return len(bytes(value)) if isinstance(value, bytes | memoryview) else value
