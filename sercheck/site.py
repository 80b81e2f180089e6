"""A folder of pages for all feeds: a front page, a page a feed, a page a batch; depends on ``brief`` and the store.

What a page says comes from the ledger alone. Beside the pages lies a list of what each was made from: a page whose
list is unchanged is neither drawn nor written, so that a second run asks the ledger and writes nothing.
"""

from __future__ import annotations

import json
import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from hashlib import blake2b
from pathlib import Path
from typing import TYPE_CHECKING

from sercheck import __version__
from sercheck.brief.case import LAST, case_of
from sercheck.brief.digest import digest, mark_of
from sercheck.brief.html import page
from sercheck.brief.rulefile import read_rule_file
from sercheck.brief.view import Mark
from sercheck.brief.words import moment, name, prose, stretch, zone_of
from sercheck.outputs import make_folder, write_text
from sercheck.page import fingerprint, render
from sercheck.store.episodes import open_episodes
from sercheck.store.ledger import open_ledger

if TYPE_CHECKING:
    from zoneinfo import ZoneInfo

    from sercheck.store.ledger import Ledger
    from sercheck.store.rows import JudgedBatch

LIST = "pages.json"
ON_A_PAGE = 400
"""Batches listed on a feed's page, the newest; older ones keep their pages."""
_SAFE = re.compile(r"[A-Za-z0-9_][A-Za-z0-9_.-]{0,150}")


@dataclass(frozen=True)
class Done:
    """Pages that were written, and that were left as they were."""

    written: int
    kept: int


@dataclass(frozen=True)
class Row:
    """A batch in a list: its mark, the link to its page, when it was, and how much of it failed."""

    mark: Mark
    link: str
    stretch: str
    judged_at: str


@dataclass(frozen=True)
class FeedView:
    """A feed on the front page and on its own: the newest batch's state, and the batches, the newest first."""

    feed: str
    about: str
    zone: str
    link: str
    rows: tuple[Row, ...]
    more: int
    open: tuple[tuple[str, str, int], ...]

    @property
    def state(self) -> str:
        """That of the newest batch."""
        return self.rows[0].mark.state

    @property
    def last(self) -> tuple[Row, ...]:
        """The last thirty, the oldest first."""
        return self.rows[:LAST][::-1]


def write_site(folder: str | Path, store: str | Path | None = None, ledger: str | None = None) -> Done:
    """Write the pages of everything in a ledger, each whole or not at all.

    Args:
        folder: made if need be; its parent must be there. Files that are not ours are left alone.
        store: the store's folder, or the ledger's URL.
        ledger: SQLAlchemy URL of the ledger, where it is not in the store.

    Raises:
        OutputError: the folder cannot be written.
        StoreError: the ledger cannot be read.
    """
    site = _Site(Path(folder), "" if store is None or "://" in str(store) else str(store))
    with open_ledger(None if store is None else str(store), ledger) as kept_in:
        feeds: dict[str, list[JudgedBatch]] = {}
        for batch in kept_in.batches():
            feeds.setdefault(batch.batch.feed, []).append(batch)
        views = [_feed(site, kept_in, feed, batches) for feed, batches in feeds.items()]
        place = prose(kept_in.place)
    views.sort(key=lambda view: (view.state != "held", view.feed.casefold()))
    site.put("index.html", [place, *(repr(view) for view in views)], lambda: _front(views, place))
    return site.close()


class _Site:
    """The folder, and from what each page in it was made."""

    def __init__(self, folder: Path, store: str) -> None:
        self._folder, self.store = folder, store
        for each in (folder, folder / "feeds", folder / "batches"):
            make_folder(each)
        self._before = _read_list(folder / LIST)
        self._now: dict[str, str] = {}
        self.written = 0

    def stale(self, file: str, made_from: Sequence[str]) -> bool:
        """The page must be made: it is not there, or was made from something else."""
        return self._before.get(file) != _key(made_from) or not (self._folder / file).is_file()

    def put(self, file: str, made_from: Sequence[str], make: Callable[[], str]) -> None:
        """Write a page where it must be made."""
        if self.stale(file, made_from):
            write_text(self._folder / file, make())
            self.written += 1
        self._now[file] = _key(made_from)

    def close(self) -> Done:
        """Take away pages of batches that the ledger has no more, and keep the list."""
        for file in set(self._before) - set(self._now):
            if re.fullmatch(r"(?:feeds|batches)/[^/]+\.html", file):
                (self._folder / file).unlink(missing_ok=True)
        if self._now != self._before:
            write_text(self._folder / LIST, json.dumps(self._now, indent=0, sort_keys=True))
        return Done(self.written, len(self._now) - self.written)


def _read_list(file: Path) -> dict[str, str]:
    """What the last run made; nothing where there is no list that can be read: all pages are made anew then."""
    try:
        read = json.loads(file.read_bytes())
    except (OSError, ValueError):
        return {}
    return {str(page): str(key) for page, key in read.items()} if isinstance(read, dict) else {}


def _key(made_from: Sequence[str]) -> str:
    parts = json.dumps([__version__, fingerprint(), *made_from])
    return blake2b(parts.encode("utf-8", "replace"), digest_size=16).hexdigest()


def _feed(site: _Site, ledger: Ledger, feed: str, batches: Sequence[JudgedBatch]) -> FeedView:
    """Write the pages of a feed's batches and its own; ``batches`` are the newest first."""
    said = read_rule_file(batches[0].last.rules)
    zone = zone_of(said.timezone)
    link = f"feeds/{_file(feed)}"
    way = (("All feeds", "../index.html"), (name(feed), f"../{link}"))
    for place, batch in enumerate(batches):
        earlier = tuple(batches[place + 1 : place + 1 + LAST])
        file = f"batches/{_file(batch.batch.batch_id)}"
        made_from = [*_told(batch), *(text for each in earlier for text in _told(each))]
        site.put(file, [site.store, *made_from], partial(_batch, site, ledger, batch, earlier, way))
    episodes = tuple(
        (name(each.rule), moment(each.started, zone), each.batches) for each in open_episodes(ledger, feed)[:LAST]
    )
    rows = tuple(_row(batch, zone) for batch in batches[:ON_A_PAGE])
    more = max(len(batches) - ON_A_PAGE, 0)
    view = FeedView(name(feed), prose(said.about), name(said.timezone), link, rows, more, episodes)
    site.put(link, [repr(view)], lambda: render("feed.html", feed=view, up="../", way=way[:1]))
    return view


def _batch(
    site: _Site, ledger: Ledger, batch: JudgedBatch, earlier: tuple[JudgedBatch, ...], way: Sequence[tuple[str, str]]
) -> str:
    return page(digest(case_of(ledger, batch, site.store, earlier)), way)


def _told(batch: JudgedBatch) -> list[str]:
    """What of a batch its own page and those of later batches depend on."""
    judged = [each.judgement_id for each in batch.judgements]
    return [batch.batch.batch_id, *judged, *(each.settlement_id for each in batch.settlements), *batch.batch.received]


def _row(batch: JudgedBatch, zone: ZoneInfo) -> Row:
    return Row(
        mark_of(batch, zone), f"batches/{_file(batch.batch.batch_id)}",
        stretch(batch.batch.first_stamp, batch.batch.last_stamp, zone), moment(batch.last.judged_at, zone),
    )  # fmt: skip


def _front(views: Sequence[FeedView], place: str) -> str:
    return render("front.html", feeds=views, place=place, up="")


def _file(text: str) -> str:
    """A file name that every server and file system takes, no two texts alike."""
    if _SAFE.fullmatch(text):
        return f"{text}.html"
    slug = re.sub(r"[^A-Za-z0-9_]+", "_", text)[:60].strip("_")
    return f"{slug}-{blake2b(text.encode('utf-8', 'replace'), digest_size=6).hexdigest()}.html"
