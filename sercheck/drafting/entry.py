"""One rule of a draft, and what it was left out for; depends on nothing of ours."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal


@dataclass(frozen=True)
class Entry:
    """One rule.

    Attributes:
        name: its name in the file.
        fields: its keys and values as YAML, in order, but those below.
        about: for the person on call.
        columns: the value columns it looks at; empty for a rule of the clock.
        why: sentences of its comment: what it is for, and the figure its bound came from.
        otherwise: hold or note.
        like_history: its bound is history's, so it can be too strict or too weak for the feed.
        exact: its bound is a number that needs no sampling error, so it takes no share worth speaking of.
    """

    name: str
    fields: tuple[tuple[str, str], ...]
    about: str
    columns: tuple[str, ...] = ()
    why: tuple[str, ...] = ()
    otherwise: Literal["hold", "note"] = "hold"
    like_history: bool = True
    exact: bool = False


@dataclass(frozen=True)
class LeftOut:
    """A rule that could have been there, and why it is not."""

    name: str
    reason: str
