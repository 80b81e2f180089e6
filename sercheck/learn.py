"""What a feed's history teaches: the baseline that the ledger keeps, what is odd in it, and which rules lack history.

Depends on ``intake``, ``engine``, ``facts`` and the compiled rules.
"""

from __future__ import annotations

import io
from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from sercheck.engine import Run, decide, measure_block
from sercheck.facts import DAY, Facts, facts_of
from sercheck.grid import Axis, Grid, Tally
from sercheck.intake.axis import build_axis
from sercheck.intake.calendar import Cadence
from sercheck.intake.layout import Layout
from sercheck.intake.stream import Source, feed_grids
from sercheck.judge import UNDECIDED, Judged
from sercheck.record import utc_text
from sercheck.rulebook.compiled import Length, Rulebook
from sercheck.store.rows import BaselineRow

if TYPE_CHECKING:
    import pyarrow as pa

LOOKED = 8
"""Series on which the rules are tried for want of history (ours: the others are as long)."""
MOST_STEPS, MOST_TIMES, MOST_BATCHES = 40_000, 8, 128
"""Steps of history up to which it is tried whether more would help (ours: four and a half years of hours), and no
farther than eight times what is there or 128 batches."""
KINDS = {
    "gap": "steps without a row",
    "level change": "change of level",
    "broken stretch": "steps of broken days",
    "stuck": "equal values in a row",
}
"""What can be found in a history, and what its size is."""


@dataclass(frozen=True)
class Finding:
    """Something odd in a history.

    Attributes:
        what: a key of ``KINDS``.
        where: stamp at which it begins, UTC, RFC 3339.
        series: the series.
        column: the value column.
        size: how much, as ``KINDS`` says.
    """

    what: str
    where: str
    series: str
    column: str
    size: float


@dataclass(frozen=True)
class Lack:
    """A rule that a batch after this history would leave undecided.

    Attributes:
        rule: its name.
        reason: why.
        steps_more: further steps of history with which it could decide, about; None where more history would not help.
        time_more: the same as text.
    """

    rule: str
    reason: str
    steps_more: int | None
    time_more: str | None


@dataclass(frozen=True)
class Lessons:
    """What was learned.

    Attributes:
        baseline: as the ledger keeps it.
        facts: a table with a row for each series and column. Beside the numbers of ``facts_of`` it holds as a list
            the phase means of each season taken out ("profile day"); for each window that rules name the variance of
            the mean, its degrees of freedom and n_eff ("mean variance over 24 steps", "mean df ...", "mean n_eff ...");
            and for each lag that they name the standard error and the degrees of freedom of the autocorrelation in
            such a window ("autocorrelation error lag 1 over 24 steps", "autocorrelation df ..."; infinite: the normal
            law). Null where history is too short.
        seasons: names of the seasons whose profile was taken out.
        findings: what is odd, by kind, series and column.
    """

    baseline: BaselineRow
    facts: pa.Table
    seasons: tuple[str, ...]
    findings: tuple[Finding, ...]


Learned = tuple[list[Facts], list[Finding]]
"""What one block teaches."""


def of_block(grid: Grid, book: Rulebook, cadence: Cadence) -> Learned:
    """What a block teaches: facts of each column, and what is odd. Pure."""
    steps = _window_steps(book, cadence, grid)
    parts = [facts_of(grid, column, book.rules, steps) for column in book.values]
    return parts, [found for facts in parts for found in _findings(facts, grid.axis)]


def learn(
    source: Source,
    book: Rulebook,
    layout: Layout,
    cadence: Cadence,
    learned_at: str,
    blocks: Iterable[Learned] | None = None,
) -> Lessons:
    """Learn from history, block by block of series; ``blocks`` come from workers that looked at it."""
    parts: list[Facts] = []
    findings: list[Finding] = []
    for facts, found in blocks or (of_block(grid, book, cadence) for grid in feed_grids(source, None, layout)):
        parts += facts
        findings += found
    table = _table(parts)
    row = identity(source, book, cadence, learned_at, facts=_parquet(table), series=len(set(_keys(parts))))
    return Lessons(row, table, parts[0].seasons if parts else (), tuple(findings))


def identity(
    source: Source, book: Rulebook, cadence: Cadence, learned_at: str, *, facts: bytes = b"", series: int = 0
) -> BaselineRow:
    """The baseline of these rows: its id comes from the feed, the rules and the rows' content."""
    extent = source.extent(cadence)
    first, last = utc_text(np.array([extent.first, extent.last])).tolist()
    return BaselineRow(book.feed, book.fingerprint, learned_at, first, last, source.fingerprint, series, facts)


def _keys(parts: Iterable[Facts]) -> list[str]:
    return [key for facts in parts for key in facts.keys.tolist()]


def _findings(facts: Facts, axis: Axis) -> list[Finding]:
    found = []
    for what, places in facts.places.items():
        for series in np.flatnonzero(places >= 0).tolist():
            where = str(utc_text(int(axis.stamps[places[series]]))[0])
            size = float(facts.sizes[what][series])
            found.append(Finding(what, where, facts.keys[series], facts.column, size))
    return found


def _table(parts: list[Facts]) -> pa.Table:
    import pyarrow as pa

    names = dict.fromkeys(name for facts in parts for name in facts.numbers)
    columns: dict[str, Any] = {
        "series": pa.array(_keys(parts), pa.string()),
        "column": pa.array([facts.column for facts in parts for _ in facts.keys], pa.string()),
        "seasons": pa.array([" ".join(facts.seasons) for facts in parts for _ in facts.keys], pa.string()),
    }
    for name in names:
        whole = np.concatenate([facts.numbers.get(name, np.full(len(facts.keys), np.nan)) for facts in parts])
        columns[name] = pa.array(whole.tolist(), pa.float64(), from_pandas=True)
    for season in dict.fromkeys(name for facts in parts for name in facts.profiles):
        means = np.concatenate([facts.profiles[season] for facts in parts])
        edges = np.arange(len(means) + 1) * means.shape[1]
        values = pa.array(means.ravel(), pa.float64(), from_pandas=True)
        columns[f"profile {season}"] = pa.ListArray.from_arrays(pa.array(edges, pa.int32()), values)
    return pa.table(columns)


def _parquet(table: pa.Table) -> bytes:
    import pyarrow.parquet as pq

    buffer = io.BytesIO()
    pq.write_table(table, buffer, compression="zstd")
    return buffer.getvalue()


def lacking(source: Source, book: Rulebook, layout: Layout, cadence: Cadence) -> list[Lack]:
    """The rules that the next batch would leave undecided, tried on some series of the history itself.

    The history's last batch is judged after what lies before it. Whether more history would help is tried by repeating
    the history backwards in whole cycles until the rule decides.
    """
    if cadence.irregular:
        return []
    grid = _some_series(source, layout)
    n = _batch_steps(book, cadence, grid)
    if grid is None or n >= len(grid.axis):
        return [Lack(rule.name, "the history is no longer than a batch", None, None) for rule in book.rules]
    trial = _Trial(book, layout, cadence, grid, n)
    have = len(grid.axis) - n
    told = trial.undecided(have)
    lacks = []
    for name, reason in told.items():
        more = _first_enough(trial, name, have, n)
        lacks.append(Lack(name, reason, more, None if more is None else _as_time(more, cadence)))
    return lacks


def _some_series(source: Source, layout: Layout) -> Grid | None:
    """Up to ``LOOKED`` series of the first block, evenly spread."""
    grid = next(iter(feed_grids(source, None, layout)), None)
    if grid is None or len(grid.keys) <= LOOKED:
        return grid
    pick = np.linspace(0, len(grid.keys) - 1, LOOKED).astype(np.int64)
    values = {name: column[pick] for name, column in grid.values.items()}
    return Grid(grid.keys[pick], grid.axis, 0, values, grid.delivered[pick], grid.tally)


def _batch_steps(book: Rulebook, cadence: Cadence, grid: Grid | None) -> int:
    """Steps of a batch: ``batch_every``, else a day, else one step."""
    if grid is None:
        return 1
    last = int(grid.axis.stamps[-1])
    if book.batch_every is not None:
        begin, end = cadence.period(book.batch_every, last, floor=True)
        return max(1, end - begin)
    return 1 if cadence.daily_or_longer or DAY % cadence.step else cadence.steps("1D")


def _window_steps(book: Rulebook, cadence: Cadence, grid: Grid) -> dict[Length, int]:
    """Steps of each window that the rules name; the batch of an irregular feed has no length."""
    named = {rule.window for rule in book.rules}
    if cadence.irregular:
        return {window: window for window in named if isinstance(window, int)}
    return {
        window: _batch_steps(book, cadence, grid) if window == "batch" else cadence.steps(window) for window in named
    }


class _Trial:
    """Judges a history's last batch after a history of any length."""

    def __init__(self, book: Rulebook, layout: Layout, cadence: Cadence, grid: Grid, n: int) -> None:
        self._cadence = cadence
        self._run = Run(book, cadence, int(grid.axis.stamps[-1]) + cadence.step)
        self._layout, self._grid, self._n = replace(layout, closed_days=()), grid, n
        longest = max((length for length in grid.axis.lengths.values() if length <= len(grid.axis)), default=1)
        self._cycle = len(grid.axis) // longest * longest
        self._told: dict[int, dict[str, str]] = {}

    def undecided(self, history: int) -> dict[str, str]:
        """Rules that decide on less than half of the series, and the commonest reason."""
        if history not in self._told:
            book = self._run.book
            seen, _ = measure_block(self._at(history), self._run)
            judged = decide(book, seen)
            told = {}
            for place, rule in enumerate(book.rules):
                reason = _mostly_undecided([part for part in judged if part.seen.rule == place])
                if reason is not None:
                    told[rule.name] = reason
            self._told[history] = told
        return self._told[history]

    def _at(self, history: int) -> Grid:
        grid, steps = self._grid, history + self._n
        end = int(grid.axis.index[-1]) + 1
        T = len(grid.axis)
        if steps <= T:
            place = np.arange(T - steps, T)
        else:
            back = np.arange(steps)[::-1]
            place = T - 1 - np.where(back < T, back, (back - T) % self._cycle + T - self._cycle)
        values = {name: column[:, place] for name, column in grid.values.items()}
        axis = build_axis(self._cadence, self._layout, end - steps, end)
        return Grid(grid.keys, axis, history, values, grid.delivered[:, place], _no_tally(grid, axis))


def _no_tally(grid: Grid, axis: Axis) -> Tally:
    none = np.zeros(len(grid.keys), dtype=np.int64)
    columns = dict.fromkeys(grid.values, none)
    return Tally(none + 1, none, none, none, none, columns, columns, none + int(axis.stamps[-1]))


def _mostly_undecided(judged: list[Judged]) -> str | None:
    cells = sum(part.outcome.size for part in judged)
    open_cells = sum(int((part.outcome == UNDECIDED).sum()) for part in judged)
    if not cells or 2 * open_cells <= cells:
        return None
    counts: dict[str, int] = {}
    for part in judged:
        for why, number in zip(*np.unique(part.why[part.outcome == UNDECIDED], return_counts=True), strict=True):
            counts[part.reasons[why]] = counts.get(part.reasons[why], 0) + int(number)
    return max(counts, key=lambda reason: counts[reason])


def _first_enough(trial: _Trial, rule: str, have: int, n: int) -> int | None:
    """Further steps with which the rule decides, to a tenth or a batch; None where it never does."""

    def decides(steps: int) -> bool:
        return rule not in trial.undecided(steps)

    low, high = have, max(2 * have, have + n)
    most = min(max(MOST_TIMES * have, MOST_BATCHES * n), max(MOST_STEPS, 2 * have))
    while high <= most and not decides(high):
        low, high = high, 2 * high
    if high > most:
        return None
    while high - low > max(n, high // 10):
        middle = (low + high) // 2
        low, high = (low, middle) if decides(middle) else (middle, high)
    return high - have


def _as_time(steps: int, cadence: Cadence) -> str:
    days = steps * cadence.step / DAY
    return f"{days:.0f} days" if days >= 2 else f"{steps} steps"
