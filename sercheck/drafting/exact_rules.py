"""The rules whose bound is a number: of the clock, of empty cells, of the range; depends on shape and figures.

They need no sampling error, so they take next to nothing of the alarm budget.
"""

from __future__ import annotations

import math
from dataclasses import replace

from sercheck.drafting.entry import Entry, LeftOut
from sercheck.drafting.figures import Batches, Figures
from sercheck.drafting.shape import Shape
from sercheck.rulebook.lengths import UNITS, mean_seconds

ASIDE = ("weight", "0.01")
"""What an exact rule of a measure that can have sampling error leaves of its share to the others (ours)."""
SPARE = 1.5
"""Rows fewer than history ever had that are too few: one more may be lost, two are told (ours)."""
WORST = 0.7
"""Share of a batch's rows below which a week is looked at instead of a batch, and no rule is drafted (ours)."""
NONE_IN = 1000
"""Rows without an empty cell after which the first empty one is told (ours)."""
FEWEST_EMPTY = 0.05
"""Least bound for a share of empty cells (common practice)."""
MOST_EMPTY = 0.25
"""Share of empty cells in history's worst week from which no bound is drafted (ours)."""
NEAR, FAR = 0.05, 0.2
"""Parts of history's range within which its lowest value says that 0 is the end, and beyond which a value on the other
side of 0 would be far off as well (ours); between them it may be a temperature on a warm winter's day."""
LATE = 1.5
"""Ages of the newest row in batches that are called late: half a batch of delay (ours)."""
LOOKS = {
    "doubles": ("no row twice", "Doubled rows are a repeated delivery, or a clock change that was not understood."),
    "disorder": ("rows in order of time", "Rows before older ones are files put together in the wrong order."),
    "off_grid": ("no stamp off the clock", "Stamps that cannot be read, or lie between two steps of the cadence."),
}


def exact_rules(shape: Shape, figures: Figures) -> tuple[list[Entry], list[LeftOut]]:
    """The rules, and those that history speaks against."""
    entries: list[Entry] = []
    left: list[LeftOut] = []
    counted = figures.batches
    if counted is not None:
        _completeness(shape, counted, entries, left)
    if figures.again and counted is None:
        left.append(LeftOut("spacing doubles", f"{figures.again:,} rows of history have the stamp of another"))
    else:
        entries.append(_spacing("doubles", counted, figures))
    if counted is not None:
        entries += [_spacing("disorder", counted, figures), _spacing("off_grid", counted, figures)]
    _empty(shape, figures, entries, left)
    _range(shape, figures, entries, left)
    if shape.batch_every is not None:
        entries.append(_freshness(shape.batch_every))
    return entries, left


def _completeness(shape: Shape, counted: Batches, entries: list[Entry], left: list[LeftOut]) -> None:
    if shape.kind == "single":
        bound = counted.gaps + 1
        fields = (("measure", "spacing"), ("look", "gaps"), ("window", "12"), ("stays", f"{{below: {bound}}}"))
        why = f"History has at most {counted.gaps} gaps in twelve rows. Exact: no share of the budget."
        entries.append(_plain("no row left out", fields, "A row that was not delivered is not to be skipped.", why))
        return
    for window, worst, batches in (("batch", counted.complete[0], 1), ("week", counted.complete[1], 7)):
        if worst < WORST:
            continue
        rows = batches * shape.batch_rows
        least = math.floor(100 * (worst - SPARE / rows)) / 100
        wide = (("window", str(rows)),) if window == "week" else ()
        fields = (("measure", "completeness"), *wide, ("stays", f"{{above: {least}}}"), ASIDE)
        stretch = "a batch" if batches == 1 else f"{batches} batches"
        why = (
            f"The least that any series had in {stretch} of history is {_share(worst)} of the rows due; the bound is "
            "two rows of a series fewer. Exact: next to no share of the budget."
        )
        about = "Ask for a second delivery before loading."
        entries.append(_plain("the rows are delivered", fields, about, why))
        return
    reason = f"some series had only {_share(counted.complete[1])} of its rows in a week of history"
    left.append(LeftOut("completeness", reason))


def _spacing(look: str, counted: Batches | None, figures: Figures) -> Entry:
    name, about = LOOKS[look]
    most = counted.counted[look] if counted is not None else 0
    seen = f"{'None' if not most else f'At most {most} in a batch'} in {figures.rows:,} rows of history."
    fields = (("measure", "spacing"), ("look", look), ("stays", f"{{below: {most + 1}}}"))
    return _plain(name, fields, about, f"{seen} Exact: no share of the budget.")


def _empty(shape: Shape, figures: Figures, entries: list[Entry], left: list[LeftOut]) -> None:
    """Cells without a number."""
    about = "Empty cells are a broken link, or a column that was renamed."
    values = shape.layout.values
    never = tuple(column for column in values if not figures.empty[column])
    if never and figures.rows >= NONE_IN:
        fields = (("measure", "rate"), ("of_rows", "missing"), ("stays", "{below: 0}"), ASIDE)
        why = f"None in {figures.rows:,} rows of history: the first one is told. Exact: next to no share of the budget."
        entries.append(_plain("no cell is empty", fields, about, why, never))
    elif never:
        left.append(LeftOut("rate of missing", f"{figures.rows:,} rows without one tell little: {NONE_IN:,} would"))
    for column in values:
        if column in never:
            continue
        share = figures.empty[column] / max(figures.rows, 1)
        worst = share if figures.batches is None else figures.batches.empty[column]
        if worst > MOST_EMPTY:
            reason = f"{_share(worst)} of its cells are empty in history's worst week, {_share(share)} in all"
            left.append(LeftOut(f"rate of missing of {column}", reason))
            continue
        bound = max(FEWEST_EMPTY, math.ceil(200 * worst) / 100)
        wide = () if figures.batches is None else (("window", str(7 * shape.batch_rows)),)
        fields = (("measure", "rate"), ("of_rows", "missing"), *wide, ("stays", f"{{below: {bound}}}"))
        why = (
            f"{_share(share)} of history's cells are empty, {_share(worst)} in its worst week; the bound is "
            f"twice that, {FEWEST_EMPTY:g} at least."
        )
        entries.append(_plain(f"few cells of {column} are empty", fields, about, why, (column,), exact=False))


def _range(shape: Shape, figures: Figures, entries: list[Entry], left: list[LeftOut]) -> None:
    for column in shape.layout.values:
        low, high = figures.lowest[column], figures.highest[column]
        room = high - low
        if not room > 0 or not math.isfinite(room):
            left.append(LeftOut(f"range of {column}", "history holds one value only, or none"))
            continue
        least = 0.0 if _ends_at_zero(low, room) else _outward(low - room, up=False)
        most = 0.0 if _ends_at_zero(-high, room) else _outward(high + room, up=True)
        fields = (
            ("measure", "rate"), ("of_rows", f"{{outside: [{least!r}, {most!r}]}}"), ("stays", "{below: 0}"), ASIDE,
        )  # fmt: skip
        why = (
            f"History lies between {low:.6g} and {high:.6g}; the bounds are as far again to either side"
            + (", and not beyond 0." if 0.0 in (least, most) else ".")
            + " Put what is physically possible in their place. Exact: next to no share of the budget."
        )
        about = "A value that far off is another unit, a misplaced decimal mark or an overflow."
        entries.append(_plain(f"{column} stays in its range", fields, about, why, (column,)))


def _ends_at_zero(least: float, room: float) -> bool:
    """Values that begin near 0, or so far above that the other sign would be far off, never change their sign."""
    return least >= 0 and not NEAR * room < least < FAR * room


def _freshness(batch_every: str) -> Entry:
    """Age of the newest row."""
    age = _length(LATE * (mean_seconds(batch_every) or 0))
    fields = (("measure", "freshness"), ("stays", f"{{below: {age}}}"))
    why = f"A batch and a half ({batch_every}). History does not tell when its rows arrived, so it only notes. Exact."
    entry = _plain("the delivery is fresh", fields, "Age of the newest row when judged; older is a late delivery.", why)
    return replace(entry, otherwise="note")


def _plain(
    name: str, fields: tuple[tuple[str, str], ...], about: str, why: str, columns: tuple[str, ...] = (),
    *, exact: bool = True,
) -> Entry:  # fmt: skip
    return Entry(name, fields, about, columns, (why,), like_history=False, exact=exact)


def _outward(value: float, *, up: bool) -> float:
    """Rounded away from the middle, to two digits."""
    if value == 0:
        return 0.0
    unit = 10.0 ** (math.floor(math.log10(abs(value))) - 1)
    rounded = (math.ceil if up else math.floor)(value / unit) * unit
    return float(f"{rounded:.6g}")


def _length(seconds: float) -> str:
    if seconds > 20 * UNITS["D"]:
        return f"{math.ceil(seconds / UNITS['D'])}D"
    unit, size = next((u, s) for u, s in reversed(UNITS.items()) if seconds % s == 0 or s == min(UNITS.values()))
    return f"{max(round(seconds / size), 1)}{unit}"


def _share(share: float) -> str:
    return "100 %" if share >= 1 else f"{100 * share:.3g} %"
