"""Desks told of what changed: addresses from the environment, messages from the ledger; needs ``brief`` and the store.

Nothing here can change a decision: whatever goes wrong with a desk becomes a sentence, and the message stays in the
ledger for the next run. An address is read from ``SERCHECK_DESK_<NAME>`` and given to the process that sends; it is in
no message, record, error or row.

What is sure and what is not: a message is never lost, for it is stored with the decision and stays until a desk has
taken it. Two runs at once send it once. It is sent a second time, under the same id, only where the first attempt ended
without an answer after the desk's server may have taken it: the process was killed or the time was up in between.
"""

from __future__ import annotations

import json
import os
import re
import subprocess
import sys
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

from sercheck import sending
from sercheck.errors import SercheckError
from sercheck.plain import plain, without_secrets
from sercheck.store.outbox import LATE, Message, claim, due, mark_sent, mark_undelivered, waiting_desks

if TYPE_CHECKING:
    from sercheck.episodes import Changed
    from sercheck.rulebook.compiled import Rulebook
    from sercheck.store.ledger import Ledger

SECONDS = 10.0
"""Time for all desks together (ours: two attempts to connect at the library's four seconds, and what is between)."""
AT_ONCE = 4
"""Desks told at the same time."""
SUBJECT = 120
"""Letters of a subject: what a telephone shows of it, twice over."""
CHANGES = {
    "opened": "fails since this batch",
    "worse": "is clearly worse than when it was told",
    "spread": "fails in many more series than when it was told",
    "closed": "passes again",
    "gone": "is no longer asked",
}

Send = Callable[[str, str, str, str, float], str]
"""Address, title, body, id of the message and seconds to one of ``sending.WORDS``, or another word in trouble."""


def setting(desk: str) -> str:
    """The environment variable that holds the address of a desk."""
    return "SERCHECK_DESK_" + re.sub(r"[^A-Z0-9]", "_", desk.upper())


def desks_of(book: Rulebook) -> dict[str, tuple[str, ...]]:
    """The desks of each rule; one that only notes tells no desk but such as it names itself, other than the file's."""
    return {rule.name: () if rule.otherwise == "note" and rule.tell == book.tell else rule.tell for rule in book.rules}


def tell(
    ledger: Ledger, batch_id: str, store: str = "", *, seconds: float = SECONDS, send: Send | None = None
) -> tuple[str, ...]:
    """Send what waits: the messages of this batch, and those of earlier ones whose desks have an address here.

    Args:
        ledger: where the messages are kept.
        batch_id: the batch that was judged just now.
        store: the store's folder as it must be named in the commands of a brief.
        seconds: time for all of it.
        send: sends one message; default a process of its own.

    Returns:
        A sentence for each desk that could not be told. Never an error: the decision stands.
    """
    try:
        waiting = waiting_desks(ledger)
        if not waiting:
            return ()
        until = time.monotonic() + seconds
        addresses = {desk: os.environ.get(setting(desk), "").strip() for desk in waiting}
        reachable = [desk for desk, address in addresses.items() if address]
        by_desk: dict[str, list[Message]] = {}
        for message in due(ledger, datetime.now(UTC), reachable, batch_id):
            by_desk.setdefault(message.desk, []).append(message)
        texts = _Texts(ledger, store)
        if not by_desk:
            return ()
        one = _Desk(ledger, texts, send or send_apart, until)
        with ThreadPoolExecutor(min(AT_ONCE, len(by_desk))) as pool:
            said = pool.map(one.tell, (addresses[desk] for desk in by_desk), by_desk.values())
            return tuple(sentence for sentence in said if sentence)
    except SercheckError as trouble:
        return (f"desks were not told: {trouble.sentence()}",)


class _Desk:
    """Tells one desk after the other; what they share."""

    def __init__(self, ledger: Ledger, texts: _Texts, send: Send, until: float) -> None:
        self._ledger, self._texts, self._send, self._until = ledger, texts, send, until

    def tell(self, address: str, messages: list[Message]) -> str:
        """Send messages, the oldest first, until one fails; a sentence about what was not sent, or nothing."""
        try:
            for place, message in enumerate(messages):
                trouble = self._one(address, message)
                if trouble:
                    left = len(messages) - place
                    many = "" if left == 1 else f" of {left} messages"
                    return f"desk {message.desk} was not told{many}: {trouble}"
        except SercheckError as trouble:
            return f"desk {messages[0].desk} may not have been told: {trouble.sentence()}"
        return ""

    def _one(self, address: str, message: Message) -> str:
        """Claim, send, mark; why it was not sent, or nothing."""
        left = self._until - time.monotonic()
        if left <= 0:
            return "the time for telling was up; the next run goes on"
        subject, body = self._texts.of(message)
        now = datetime.now(UTC)
        if not claim(self._ledger, message, now):
            return ""
        word = self._word(address, subject, body, message.message_id, left)
        if word == "sent":
            mark_sent(self._ledger, message, datetime.now(UTC))
            return ""
        trouble = _said(word, message.desk, left)
        later = mark_undelivered(self._ledger, message, datetime.now(UTC), trouble)
        return f"{trouble}; the message is kept and tried again by the first run after {later:%Y-%m-%d %H:%M} UTC"

    def _word(self, address: str, subject: str, body: str, message_id: str, left: float) -> str:
        if not address:
            return "unset"
        if not sending.installed():
            return "missing"
        return self._send(address, subject, body, message_id, left)


def send_apart(address: str, title: str, body: str, message_id: str, seconds: float) -> str:
    """Send in a process of its own, which is ended when the time is up; one of ``sending.WORDS``, or what happened."""
    asked = json.dumps(
        {"address": address, "title": title, "body": body, "message_id": message_id, "parent": os.getpid()}
    )
    root = str(Path(__file__).parent.parent)
    paths = os.pathsep.join(filter(None, (root, os.environ.get("PYTHONPATH"))))
    call = [sys.executable, "-P", "-m", "sercheck.sending"]
    try:
        done = subprocess.run(  # noqa: S603  our own program; what it is to do comes by stdin
            call, input=asked.encode(), stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, timeout=seconds,
            check=False, env={**os.environ, "PYTHONPATH": paths},
        )  # fmt: skip
    except subprocess.TimeoutExpired:
        return "late"
    except OSError:
        return "broken"
    word = done.stdout.decode("ascii", "replace")
    known = re.fullmatch(rf"(?:{'|'.join(sending.WORDS)})(?: [1-5]\d\d)?", word)
    return word if known and done.returncode == 0 else "broken"


def _said(word: str, desk: str, seconds: float) -> str:
    """Why a desk was not told, in words of our own: what the library or a server says may hold an address."""
    kind, _, status = word.partition(" ")
    name = setting(desk)
    return {
        "unset": f"{name} is not set",
        "missing": "the notification library is not installed (pip install 'sercheck[notify]')",
        "unread": f"the address in {name} cannot be read (wanted such as mailto://… or json://…)",
        "unreachable": "its server could not be reached",
        "refused": f"its server answered with status {status}" if status else "its server did not take the message",
        "late": f"{LATE} within {max(seconds, 0.1):.1f} s",
    }.get(kind, "the process that sends ended without an answer")


class _Texts:
    """Subjects and bodies; the brief of a batch is made once for all desks."""

    def __init__(self, ledger: Ledger, store: str) -> None:
        self._ledger, self._store = ledger, store
        self._known: dict[str, tuple[str, str, str]] = {}

    def of(self, message: Message) -> tuple[str, str]:
        """Subject and body of a message."""
        if message.batch_id not in self._known:
            self._known[message.batch_id] = self._of_batch(message.batch_id)
        decision, cause, brief = self._known[message.batch_id]
        lines = [f"{CHANGES[each.change]}: {plain(each.rule)}{self._episode(each)}" for each in message.changes]
        if message.uncertain:
            lines.append("An earlier attempt ended without an answer: you may have this message already.")
        body = "\n".join([*lines, "", brief, "", f"message {message.message_id}"])
        return _subject(message, decision, cause), without_secrets(body)

    def _episode(self, change: Changed) -> str:
        """Since when, on how many batches and series; nothing of an episode that another has taken in meanwhile."""
        from sercheck.store.episodes import episode
        from sercheck.store.ids import UnknownIdError

        try:
            found = episode(self._ledger, change.episode_id)
        except UnknownIdError:
            return ""
        return f" (since {found.started}, batches: {found.batches}, series: {found.series})"

    def _of_batch(self, batch_id: str) -> tuple[str, str, str]:
        """Decision, likely cause and brief of a batch."""
        from sercheck.brief.case import case_of
        from sercheck.brief.digest import digest
        from sercheck.brief.surfaces import shown

        batch = self._ledger.batch(batch_id)
        brief = digest(case_of(self._ledger, batch, self._store))
        cause = brief.causes[0].what if brief.causes else ""
        return batch.last.decision, cause, shown(brief, "text")


def _subject(message: Message, decision: str, cause: str) -> str:
    """Decision, feed, what changed and the likely cause; for an episode that closes the rule that passes again."""
    changes = {each.change: each.rule for each in reversed(message.changes)}
    bad = [name for name in ("opened", "spread", "worse") if name in changes]
    if not bad:
        more = len(message.changes) - 1
        word, rule = next((word, rule) for word, rule in changes.items() if word in ("closed", "gone"))
        said = f"closed: {rule} {CHANGES[word]}" + (f" and {more} more" if more else "")
    else:
        said = cause or changes[bad[0]]
        said = said if bad[0] == "opened" else f"{'spreads' if bad[0] == 'spread' else 'worse'}: {said}"
    return plain(without_secrets(f"{decision.upper()} {message.feed}: {said}"), SUBJECT)
