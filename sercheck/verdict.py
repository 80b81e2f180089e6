"""Judge one batch from files or frames to a stored decision: the Python interface, and what the command line calls."""

from __future__ import annotations

import re
import time
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from sercheck import __version__, stopwatch
from sercheck.as_of import clock
from sercheck.blocks import Gathered, Workers
from sercheck.collect import Common, records
from sercheck.counted import Facts
from sercheck.engine import Run, decide
from sercheck.engines import workers_of
from sercheck.errors import BatchHeld
from sercheck.history import find_past, open_memory
from sercheck.intake.layout import Layout
from sercheck.intake.stream import feed_cadence
from sercheck.judge import Seen
from sercheck.limits import Watch, within
from sercheck.record import Records, utc_text
from sercheck.rulebook import load_rules
from sercheck.rulebook.budget import expected_false_holds, explain, in_short
from sercheck.rulebook.compiled import Rulebook
from sercheck.sketches import Sketch, to_text
from sercheck.stopwatch import Timing

if TYPE_CHECKING:
    import pandas as pd

    from sercheck.intake.databases import DatabaseRows
    from sercheck.store.ledger import Ledger
    from sercheck.store.rows import Settlement

    Rows = str | Path | Sequence[str | Path] | pd.DataFrame | DatabaseRows


@dataclass(frozen=True)
class Verdict:
    """What became of a batch, with every record.

    Attributes:
        decision: ``released`` or ``held``.
        batch_id: derived from the batch's content.
        feed: name of the feed.
        table: the records as columns.
        facts: the batch in numbers.
        notes: what the reader should know that no rule asks about.
        paths: the files the batch came from (empty for a frame).
        abouts: what the rule file says about each rule, by name.
        timezone: the feed's zone.
        expected: most false holds a healthy feed has on average, and in which period; None when the rule file does not
            say how often a batch comes.
        arithmetic: how the alarm budget becomes the risk of each rule, a sentence each.
        budget: the same in a line; empty where no rule can hold by chance.
        sketches: pictures of the rules that failed, as numbers.
        rules: text of the rule file.
        untold: a sentence for each desk that could not be told; the message waits in the ledger.
        seconds: how long reading and judging took.
        timings: what each stage took, where that was asked for.
    """

    decision: str
    batch_id: str
    feed: str
    table: Records
    facts: Facts
    notes: tuple[str, ...] = ()
    paths: tuple[str, ...] = ()
    abouts: Mapping[str, str] = field(default_factory=dict)
    timezone: str = "UTC"
    expected: tuple[float, str] | None = None
    arithmetic: tuple[str, ...] = ()
    budget: str = ""
    sketches: tuple[Sketch, ...] = ()
    rules: str = ""
    untold: tuple[str, ...] = ()
    seconds: float = 0.0
    timings: tuple[Timing, ...] = ()

    @property
    def counts(self) -> dict[str, int]:
        """Records by outcome."""
        return self.table.counts()

    @property
    def released(self) -> bool:
        """The batch may be loaded."""
        return self.decision == "released"

    @property
    def records(self) -> pd.DataFrame:
        """The records as a DataFrame with nullable types."""
        return self.table.to_frame()

    @property
    def likely_causes(self) -> list[dict[str, Any]]:
        """What probably broke: ``cause``, mean ``support``, and the ``series`` it is for.

        Those that hold the batch come before those only noted; then the one with the most support over all series.
        """
        told: dict[str, dict[str | None, float]] = {}
        holding: set[str] = set()
        for row in self.table.rows_where("outcome", "fail"):
            cause = str(row["likely_cause"])
            series = told.setdefault(cause, {})
            series[row["series"]] = max(series.get(row["series"], 0.0), row["cause_support"] or 0.0)
            if row["action"] == "hold":
                holding.add(cause)
        ranked = sorted(told.items(), key=lambda item: (item[0] not in holding, -sum(item[1].values())))
        return [
            {"cause": cause, "support": sum(by.values()) / len(by), "series": [key for key in by if key]}
            for cause, by in ranked
        ]

    def summary(self) -> dict[str, Any]:
        """The verdict as plain data, as ``sercheck gate --format json`` prints it."""
        expected = None if self.expected is None else {"per": self.expected[1], "count": self.expected[0]}
        return {
            "decision": self.decision,
            "batch_id": self.batch_id,
            "feed": self.feed,
            "first": self.facts.first,
            "last": self.facts.last,
            "rows": self.facts.rows,
            "series": self.facts.series,
            "counts": self.counts,
            "failed": list(self.table.rows_where("outcome", "fail")),
            "undecided": self.undecided,
            "likely_causes": self.likely_causes,
            "false_holds_expected": expected,
            "alarm_budget": list(self.arithmetic),
            "notes": list(self.notes),
            "untold": list(self.untold),
        }

    @property
    def undecided(self) -> list[dict[str, Any]]:
        """Rules that could not say something, those that hold because of it first.

        ``rule``, how many of its ``records`` of ``all``, which ``series``, the commonest ``reason`` of
        ``reasons``, and whether it ``holds`` the batch.
        """
        names = self.table["rule"]
        silent = self.table["outcome"] == "undecided"
        told = []
        for rule in dict.fromkeys(names[silent].tolist()):
            reasons = Counter(self.table["reason"][silent & (names == rule)].tolist())
            ((reason, _),) = reasons.most_common(1)
            told.append(
                {
                    "rule": rule,
                    "records": sum(reasons.values()),
                    "all": int(np.count_nonzero(names == rule)),
                    "series": [k for k in dict.fromkeys(self.table["series"][silent & (names == rule)]) if k],
                    "reason": reason,
                    "reasons": len(reasons),
                    "holds": bool(np.any(self.table["action"][silent & (names == rule)] == "hold")),
                }
            )
        return sorted(told, key=lambda each: not each["holds"])

    def raise_if_held(self) -> None:
        """Raise ``BatchHeld`` when the batch may not be loaded, for a step of a pipeline."""
        if self.released:
            return
        reasons = [row["reason"] for row in self.table.rows() if row["action"] == "hold"]
        raise BatchHeld(
            f"batch {self.batch_id} of {self.feed}",
            f"held: {'; '.join(reasons[:3])}" + (f" and {len(reasons) - 3} more" if len(reasons) > 3 else ""),
        )


def gate(
    rules: Rulebook | str | Path,
    batch: Rows,
    history: Rows | None = None,
    *,
    as_of: str | None = None,
    store: str | Path | None = None,
    ledger: str | None = None,
    keep: bool = True,
    engine: str = "local",
    scheduler: str | None = None,
    timings: bool = False,
) -> Verdict:
    """Judge a batch.

    Args:
        rules: a compiled rule file (``load_rules``) or its path.
        batch: the newest rows: a DataFrame, a path, several, a glob, ``db:NAME?table=...``, or ``rows`` of an open
            connection.
        history: rows let in before, likewise; default what the store's archive holds, else what the rule file names.
        as_of: the clock to judge by, RFC 3339 or ISO 8601 (UTC when it has no offset); default now.
        store: folder of ledger and archive, which the judgement and the rows are kept in; default none are kept.
        ledger: SQLAlchemy URL of the ledger, where it is not in the store.
        keep: write to ledger and archive, and tell the desks that the rules name; without it they are only read.
        engine: ``local``, or ``dask`` for the same records from many processes (see ``scale``).
        scheduler: address of a running Dask scheduler; default as many processes here as there are cores.
        timings: tell what each stage took (``Verdict.timings``).

    The same batch judged again by the same rules against the same history changes nothing: what the ledger has stands
    and is returned.

    Raises:
        SercheckError: rule file, batch, history or store cannot be used, or the rule file's ``limits`` are passed.
            Nothing is released then.
    """
    book = rules if isinstance(rules, Rulebook) else load_rules(rules)
    with stopwatch.timed(asked=timings), within(book.limits) as watch, workers_of(engine, scheduler) as workers:
        verdict = _gate(book, batch, history, as_of, store, ledger, keep=keep, watch=watch, workers=workers)
        return replace(verdict, timings=stopwatch.timings()) if stopwatch.asked() else verdict


def _gate(
    book: Rulebook,
    batch: Rows,
    history: Rows | None,
    as_of: str | None,
    store: str | Path | None,
    ledger: str | None,
    *,
    keep: bool,
    watch: Watch,
    workers: Workers,
) -> Verdict:
    judged_at, began = clock(as_of), time.perf_counter()
    stopwatch.begin("open")
    kept_in = _open_ledger(store, ledger) if store is not None or ledger is not None else None
    layout = layout_of(book)
    memory = open_memory(book, layout, kept_in, store, writes=keep) if kept_in and store is not None else None
    if kept_in and keep:  # an unusable store is told before the work, not after it
        kept_in.prepare()
        if memory:
            memory.prepare()
    source = workers.open(batch, layout)
    past = find_past(book, layout, source, history, memory, str(utc_text(judged_at)[0]))
    cadence = feed_cadence(source, past.source, layout)
    run = Run(book, cadence, judged_at, past.rests)
    gathered = Gathered(run, workers.looked(source, past, layout, run))
    seen, counted, notes = gathered.seen, gathered.counted, [*past.notes, *gathered.notes]
    stopwatch.begin("read")
    facts = counted.facts()
    common = Common(
        feed=book.feed,
        batch_id=f"{_slug(book.feed)}-{re.sub('[-:]', '', facts.first)}-{source.fingerprint[:12]}",
        batch_fingerprint=source.fingerprint,
        judged_at=str(utc_text(judged_at)[0]),
        rules_fingerprint=book.fingerprint,
        baseline_id=past.baseline_id,
        sercheck_version=__version__,
    )
    stopwatch.begin("decide")
    judged = decide(book, seen)
    stopwatch.begin("records")
    table = records(book, judged, common)
    if not np.any(table["action"] == "hold"):
        counted.must_say_something(seen)
    verdict = Verdict(
        decision="held" if np.any(table["action"] == "hold") else "released",
        batch_id=common.batch_id,
        feed=book.feed,
        table=table,
        facts=facts,
        notes=(*_unjudged(book, seen, table), *counted.notes(past.source is not None), *dict.fromkeys(notes)),
        paths=source.paths,
        abouts={rule.name: rule.about for rule in book.rules if rule.about},
        timezone=book.timezone,
        expected=expected_false_holds(book),
        arithmetic=tuple(explain(book)),
        budget=in_short(book),
        sketches=gathered.sketcher.sketches(judged),
        rules=book.text,
        seconds=time.perf_counter() - began,
    )
    watch.check()
    watch.end()
    if kept_in is None or not keep:
        return verdict
    stopwatch.begin("store")
    verdict = _kept(verdict, common, book, kept_in)
    settled = kept_in.batch(verdict.batch_id).settled
    if memory:
        stopwatch.begin("archive")
        memory.keep(verdict.batch_id, source, cadence, verdict.decision, settled)
    stopwatch.begin("tell")
    verdict = replace(verdict, untold=_tell(kept_in, verdict.batch_id, store))
    return _overruled(verdict, settled) if settled else verdict


def layout_of(book: Rulebook) -> Layout:
    """The part of a rule file that says how rows become a grid."""
    groups = dict.fromkeys(step.by for rule in book.rules for step in rule.after if step.kind == "every")
    return Layout(
        time=book.time,
        series=book.series,
        values=book.values,
        every=book.every,
        timezone=book.timezone,
        season_clock=book.season_clock,
        closed_days=book.closed_days,
        seasons=book.seasons,
        batch_every=book.batch_every,
        group_lengths=tuple(length for length in groups if length is not None),
    )


def _open_ledger(store: str | Path | None, url: str | None) -> Ledger:
    from sercheck.store.ledger import open_ledger

    return open_ledger(None if store is None else str(store), url)


def _unjudged(book: Rulebook, seen: Sequence[Seen], table: Records) -> list[str]:
    """What a release must not hide: rules that judged nothing, a judgement in which nothing was decided."""
    looked = {part.rule for part in seen}
    idle = [rule for place, rule in enumerate(book.rules) if place not in looked]
    told = [f"rule '{rule.name}' judged no series: none is called {' or '.join(rule.only)}" for rule in idle]
    counts = table.counts()
    if counts["undecided"] == len(table):
        told.insert(0, f"nothing could be decided: all {len(table)} records are undecided")
    return told


def _kept(verdict: Verdict, common: Common, book: Rulebook, ledger: Ledger) -> Verdict:
    """Store the judgement; what was stored before stands."""
    from sercheck.desks import desks_of
    from sercheck.store.rows import BatchRow, Filters, JudgementRow

    facts = verdict.facts
    batch = BatchRow(
        verdict.batch_id, verdict.feed, common.batch_fingerprint, facts.first, facts.last, facts.rows, facts.series,
        verdict.paths,
    )  # fmt: skip
    judgement = JudgementRow(
        verdict.batch_id, common.rules_fingerprint, common.baseline_id, verdict.decision, common.judged_at,
        book.text, __version__,
    )  # fmt: skip
    with ledger:
        known = ledger.find(judgement.batch_id, judgement.rules_fingerprint, judgement.baseline_id)
        sketched = to_text(verdict.sketches, verdict.notes)
        stored = known or ledger.add(batch, judgement, verdict.table, sketched, desks_of(book))
        table = ledger.records(Filters(judgement_id=stored.judgement_id))
    if known is None and stored.decision == verdict.decision:
        return replace(verdict, table=table)  # of two at once the records of the one that stored first
    note = f"this batch was judged by these rules before, at {stored.judged_at}; that judgement stands"
    return replace(verdict, decision=stored.decision, table=table, notes=(*verdict.notes, note))


def _tell(ledger: Ledger, batch_id: str, store: str | Path | None) -> tuple[str, ...]:
    """Tell the desks what waits in the ledger; a sentence for each that could not be told."""
    from sercheck.desks import tell
    from sercheck.store.where import DEFAULT_STORE

    return tell(ledger, batch_id, "" if store is None or str(store) == DEFAULT_STORE else str(store))


def _overruled(verdict: Verdict, settled: Settlement) -> Verdict:
    """What a person said about the batch counts before what the rules decided."""
    decision = "released" if settled.what == "released" else "held"
    note = f"{verdict.decision} by its rules; {settled.sentence()}"
    return replace(verdict, decision=decision, notes=(*verdict.notes, note))


def _slug(feed: str) -> str:
    """A feed's name as part of an id that can be typed and used as a file name."""
    return re.sub(r"[^A-Za-z0-9_.]+", "_", feed)[:60] or "feed"
