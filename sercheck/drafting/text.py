"""A draft as the text of a rule file, every rule with the reason of its bound; depends on ``plain`` and the entries."""

from __future__ import annotations

import json
import re
import textwrap
from collections.abc import Sequence

from sercheck.drafting.entry import Entry, LeftOut
from sercheck.drafting.shape import Shape
from sercheck.plain import plain

WIDTH = 116
"""Columns of a line at most."""
BARE = re.compile(r"[A-Za-z_]([A-Za-z0-9_ /.()'-]*[A-Za-z0-9_)])?")
"""Names that YAML reads as they stand, in a list too."""
PROSE = re.compile(r"[A-Za-z_][A-Za-z0-9_ /.,;()'-]*[A-Za-z0-9_.)]")
"""Sentences that YAML reads as they stand after a key."""
VERBATIM = "    "
"""Begins a paragraph that is not broken into lines: a command."""
RESERVED = {"true", "false", "yes", "no", "on", "off", "null", "y", "n"}


def written(
    shape: Shape, budget: str | None, head: Sequence[str], entries: Sequence[Entry], left: Sequence[LeftOut],
    hints: Sequence[str],
) -> str:  # fmt: skip
    """The rule file.

    Args:
        shape: the feed.
        budget: its alarm budget; None for a risk by rule.
        head: paragraphs of its first comment.
        entries: its rules.
        left: what was left out.
        hints: paragraphs below the keys of the file: what a person may want to add.
    """
    lines: list[str] = []
    for paragraph in head:
        lines += [*comment(paragraph), "#"]
    if left:
        lines += ["# Left out:"]
        for one in left:
            lines += comment(f"- {one.name}: {one.reason}.", "#   ", "#     ")
        lines.append("#")
    lines = [*lines[:-1], "", *_keys(shape, budget), ""]
    lines += [f"# {plain(hint, 1000)}" for hint in hints]
    if hints:
        lines.append("")
    lines.append("rules:")
    for entry in entries:
        lines += [*_rule(entry, shape, weights=budget is not None and shape.batch_every is not None), ""]
    return "\n".join(lines[:-1]) + "\n"


def comment(text: str, first: str = "# ", rest: str = "# ") -> list[str]:
    """A paragraph of a comment."""
    if text.startswith(VERBATIM):
        return [first + "  " + plain(text.strip(), 4000)]
    shown = plain(" ".join(text.split()), 4000)
    return textwrap.wrap(shown, WIDTH, initial_indent=first, subsequent_indent=rest, break_on_hyphens=False)


def quoted(text: str) -> str:
    """A text as YAML."""
    if BARE.fullmatch(text) and text.lower() not in RESERVED:
        return text
    return json.dumps(text, ensure_ascii=not text.isprintable())


def _prose(text: str) -> str:
    return text if PROSE.fullmatch(text) and text.lower() not in RESERVED else quoted(text)


def _list(names: Sequence[str]) -> str:
    return f"[{', '.join(quoted(name) for name in names)}]"


def _keys(shape: Shape, budget: str | None) -> list[str]:
    layout = shape.layout
    lines = [f"feed: {quoted(shape.feed)}", "columns:"]
    lines.append(f"  time: {quoted(layout.time)}")
    if layout.series:
        lines.append(f"  series: {quoted(layout.series[0]) if len(layout.series) == 1 else _list(layout.series)}")
    lines += [f"  values: {_list(layout.values)}", f"every: {layout.every}"]
    if layout.timezone != "UTC":
        lines.append(f"timezone: {quoted(layout.timezone)}")
    if shape.clock:
        lines.append(f"season_clock: {shape.clock}  # its clock changes move the daily cycle, and not the stamps")
    if shape.seasons:
        lines.append(f"seasons: {{{', '.join(f'{name}: {length}' for name, length in shape.seasons.items())}}}")
    if shape.batch_every and budget:
        lines += [f"batch_every: {shape.batch_every}", f"false_holds: {budget}"]
    else:
        lines.append("false_alarm: 0.001               # of each rule, for one batch; the smallest measured closely")
    return lines


def _rule(entry: Entry, shape: Shape, *, weights: bool) -> list[str]:
    lines = [line for why in entry.why for line in comment(why, "  # ", "  # ")]
    lines.append(f"  - name: {_prose(entry.name)}")
    if entry.columns and entry.columns != shape.layout.values:
        names = entry.columns
        lines.append(f"    of: {quoted(names[0]) if len(names) == 1 else _list(names)}")
    lines += [f"    {key}: {value}" for key, value in entry.fields if weights or key != "weight"]
    if entry.otherwise == "note":
        lines.append("    otherwise: note")
    return [*lines, f"    about: {_prose(entry.about)}"]
