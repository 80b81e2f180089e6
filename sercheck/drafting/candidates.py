"""The rules that compare with history, by the kind of feed; depends on the shape and the figures.

Which ones suit which feed was measured on 39 real series (footfall, bicycles, roads, electricity, weather).
"""

from __future__ import annotations

from dataclasses import replace

from sercheck.drafting.entry import Entry, LeftOut
from sercheck.drafting.figures import Figures
from sercheck.drafting.shape import Shape

LIKE = ("stays", "{like: history}")
WEEKS_TOGETHER = 4
"""Batches that the autocorrelation of daily rows looks over: a week of them is too short."""
LONG_WINDOW = 24
"""Rows that rules of monthly and rarer rows look over: whole years of months, and the least that a level takes."""
ONLY_NOTE = {
    "irregular": "It only notes: a feed without cadence is not rehearsed.",
    "single": "It only notes: windows of so many rows take the feed for stationary, and real feeds are not.",
}
"""Why rules that compare with history only note, by kind of feed."""
MOST_YEARS = 10
"""Years that a rule of a yearly cycle looks over at most (common practice)."""


def candidates(shape: Shape, figures: Figures) -> tuple[list[Entry], list[LeftOut]]:
    """The rules to try, in the order of the file, and those that this kind of feed cannot have."""
    if shape.kind == "days":
        entries, left = _days(shape)
    elif shape.kind == "weeks":
        entries, left = _weeks(shape)
    elif shape.kind == "single":
        entries, left = _single(shape, figures)
    else:
        entries, left = _irregular()
    values = shape.layout.values
    able = tuple(column for column in values if figures.vary(column))
    flat = [column for column in values if column not in able]
    if flat:
        left.append(LeftOut(f"all rules that compare {_listed(flat)} with history", "history holds one value only"))
    entries = [
        replace(one, columns=kept) for one in entries if (kept := tuple(c for c in one.columns or values if c in able))
    ]
    if not shape.people:
        entries = _coarse(entries, figures)
    why = ONLY_NOTE.get(shape.kind)
    if why:
        entries = [replace(one, otherwise="note", why=(*one.why, why)) if one.like_history else one for one in entries]
    return entries, left


def _days(shape: Shape) -> tuple[list[Entry], list[LeftOut]]:
    """Batches of a day of hours, quarter-hours or the like."""
    entries = [_level(), _spread(), _surprises()]
    left: list[LeftOut] = []
    if shape.season:
        entries += [_amplitude(shape), _phase(shape)]
    else:
        reason = f"no season within a batch of {shape.batch_every} was found in any column"
        left += [LeftOut("seasonal_lag", reason), LeftOut("season_phase", reason)]
    entries += [_steps(), _roughness(), _run(), _share(), _replay()]
    if shape.series < 2:
        left.append(LeftOut("identity", "one series has no other that it could be swapped with"))
    elif not shape.season:
        left.append(LeftOut("identity", "without a season there is no profile to tell the series apart by"))
    else:
        entries.append(_identity(shape))
    return entries, left


def _weeks(shape: Shape) -> tuple[list[Entry], list[LeftOut]]:
    """Batches of a week of days: few rows a batch."""
    entries, left = [_level(), _surprises()], []
    if shape.season:
        entries.append(_amplitude(shape))
    else:
        left.append(LeftOut("seasonal_lag", f"no season within a batch of {shape.batch_every} was found in any column"))
    entries.append(_steps(WEEKS_TOGETHER * shape.batch_rows))
    entries += [_run(), _share(), _replay()]
    left.append(LeftOut("season_phase", "in so few rows a cycle a slip of one step is found too seldom (4 in 10)"))
    left.append(LeftOut("spread, roughness", "so few rows a batch tell little of either; innovations see more"))
    return entries, left


def _single(shape: Shape, figures: Figures) -> tuple[list[Entry], list[LeftOut]]:
    """One row a batch, months for instance: only long windows say anything."""
    window = (("window", str(LONG_WINDOW)),)
    entries = [_with(_level(), window), _with(_spread(), window), _with(_steps(), window)]
    left = [LeftOut("replay, repeats, roughness", "a batch of one row has no stretch to compare")]
    if shape.season and shape.year:
        rows = min(MOST_YEARS, figures.steps // shape.year) * shape.year
        entries.append(
            Entry(
                "the years return",
                (("measure", "seasonal_lag"), ("season", shape.season), ("window", str(rows)), ("stays", "{above: 0}")),
                "Without it the rows are booked in the wrong place, or the feed is another one.",
                shape.seasonal,
                (f"{rows} rows allow no sharper claim than 'there is one'; study found the season.",),
                like_history=False,
            )
        )
    else:
        left.append(LeftOut("seasonal_lag", "no season was found"))
    return entries, left


def _irregular() -> tuple[list[Entry], list[LeftOut]]:
    left = [
        LeftOut(
            "seasonal_lag, season_phase, innovations, replay, completeness",
            "the feed has no cadence, so nothing says which rows lie one step or one season apart",
        )
    ]
    return [_level(), _spread(), _run(), _share()], left


def _coarse(entries: list[Entry], figures: Figures) -> list[Entry]:
    """Repeats and replays of whole numbers that the weather makes come twice as often as chance explains: note them."""
    out: list[Entry] = []
    for one in entries:
        whole = [column for column in one.columns if figures.whole[column]]
        counted = one.fields[0][1] in ("repeats", "replay")
        if counted and whole and one.otherwise == "hold":
            rest = tuple(column for column in one.columns if column not in whole)
            why = f"It only notes: {_listed(whole)}, of weather in whole numbers, repeats by itself."
            noted = replace(one, columns=tuple(whole), otherwise="note", why=(*one.why, why))
            if rest:
                out.append(replace(one, columns=rest))
                noted = replace(noted, name=f"{one.name} ({', '.join(whole)})")
            out.append(noted)
        else:
            out.append(one)
    return out


def _with(entry: Entry, fields: tuple[tuple[str, str], ...]) -> Entry:
    """The rule with further keys before its bound."""
    return replace(entry, fields=(*entry.fields[:-1], *fields, entry.fields[-1]))


def _level() -> Entry:
    return Entry(
        "level as usual",
        (("measure", "level"), LIKE),
        "Rows are missing from a sum, another unit, another meter; or an event, or the weather.",
        why=("It has a quarter of a share of the budget: events and weather move a level oftener than chance does.",),
    )


def _spread() -> Entry:
    return Entry(
        "spread as usual",
        (("measure", "spread"), LIKE),
        "More spread around the usual cycle is rows out of order, noise, or another unit; less is a flat signal.",
    )


def _surprises() -> Entry:
    return Entry(
        "surprises of the usual size",
        (("measure", "innovations"), ("look", "variance"), LIKE),
        "Smaller surprises are smoothed or interpolated rows, larger ones disorder or noise.",
    )


def _amplitude(shape: Shape) -> Entry:
    return Entry(
        f"the {shape.season}'s cycle has its usual strength",
        (("measure", "seasonal_lag"), ("season", str(shape.season)), LIKE),
        "A weaker cycle is missing peaks, averaged rows, or a closed day.",
        shape.seasonal,
        ("1 is the strength of the profile that history teaches.",),
    )


def _phase(shape: Shape) -> Entry:
    panel = (("across", "[batch, together]"),) if shape.series > 1 else ()
    more = ("Each series by itself, and all at once: a small slip of all is seen sooner together.",) if panel else ()
    return Entry(
        f"the {shape.season}'s cycle comes on time",
        (("measure", "season_phase"), ("season", str(shape.season)), *panel, LIKE),
        "A cycle early or late is a clock, a zone, or stamps of the interval's other end.",
        shape.seasonal,
        ("Steps by which the cycle runs late.", *more),
    )


def _steps(window: int = 0) -> Entry:
    wide = (("window", str(window)),) if window else ()
    return Entry(
        "steps remember what they always did",
        (("measure", "autocorrelation"), ("lag", "1"), ("after", "difference"), *wide, LIKE),
        "A rise is smoothed rows; a fall is rows out of order, or noise in place of the signal.",
    )


def _roughness() -> Entry:
    return Entry(
        "as jagged as ever",
        (("measure", "roughness"), LIKE),
        "Smoother rows were averaged or interpolated on the way, more jagged ones are out of order or noise.",
    )


def _run() -> Entry:
    return Entry(
        "nothing is stuck",
        (("measure", "repeats"), ("look", "run"), LIKE),
        "One value for long is a dead sensor, or a gateway that sends its last value.",
    )


def _share() -> Entry:
    return Entry(
        "rows seldom repeat the one before",
        (("measure", "repeats"), ("look", "share"), LIKE),
        "Many repeats are lost rows filled forward, or rows delivered twice under new stamps.",
    )


def _replay() -> Entry:
    return Entry(
        "no delivery comes again",
        (("measure", "replay"), LIKE),
        "Rows seen before under other stamps are an old file, sent once more.",
        why=("Share of the rows that equal those a day or a week before.",),
    )


def _identity(shape: Shape) -> Entry:
    return Entry(
        "every series is itself",
        (("measure", "identity"), ("window", str(2 * shape.batch_rows)), LIKE),
        "A series that goes on where another left off was entered under the wrong key.",
        shape.seasonal,
        ("Two batches tell like series apart better than one.",),
    )


def _listed(names: list[str] | tuple[str, ...]) -> str:
    return ", ".join(names)
