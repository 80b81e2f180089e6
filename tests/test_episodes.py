"""Episodes: runs of failing batches, what of them is told, and what the ledger keeps of them."""

from __future__ import annotations

import itertools
import random
import sqlite3
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace

import numpy as np
import pytest
from record_samples import batch, judgement, records

from sercheck.episodes import Step, change_by, for_desks, runs_around, standings
from sercheck.store import migrations
from sercheck.store.digest import RuleNoise, digest
from sercheck.store.episodes import (
    EpisodeFilters,
    batches_of,
    episodes,
    episodes_of,
    history_of,
    open_episodes,
)
from sercheck.store.ledger import open_ledger
from sercheck.store.outbox import messages_of
from sercheck.store.rows import Filters, Settlement

RULE = "keeps little memory"
DESKS = {RULE: ("heat-desk",)}


@pytest.fixture
def ledger(tmp_path):
    """A ledger of its own."""
    with open_ledger(str(tmp_path / "kept")) as made:
        yield made


@pytest.fixture
def either(ledger_store):
    """A ledger in a file and on a server."""
    with open_ledger(ledger_store) as made:
        yield made


def step(day: int, state: str, series: int = 1, beyond: float | None = 2.0) -> Step:
    """A standing of a batch of that day of January."""
    return Step((f"2026-01-{day:02d}", "", "", f"j{day}"), state, series, beyond)


def store(ledger, day: int, word: str, *, rules: str = "rules-1", series: int = 1, beyond: float = 2.0, feed="heat"):
    """Judge the batch of a day: every record ``word``, of which ``series`` when it is fail."""
    name = f"{feed}-{day:02d}"
    size = 8
    outcome = [word if n < series or word != "fail" else "pass" for n in range(size)]
    rows = records(
        size, name, rules, feed=feed, outcome=outcome, observed=[beyond] * size, bound=[0.0] * size, limit=[1.0] * size,
        p_value=[10.0**-beyond] * size, action=["hold" if each == "fail" else None for each in outcome],
    )  # fmt: skip
    come = batch(name, feed=feed, first_stamp=f"2026-01-{day:02d}T00:00:00Z", last_stamp=f"2026-01-{day:02d}T23:00:00Z")
    said = judgement(name, decision="held" if word == "fail" else "released", rules_fingerprint=rules)
    return ledger.add(come, said, rows, tell=DESKS)


def told(ledger) -> list[str]:
    """What was told of which batch, in the order in which it was."""
    return [f"{m.batch_id[-2:]} {change.change}" for m in messages_of(ledger) for change in m.changes]


def test_a_rule_that_keeps_failing_is_one_episode_told_when_it_opens_and_closes(ledger):
    """Three failing batches between two that pass: one episode with its batches, told twice."""
    for day, word in enumerate(("pass", "fail", "fail", "fail", "pass", "pass"), 1):
        store(ledger, day, word)
    (found,) = episodes(ledger)
    assert (found.state, found.batches, found.series, found.action) == ("closed", 3, 1, "hold")
    assert (found.started, found.last_at, found.closed_at) == (
        "2026-01-02T00:00:00Z", "2026-01-04T23:00:00Z", "2026-01-05T23:00:00Z",
    )  # fmt: skip
    assert (found.first_batch, found.last_batch, found.closed_by) == ("heat-02", "heat-04", "heat-05")
    assert batches_of(ledger, found.episode_id) == ("heat-02", "heat-03", "heat-04")
    assert ledger.record(found.worst)["outcome"].tolist() == ["fail"]
    assert told(ledger) == ["02 opened", "05 closed"]


def test_an_undecided_batch_neither_prolongs_nor_closes(ledger):
    """Silence between two failures leaves one episode of two batches, open."""
    for day, word in enumerate(("fail", "undecided", "fail"), 1):
        store(ledger, day, word)
    (found,) = open_episodes(ledger, "heat")
    assert (found.batches, found.first_batch, found.last_batch) == (2, "heat-01", "heat-03")
    assert told(ledger) == ["01 opened"]


def test_judging_again_changes_nothing(ledger):
    """The same judgement stored twice leaves episodes and messages as they were."""
    for _ in range(3):
        store(ledger, 1, "fail")
    (found,) = episodes(ledger)
    assert found.batches == 1
    assert told(ledger) == ["01 opened"]


def test_what_gets_clearly_worse_or_spreads_is_told_at_each_doubling(ledger):
    """From the size and width told last: two allowances are told, three not, four are; three series after one."""
    cases = [(2, 1), (3, 1), (4, 1), (5, 1), (5, 3), (5, 5), (5, 6), (9.9, 6), (10, 6)]
    for day, (beyond, series) in enumerate(cases, 1):
        store(ledger, day, "fail", beyond=beyond, series=series)
    assert told(ledger) == ["01 opened", "03 worse", "05 spread", "07 spread", "09 worse"]
    (found,) = episodes(ledger)
    assert (found.series, found.widest, found.beyond, found.p_value) == (6, 6, 10.0, 1e-10)


def test_forty_batches_of_one_fault_are_told_once(ledger):
    """A fault that stays what it is, with the scatter of any observation, is told when it opens."""
    sizes = np.random.default_rng(4).uniform(3, 5, 40)
    for day, beyond in enumerate(sizes, 1):
        store(ledger, day % 28 + 1 if day > 28 else day, "fail", beyond=float(beyond), feed=f"f{day // 29}")
    assert [each.split()[1] for each in told(ledger)] == ["opened", "opened"]


def test_any_order_of_arrival_gives_the_same_episodes(tmp_path):
    """Late batches are put where they belong: the ledger ends alike in every order."""
    words = ["fail", "pass", "fail", "fail", "undecided", "fail", "pass", "fail"]
    seen = set()
    orders = [list(range(8)), list(range(7, -1, -1))]
    orders += [random.Random(seed).sample(range(8), 8) for seed in range(6)]
    for number, order in enumerate(orders):
        with open_ledger(str(tmp_path / f"{number}")) as kept:
            for place in order:
                store(kept, place + 1, words[place])
            seen.add(tuple(
                (e.state, e.started, e.last_at, e.closed_by, e.batches, batches_of(kept, e.episode_id))
                for e in sorted(episodes(kept), key=lambda e: e.started)
            ))  # fmt: skip
    ((first, second, third),) = seen
    assert [first[4], second[4], third[4]] == [1, 3, 1]
    assert [first[0], second[0], third[0]] == ["closed", "closed", "open"]


def test_a_late_batch_inside_or_beside_an_episode_is_told_no_more(either):
    """Yesterday's batch arriving after today's joins what was told; a late pass in the middle closes nothing."""
    store(either, 5, "fail")
    store(either, 4, "fail")
    store(either, 2, "fail")
    assert told(either) == ["05 opened"]
    store(either, 3, "pass")
    assert told(either) == ["05 opened"]
    assert [e.state for e in episodes(either)] == ["open", "closed"]
    store(either, 1, "pass")
    assert told(either) == ["05 opened"]


def test_a_late_batch_that_fails_alone_is_told_although_newer_ones_passed(ledger):
    """It was held, and somebody must look at it; its episode is over already."""
    store(ledger, 1, "pass")
    store(ledger, 3, "pass")
    store(ledger, 2, "fail")
    assert told(ledger) == ["02 opened"]
    assert [(e.state, e.closed_by) for e in episodes(ledger)] == [("closed", "heat-03")]


def test_two_episodes_joined_by_a_late_batch_become_one(ledger):
    """The pass between them is judged anew by other rules and fails: one episode from first to last remains."""
    store(ledger, 1, "fail")
    store(ledger, 3, "fail")
    assert len(episodes(ledger)) == 1
    store(ledger, 2, "pass")
    before = {e.first_batch: e.episode_id for e in episodes(ledger)}
    assert len(before) == 2
    assert len(set(before.values())) == 2


def test_the_same_batch_judged_by_better_rules_closes(ledger):
    """A batch that fails by one file and passes by the next ends its episode; the old judgement stays in it."""
    store(ledger, 1, "fail")
    store(ledger, 1, "pass", rules="rules-2")
    (found,) = episodes(ledger)
    assert (found.state, found.closed_by, found.batches) == ("closed", "heat-01", 1)
    assert told(ledger) == ["01 opened", "01 closed"]


def test_a_rule_that_is_no_longer_asked_closes_after_three_batches(ledger):
    """One batch judged by other rules does not end an episode; three newer ones that do not ask do."""
    store(ledger, 1, "fail")
    for day in range(2, 6):
        name = f"heat-{day:02d}"
        rows = records(2, name, feed="heat", rule="another", outcome="pass")
        come = batch(name, feed="heat", last_stamp=f"2026-01-{day:02d}T23:00:00Z")
        ledger.add(come, judgement(name, decision="released"), rows, tell=DESKS)
        assert [e.closed_as for e in episodes(ledger)] == ([None] if day < 4 else ["gone"]), day
    assert told(ledger) == ["01 opened", "04 gone"]
    store(ledger, 6, "fail")
    assert told(ledger)[-1] == "06 opened"


def test_settled_batches_count_as_false_and_true_holds(either):
    """What a person said last of each batch is counted with its episode; all its batches stay in it."""
    for day in (1, 2, 3):
        store(either, day, "fail")
    for day, what, when in ((1, "released", "1"), (2, "discarded", "1"), (3, "released", "1"), (3, "discarded", "2")):
        either.settle(Settlement(f"heat-{day:02d}", "heat", what, "Ana", "seen", f"2026-01-1{when}T00:00:00Z"))
    (found,) = episodes(either)
    assert (found.batches, found.false_holds, found.true_holds) == (3, 1, 2)


def test_the_history_of_a_rule_tells_since_when_and_how_often_before(either):
    """As it stands now, and as it stood at an earlier batch."""
    for day, word in enumerate(("fail", "pass", "fail", "pass", "fail", "fail"), 1):
        store(either, day, word)
    now = history_of(either, "heat", RULE)
    assert (now.now.first_batch, len(now.before), now.asked) == ("heat-05", 2, 6)
    then = history_of(either, "heat", RULE, before="2026-01-03T23:00:00Z")
    assert (then.now.first_batch, len(then.before), then.asked) == ("heat-03", 1, 3)
    assert history_of(either, "heat", "no such rule") == history_of(either, "other", RULE)
    assert [e.first_batch for e in episodes_of(either, "heat-06")] == ["heat-05"]
    assert episodes_of(either, "heat-02") == ()


def test_episodes_are_found_by_feed_time_state_rule_and_series(either):
    """Each filter lets through what it says."""
    for feed in ("heat", "water"):
        for day, word in enumerate(("fail", "pass", "fail"), 1):
            store(either, day, word, feed=feed, series=day)
    cases = {
        EpisodeFilters(): 4,
        EpisodeFilters(feed="h*"): 2,
        EpisodeFilters(state="open"): 2,
        EpisodeFilters(since="2026-01-03"): 2,
        EpisodeFilters(until="2026-01-01T23:00:00Z"): 2,
        EpisodeFilters(rule="keeps*"): 4,
        EpisodeFilters(rule="keeps"): 0,
        EpisodeFilters(series="s2"): 2,
        EpisodeFilters(series="s?", feed="water"): 2,
        EpisodeFilters(limit=3): 3,
    }
    assert {filters: len(episodes(either, filters)) for filters in cases} == cases


def test_a_ledger_from_before_there_were_episodes_gets_them(tmp_path, monkeypatch):
    """Batches of an old ledger are worked out at the first look, in their order, and nobody is told of them."""
    new = migrations.MIGRATIONS
    words = ("fail", "pass", "fail", "fail")
    with open_ledger(str(tmp_path / "new")) as kept:
        for day in (3, 1, 4, 2):
            store(kept, day, words[day - 1])
        wanted = [(e.started, e.state, e.batches, e.worst, e.beyond) for e in episodes(kept)]
    with sqlite3.connect(tmp_path / "new" / "ledger.sqlite") as old:
        for table in ("standings", "episodes", "messages", "standings_due"):
            old.execute(f"DROP TABLE {table}")
        old.execute("DROP INDEX records_that_failed")
        old.execute("DELETE FROM migrations WHERE name >= '004'")
        old.execute("DROP INDEX records_of_series")
    old.close()
    with open_ledger(str(tmp_path / "new")) as kept:
        assert [(e.started, e.state, e.batches, e.worst, e.beyond) for e in episodes(kept)] == wanted
        assert told(kept) == []
        store(kept, 5, "fail")
        assert told(kept) == []
        assert len(episodes(kept)) == len(wanted)
    assert new is migrations.MIGRATIONS


def test_a_rule_that_holds_because_it_is_undecided_is_an_episode(ledger):
    """Where the rule file asks to hold what cannot be judged, the batch is held and somebody is told."""
    rows = records(3, "heat-01", feed="heat", outcome="undecided", action="hold", p_value=None, observed=None)
    ledger.add(batch("heat-01", feed="heat"), judgement("heat-01"), rows, tell=DESKS)
    (found,) = episodes(ledger)
    assert (found.action, found.series, found.p_value, found.beyond) == ("hold", 3, None, None)
    assert told(ledger) == ["01 opened"]


def test_standings_of_no_records_are_none():
    """A judgement without records says nothing of any rule."""
    assert standings(records(0)) == []


def test_an_exact_rule_is_measured_in_its_own_unit():
    """Where the limit is the bound itself there is no allowance to count in."""
    (seen,) = standings(records(3, outcome="fail", observed=[1, 5, 3], bound=1, limit=1, p_value=None))
    assert (seen.beyond, seen.p_value, seen.failed) == (4.0, None, 3)
    (seen,) = standings(records(2, outcome="fail", observed=[np.inf, None], bound=1, limit=1))
    assert seen.beyond is None


def test_every_change_belongs_to_one_run():
    """For all words of six batches, whichever came last: told at most once, and opened only for a run of its own."""
    for words in itertools.product(("fail", "pass", "undecided"), repeat=5):
        steps = [step(day, word) for day, word in enumerate(words, 1)]
        for own in steps:
            if own.state == "undecided":
                continue
            runs = runs_around(steps, own)
            change = change_by(steps, runs, own)
            if change and change[0] == "opened":
                assert change[1].steps == (own,)
            if change and change[0] == "closed":
                assert change[1].closed_by is own
                assert not any(s.state != "undecided" for s in steps if s.key > own.key)
            assert all(s.state == "fail" for run in runs for s in run.steps)


def test_each_desk_is_told_what_its_rules_say():
    """A rule without desks is told to nobody."""
    from sercheck.episodes import Changed

    changes = [Changed("a", "opened", "1"), Changed("b", "closed", "2"), Changed("c", "opened", "3")]
    assert for_desks(changes, {"a": ("x", "y"), "b": ("y",)}) == {"x": changes[:1], "y": changes[:2]}


def test_a_batch_without_rows_is_placed_by_its_judgement(ledger):
    """Nothing delivered has no newest row; the episode begins when it was judged."""
    come = replace(batch("heat-01", feed="heat"), first_stamp=None, last_stamp=None, rows=0)
    ledger.add(come, judgement("heat-01"), records(2, "heat-01", feed="heat", outcome="fail", action="hold"))
    (found,) = episodes(ledger)
    assert found.started == found.first_at == "2026-01-13T06:00:00Z"


def test_the_digest_counts_feeds_settlements_and_noisy_rules(either):
    """All feeds of a stretch of days: what was held, what people said of it, which rule failed how often."""
    for day, word in enumerate(("fail", "pass", "fail", "fail"), 1):
        store(either, day, word, feed="heat")
    store(either, 2, "pass", feed="water")
    for day, what in ((1, "released"), (3, "released"), (2, "discarded")):
        either.settle(Settlement(f"heat-{day:02d}", "heat", what, "Ana", "seen", "2026-02-01T00:00:00Z"))
    told_all = digest(either)
    heat, water = told_all.feeds
    assert (heat.batches, heat.released, heat.held) == (4, 1, 3)
    assert (heat.false_holds, heat.true_holds, heat.unsettled, heat.slipped) == (2, 0, 1, 1)
    assert (heat.last_batch, heat.last_decision, heat.opened, heat.closed) == ("heat-04", "held", 2, 1)
    assert (water.feed, water.held, water.episodes) == ("water", 0, ())
    assert told_all.noisiest == (RuleNoise("heat", RULE, 3, 4, 2, 0, 2),)
    assert told_all.untold == (("heat-desk", 3),)
    few = digest(either, since="2026-01-03", feed="h*")
    assert [(each.feed, each.batches, each.opened, each.closed) for each in few.feeds] == [("heat", 2, 1, 0)]


def test_the_digest_of_no_ledger_is_empty(ledger):
    """Looking where nothing was judged makes nothing and finds nothing."""
    assert digest(ledger).feeds == ()


def test_batches_of_a_feed_judged_at_once_open_one_episode(ledger_store):
    """Eight failing batches stored at the same moment: one episode of eight, told once as opened."""
    def one(day: int) -> None:
        with open_ledger(ledger_store) as own:
            store(own, day, "fail")

    with ThreadPoolExecutor(8) as pool:
        list(pool.map(one, range(1, 9)))
    with open_ledger(ledger_store) as kept:
        (found,) = episodes(kept)
        assert found.batches == 8
        assert [each.split()[1] for each in told(kept)] == ["opened"]


def test_records_of_a_series_are_found_by_an_index(ledger):
    """Of a ledger of many batches only the records asked for are read."""
    store(ledger, 1, "fail")
    with sqlite3.connect(ledger.place) as kept:
        plan = kept.execute("EXPLAIN QUERY PLAN SELECT * FROM records WHERE series = 's1'").fetchall()
    kept.close()
    assert "records_of_series" in str(plan)


def test_a_key_of_many_letters_is_stored_on_a_server_too(either):
    """An index on keys takes keys that are longer than a page of it."""
    name = "".join(random.Random(3).choices("abcdefghijklmnopqrstuvwxyz0123456789", k=10_000))
    rows = records(3, "heat-01", feed="heat", series=["s0", name, "s2"], outcome="fail", action="hold")
    either.add(batch("heat-01", feed="heat"), judgement("heat-01"), rows, tell=DESKS)
    assert len(either.records(Filters(series=name))) == 1
    assert len(episodes(either, EpisodeFilters(series=name))) == 1


def test_the_series_of_a_very_long_episode_are_no_longer_counted(ledger, monkeypatch):
    """Beyond a million failed records the number stays, or grows to the most of one batch: a gate costs no more."""
    store(ledger, 1, "fail", series=3)
    monkeypatch.setattr("sercheck.store.standings.COUNTED", 0)
    store(ledger, 2, "fail", series=2)
    assert [e.series for e in episodes(ledger)] == [3]
    store(ledger, 3, "fail", series=5)
    assert [(e.series, e.widest) for e in episodes(ledger)] == [(5, 5)]
