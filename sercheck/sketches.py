"""What a person looks at when a rule failed, as plain numbers that can be kept and drawn; imports nothing of ours."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import asdict, dataclass, fields
from typing import Any, Literal

Kind = Literal["stretch", "correlogram", "course"]
Numbers = tuple[float | None, ...]


@dataclass(frozen=True)
class Sketch:
    """One picture of one rule on one series.

    Attributes:
        kind: ``stretch`` (values in time over history's band), ``correlogram`` (coefficients by lag over history's
            band) or ``course`` (the measure over the last batches).
        rule: name of the rule.
        column: value column, or None.
        series: key of the series; None for one verdict on all.
        x: seconds since 1970 UTC, lags, or 0 for the judged batch and -1, -2 .. for those before it.
        y: what is judged, of the same length; None is missing.
        middle: the usual value at each x.
        low: lower edge of history's band; empty where there is none.
        high: upper edge.
        begins: first x of the stretch that is judged.
        of: what y is.
        band: what the band is.
        limit: the limit in the unit of y, where one is drawn.
        in_time: x is time.
        course_first: the measure over the last batches says more, where the ledger has some.
    """

    kind: Kind
    rule: str
    column: str | None
    series: str | None
    x: Numbers
    y: Numbers
    middle: Numbers = ()
    low: Numbers = ()
    high: Numbers = ()
    begins: float = 0.0
    of: str = ""
    band: str = ""
    limit: float | None = None
    in_time: bool = False
    course_first: bool = False


def to_text(sketches: Sequence[Sketch], notes: Sequence[str]) -> str:
    """Sketches and notes as JSON; empty where there is neither."""
    kept = {"sketches": [asdict(each) for each in sketches], "notes": list(notes)}
    return json.dumps(kept, ensure_ascii=False) if sketches or notes else ""


def from_text(text: str) -> tuple[tuple[Sketch, ...], tuple[str, ...]]:
    """The sketches and notes that ``to_text`` wrote; fields of another version are left out."""
    known = {each.name for each in fields(Sketch)}
    read = json.loads(text) if text else {"sketches": [], "notes": []}
    sketches = []
    for each in read["sketches"]:
        given: dict[str, Any] = {name: value for name, value in each.items() if name in known}
        sketches.append(Sketch(**{name: _frozen(value) for name, value in given.items()}))
    return tuple(sketches), tuple(read["notes"])


def _frozen(value: Any) -> Any:
    return tuple(value) if isinstance(value, list) else value
