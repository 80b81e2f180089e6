"""From a case to a brief: what failed and why, sorted, grouped and counted; depends on the records and the store.

Records stay columns until the few that are shown are picked: a hundred thousand failures are counted, not looped over.
"""

from __future__ import annotations

import re
import shlex
from collections.abc import Mapping, Sequence
from dataclasses import replace
from zoneinfo import ZoneInfo

import numpy as np

from sercheck import causes
from sercheck.brief.case import Case
from sercheck.brief.rulefile import RuleFile, Said, read_rule_file
from sercheck.brief.view import Brief, Cause, Failed, Mark, Undecided
from sercheck.brief.words import day, listed, local_date, many, moment, name, number, prose, sentence, stretch, zone_of
from sercheck.record import Records
from sercheck.sketches import Sketch
from sercheck.store.rows import JudgedBatch, Settlement

MOST_RULES, MOST_CAUSES, MOST_UNDECIDED, MOST_NOTES = 25, 6, 12, 20
"""Rules shown whole, causes, undecided rules and notes; more are counted."""
WORST, ROWS = 12, 24
"""Series named for each cause, records in the figures of a rule."""
_LINK = re.compile(r"(?i)^(?:https?://|mailto:)\S+$")


def digest(case: Case) -> Brief:
    """Everything a brief says."""
    said = read_rule_file(case.judgement.rules)
    zone = zone_of(said.timezone)
    failed = case.records.take(np.flatnonzero(case.records["outcome"] == "fail"))
    order = _clearest_first(failed)
    found, more_causes = _causes(failed, order)
    rules = _failed(case, failed, order, said, zone)
    silent = _undecided(case)
    settled = _last_word(case.settlements)
    decision = case.judgement.decision
    return Brief(
        feed=name(case.batch.feed),
        about=prose(said.about),
        batch_id=case.batch.batch_id,
        decision=decision,
        state=_state(decision, settled),
        why=_why(case, failed, rules, silent),
        settled=prose(settled.sentence()) if settled else "",
        stretch=stretch(case.batch.first_stamp, case.batch.last_stamp, zone),
        zone=name(said.timezone),
        rows=case.batch.rows,
        series=case.batch.series,
        counts=tuple(case.judgement.counts.items()),
        causes=found,
        more_causes=more_causes,
        since=_since_all(case, failed, zone),
        before=_before_all(case),
        failed=tuple(rules[:MOST_RULES]),
        more_failed=max(len(rules) - MOST_RULES, 0),
        undecided=tuple(silent[:MOST_UNDECIDED]),
        more_undecided=max(len(silent) - MOST_UNDECIDED, 0),
        notes=tuple(sentence(note) for note in case.notes[:MOST_NOTES]),
        commands=_commands(case, settled, zone),
        last=_last(case, zone),
        judged_at=moment(case.judgement.judged_at, zone),
        received=tuple(sentence(path) for path in case.batch.received[:MOST_NOTES]),
        versions=(
            ("batch", case.batch.batch_id),
            ("rules", case.judgement.rules_fingerprint[:16]),
            ("baseline", str(case.judgement.baseline_id or "none")[:16]),
            ("sercheck", case.judgement.sercheck_version),
        ),
    )


def _clearest_first(failed: Records) -> np.ndarray:
    """Places of the records, the smallest p-value first, then the farthest beyond its bound."""
    with np.errstate(invalid="ignore", divide="ignore"):
        error = np.where(failed["standard_error"] > 0, failed["standard_error"], 1.0)
        far = np.nan_to_num(np.abs(failed["observed"] - failed["bound"]) / error)
    p = np.nan_to_num(failed["p_value"], nan=0.0)
    return np.lexsort((-far, p, failed["action"] != "hold"))


def _causes(failed: Records, order: np.ndarray) -> tuple[tuple[Cause, ...], int]:
    """Series by the cause of their clearest record, the cause with the most support first."""
    if not len(failed):
        return (), 0
    told = np.array([_kind(text) for text in failed["likely_cause"].tolist()], dtype=object)
    keys = np.array([key or "" for key in failed["series"].tolist()], dtype=object)
    names, inverse = np.unique(keys.astype(str), return_inverse=True)
    rules_failed = np.bincount(inverse)
    first = np.full(len(names), -1)
    first[inverse[order[::-1]]] = order[::-1]  # the clearest record of each series is written last
    holding = set(told[failed["action"] == "hold"].tolist())
    rank = np.empty(len(failed), dtype=np.int64)
    rank[order] = np.arange(len(order))
    alone = names != ""
    use = alone if alone.any() else np.ones(len(names), dtype=bool)
    found = []
    for cause in dict.fromkeys(told[first[use]].tolist()):
        mine = np.flatnonzero(use & (told[first] == cause))
        mine = mine[np.lexsort((rank[first[mine]], -rules_failed[mine]))]
        support = np.nan_to_num(failed["cause_support"][first[mine]])
        known = cause != causes.UNKNOWN
        detail = {failed["likely_cause"][place] for place in first[mine].tolist()}
        what = detail.pop() if len(detail) == 1 else cause
        series = [key for key in names[mine].tolist() if key]
        found.append((
            cause in holding, float(support.sum()),
            Cause(name(what), float(support.mean()) if known else None, len(series),
                  tuple(map(name, series[:WORST])), cause in holding),
        ))  # fmt: skip
    found.sort(key=lambda each: (not each[0], -each[1]))
    return tuple(each[2] for each in found[:MOST_CAUSES]), max(len(found) - MOST_CAUSES, 0)


def _kind(text: str | None) -> str:
    """A cause without its details."""
    words = str(text or causes.UNKNOWN)
    return next((kind for kind in causes.CAUSES if words.startswith(kind)), words)


def _failed(case: Case, failed: Records, order: np.ndarray, said: RuleFile, zone: ZoneInfo) -> list[Failed]:
    """The rules that failed, those that hold first, then in the order of the file."""
    names = failed["rule"]
    by_rule: dict[str, np.ndarray] = {}
    for rule in dict.fromkeys(names.tolist()):
        by_rule[rule] = order[names[order] == rule]
    rules = [_rule(rule, case, failed.take(rows), said, zone) for rule, rows in by_rule.items()]
    return sorted(rules, key=lambda rule: not rule.holds)


def _rule(rule: str, case: Case, rows: Records, said: RuleFile, zone: ZoneInfo) -> Failed:
    """One rule; ``rows`` are its failed records, the clearest first."""
    worst = next(rows.take([0]).rows())
    told = said.rules.get(rule, Said())
    runbook = prose(told.runbook)
    sketch = _sketch(case, rule, worst)
    return Failed(
        rule=name(rule),
        holds=bool(np.any(rows["action"] == "hold")),
        about=prose(told.about),
        runbook=runbook,
        link=runbook if _LINK.match(runbook) else "",
        tell=tuple(map(name, told.tell)),
        records=len(rows),
        series=len(set(rows["series"].tolist()) - {None}),
        who=name(worst["series"]) if worst["series"] else "",
        reason=sentence(worst["reason"]),
        since=_since(case, (rule,), zone),
        before=_before(case, rule, zone),
        sketch=None if sketch is None else _shown(sketch),
        lags=_lags(rows, sketch),
        figures=tuple(_figures(row) for row in rows.take(slice(0, ROWS)).rows()),
        more=max(len(rows) - ROWS, 0),
        bound=worst["bound"],
        limit=worst["limit"] if worst["limit"] is not None else worst["bound"],
        observed=worst["observed"],
    )


def _sketch(case: Case, rule: str, worst: Mapping[str, object]) -> Sketch | None:
    """The rule's sketch of the column and kind of verdict that the clearest record is of."""
    mine = [each for each in case.sketches if each.rule == rule and each.column == worst["column"]]
    alike = [each for each in mine if (each.series is None) == (worst["series"] is None)]
    return next(iter(alike or mine), None)


def _shown(sketch: Sketch) -> Sketch:
    """The sketch with names that can be shown."""
    series, column = sketch.series and name(sketch.series), sketch.column and name(sketch.column)
    return replace(
        sketch, rule=name(sketch.rule), series=series, column=column, of=sentence(sketch.of), band=sentence(sketch.band)
    )


def _lags(rows: Records, sketch: Sketch | None) -> tuple[int, ...]:
    if sketch is None:
        return ()
    mine = np.array([key == sketch.series for key in rows["series"].tolist()], dtype=bool)
    lags = rows["lag"][mine]
    return tuple(sorted({int(lag) for lag in lags[~np.isnan(lags)].tolist()}))


def _figures(row: Mapping[str, object]) -> tuple[str, ...]:
    lag = row["lag"]
    numbers = [row[each] for each in ("n", "n_eff", "observed", "bound", "limit", "naive_limit", "p_value")]
    told = [number(each if isinstance(each, int | float) else None) for each in numbers]
    series = name(row["series"]) if row["series"] else "all" if str(row["method"]).startswith("mean over") else "–"
    return (series, "–" if lag is None else f"{lag}", *told)


# -- why, since when, how often --------------------------------------------------------------------------------------


def _why(case: Case, failed: Records, rules: Sequence[Failed], silent: Sequence[Undecided]) -> str:
    holding = [rule for rule in rules if rule.holds]
    mute = [rule for rule in silent if rule.holds]
    if holding:
        names = [f"“{rule.rule}”" for rule in holding]
        keys = set(failed["series"][failed["action"] == "hold"].tolist()) - {None}
        where = f", in {len(keys):,} of {case.batch.series:,} series" if keys and case.batch.series > 1 else ""
        which = "1 rule that holds" if len(holding) == 1 else f"{len(holding)} rules that hold"
        return f"{which} a batch failed{where}: {listed(names, 2)}."
    if mute:
        return f"“{mute[0].rule}” could say nothing, and holds the batch then: {mute[0].reason}."
    counts = case.judgement.counts
    total = sum(counts.values())
    if total and counts.get("undecided") == total:
        return f"No rule failed, but nothing could be decided: all {total:,} records are undecided."
    if rules:
        return f"No rule that holds a batch failed; {many(len(rules), 'rule')} failed and only note it."
    return f"No rule failed: {many(counts.get('pass', 0), 'record')} pass, {counts.get('undecided', 0):,} undecided."


def _since(case: Case, rules: Sequence[str], zone: ZoneInfo) -> str:
    """Since when the first of the rules has been failing, from its open episode."""
    found = [case.histories[rule].now for rule in rules if rule in case.histories]
    running = [each for each in found if each is not None]
    if not running:
        return ""
    first = min(running, key=lambda each: each.started)
    if first.batches == 1:
        return "new in this batch" if case.earlier else "the first batch of this feed in the ledger"
    return f"since {moment(first.started, zone)}, {many(first.batches, 'batch', 'batches')}"


def _since_all(case: Case, failed: Records, zone: ZoneInfo) -> str:
    holding = failed["rule"][failed["action"] == "hold"]
    return _since(case, list(dict.fromkeys((holding if len(holding) else failed["rule"]).tolist())), zone)


def _before(case: Case, rule: str, zone: ZoneInfo) -> str:
    """The rule's closed episodes."""
    told = case.histories.get(rule)
    if told is None or not case.earlier:
        return ""
    if not told.before:
        return f"never before in {many(told.asked, 'batch', 'batches')}"
    batches, right = sum(each.batches for each in told.before), sum(each.false_holds for each in told.before)
    last = day(told.before[0].last_at, zone)
    settled = f"; {right} of these were right, as settled" if right else ""
    return (
        f"before in {many(len(told.before), 'episode')} ({many(batches, 'batch', 'batches')} of {told.asked:,}), "
        f"the last until {last}{settled}"
    )


def _before_all(case: Case) -> str:
    if not case.earlier:
        return ""
    held = [each for each in case.earlier if each.last.decision == "held"]
    wrongly = sum(state_of(each) == "settled" for each in held)
    released = f", {wrongly} of them let in by a person later" if wrongly else ""
    return f"{len(held)} of the {many(len(case.earlier), 'batch', 'batches')} before were held{released}"


# -- the rest --------------------------------------------------------------------------------------------------------


def _undecided(case: Case) -> list[Undecided]:
    table = case.records
    silent = table.take(np.flatnonzero(table["outcome"] == "undecided"))
    told = []
    for rule in dict.fromkeys(silent["rule"].tolist()):
        mine = silent.take(np.flatnonzero(silent["rule"] == rule))
        holds = bool(np.any(mine["action"] == "hold"))
        count = case.undecided.get(rule, len(mine))
        told.append(Undecided(name(rule), count, sentence(mine["reason"][0]), holds))
    return sorted(told, key=lambda each: not each.holds)


def _commands(case: Case, settled: Settlement | None, zone: ZoneInfo) -> tuple[tuple[str, str], ...]:
    """What can be typed now; names and reasons are for the reader to fill in."""
    batch = case.batch.batch_id
    store = f" --store {shlex.quote(case.store)}" if case.store else ""
    who = f'--by "YOUR NAME" --because "WHY"{store}'
    state = _state(case.judgement.decision, settled)
    told = []
    if state in ("held", "discarded"):
        told.append(("The batch is right: let it in", f"sercheck settle {batch} --as released {who}"))
    if state != "discarded":
        told.append(("The batch is wrong: it teaches nothing", f"sercheck settle {batch} --as discarded {who}"))
    if state == "held":
        first = local_date(case.batch.first_stamp or case.judgement.judged_at, zone)
        told.append((
            "The feed has changed for good: learn anew from a day on",
            f"sercheck settle {batch} --as released --relearn-from {first} {who}",
        ))  # fmt: skip
    told.append(("All records", f"sercheck ledger records --batch {batch} --outcome fail{store}"))
    return tuple(told)


def _last(case: Case, zone: ZoneInfo) -> tuple[Mark, ...]:
    marks = [mark_of(each, zone) for each in reversed(case.earlier)]
    settled = _last_word(case.settlements)
    own = Mark(
        case.batch.batch_id, day(case.batch.first_stamp, zone), _state(case.judgement.decision, settled),
        case.judgement.counts.get("fail", 0), judged=True,
    )  # fmt: skip
    return (*marks, own)


def mark_of(each: JudgedBatch, zone: ZoneInfo) -> Mark:
    """A batch in the row of the last ones."""
    failed = each.last.counts.get("fail", 0)
    return Mark(each.batch.batch_id, day(each.batch.first_stamp, zone), state_of(each), failed)


def state_of(batch: JudgedBatch) -> str:
    """Released, held, settled (held, then let in by a person) or discarded."""
    return _state(batch.last.decision, batch.settled)


def _state(decision: str, settled: Settlement | None) -> str:
    if settled is None:
        return decision
    return "discarded" if settled.what == "discarded" else "settled" if decision == "held" else "released"


def _last_word(settlements: Sequence[Settlement]) -> Settlement | None:
    return next((each for each in reversed(settlements) if each.what != "relearn"), None)
