"""One message to one desk, in a process of its own that can be ended: ``python -m sercheck.sending``.

The process reads one JSON object from stdin (``address``, ``title``, ``body``, ``message_id``, ``parent``) and writes
one word of ``WORDS`` to stdout, ``refused`` perhaps with the status that the desk's server gave. Nothing else leaves
it: the library's logs and whatever it prints end here, so that no address can reach a log of ours, and a server that
never ends its answer is left by ending the process. Where the process that asked has died meanwhile nothing is sent:
the next run will.
"""

from __future__ import annotations

import json
import logging
import os
import re
import sys
from contextlib import redirect_stderr, redirect_stdout
from importlib.util import find_spec
from io import StringIO
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from apprise import Apprise

LIBRARY = "apprise"
WORDS = ("sent", "refused", "unreachable", "unread")
"""``unread``: the library cannot read the address. Anything else, or nothing, means that the process broke."""
_STATUS = re.compile(r"error[ =:]{1,2}([1-5]\d\d)\b")
_HOOKS = ("json://", "jsons://", "form://", "forms://", "xml://", "xmls://")


def installed() -> bool:
    """The library is there."""
    return find_spec(LIBRARY) is not None


def main() -> None:
    """Send what stdin asks for and say how it ended."""
    asked = json.loads(sys.stdin.buffer.read())
    answer = sys.stdout
    with Path(os.devnull).open("w", encoding="utf-8") as nowhere, redirect_stdout(nowhere), redirect_stderr(nowhere):
        orphan = asked.pop("parent") != os.getppid()
        word = "" if orphan else send(**asked)
    answer.write(word)
    answer.flush()


def send(address: str, title: str, body: str, message_id: str) -> str:
    """Send one message; one of ``WORDS``."""
    log = StringIO()
    logger = logging.getLogger(LIBRARY)
    logger.propagate = False
    logger.handlers = [logging.StreamHandler(log)]
    sender = _sender(address, message_id)
    if sender is None:
        return "unread"
    if sender.notify(title=title, body=body, body_format="text"):
        return "sent"
    status = _STATUS.search(log.getvalue())
    if status:
        return f"refused {status[1]}"
    return "unreachable" if re.search(r"(?i)connection", log.getvalue()) else "refused"


def _sender(address: str, message_id: str) -> Apprise | None:
    """The channel that the address names; None when the library cannot read it.

    The message's id goes with it as a header, and to a web hook as a field too: a receiver can tell by it that it has
    the message already.
    """
    from apprise import Apprise, AppriseAsset

    plain: Any = {"app_id": "sercheck", "interpret_escapes": False, "interpret_emojis": False, "async_mode": False}
    asset = AppriseAsset(**plain)
    channel = Apprise.instantiate(_marked(address.strip(), message_id), asset=asset)
    if channel is None:
        return None
    if "format=" not in address:
        channel.notify_format = "text"  # type: ignore[assignment]  # the library takes the word for its own constant
    sender = Apprise(asset=asset)
    return sender if sender.add(channel) else None


def _marked(address: str, message_id: str) -> str:
    """The address with the message's id, on the channels that carry headers or fields of one's own."""
    scheme = address.partition("://")[0].lower()
    extra = []
    if scheme in {"mailto", "mailtos"} or address.lower().startswith(_HOOKS):
        extra.append(f"+X-Sercheck-Message={message_id}")
    if address.lower().startswith(_HOOKS):
        extra += [f"+Idempotency-Key={message_id}", f":message_id={message_id}"]
    if not extra:
        return address
    return f"{address}{'&' if '?' in address else '?'}{'&'.join(extra)}"


if __name__ == "__main__":
    main()
