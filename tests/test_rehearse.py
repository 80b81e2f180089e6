"""Rehearsal: the same records as gate, faults let begin and go on, exact intervals, interrupts, targets."""

from __future__ import annotations

import json
import re
from concurrent.futures import Future
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from scipy import stats

import sercheck
from sercheck.errors import BatchError, OutputError, UsageError
from sercheck.rehearsal.advice import advice
from sercheck.rehearsal.bench import Bench, Judgement, Marks
from sercheck.rehearsal.damage import Case
from sercheck.rehearsal.deliveries import DELIVERIES
from sercheck.rehearsal.faults import BUILT_IN
from sercheck.rehearsal.feed import read_feed
from sercheck.rehearsal.replay import Plan, draw_starts, judge_all, wanted
from sercheck.rehearsal.run import rehearse
from sercheck.rehearsal.verdicts import episodes, next_interval, poisson_interval, share_interval
from sercheck.rulebook import load_rules
from tests.gate_runs import RULES, place, process, water
from tests.rehearsed import coverage, halves

FIRST = pd.Timestamp("2026-01-05", tz="UTC")
DAYS = 72
MORE = """
  - {name: spread as usual, measure: spread, stays: {like: history}}
  - {name: one phase, measure: season_phase, season: day, across: together, stays: {like: history}}
  - {name: every gauge is itself, measure: identity, window: 2D, stays: {like: history}}
  - {name: steady east, measure: innovations, look: variance, only: [east], stays: {like: history}}
  - {name: in order, measure: spacing, look: disorder, stays: {below: 1}}
  - {name: delivered, measure: completeness, window: 3D, stays: {above: 0.8}}
"""
OWN_TO_A_RUN = [
    "record_id", "batch_id", "batch_fingerprint", "judged_at", "baseline_id", "feed", "sercheck_version",
    "rules_fingerprint",
]  # fmt: skip
SEVERAL = "; (?:where history is too short: )?"
LATE = "2026-03-14"
"""Four days before the end of the history."""
FAULTS = {fault.name: fault for fault in (*BUILT_IN, *DELIVERIES)}


@pytest.fixture(scope="module")
def rows():
    """Seventy-two days of two gauges, a gap of three hours and a doubled row among them."""
    made = water(FIRST, DAYS, seed=5)
    gap = made["read_at"].between("2026-03-09T05:00:00Z", "2026-03-09T07:00:00Z") & (made["gauge"] == "east")
    made = made[~gap]
    twice = made[(made["read_at"] == "2026-03-12T08:00:00Z") & (made["gauge"] == "west")]
    return pd.concat([made, twice]).sort_values("read_at", kind="stable", ignore_index=True)


@pytest.fixture(scope="module")
def book(tmp_path_factory):
    """The rules of the small feed and more, of every kind that a rehearsal treats in its own way."""
    path = tmp_path_factory.mktemp("rules") / "rules.yaml"
    path.write_text(RULES + MORE.lstrip("\n"))
    return load_rules(path)


@pytest.fixture(scope="module")
def feed(book, rows):
    """The history cut into days."""
    return read_feed(book, rows)


def moment(row):
    """Stamps as nanoseconds."""
    return pd.to_datetime(row, utc=True).dt.as_unit("ns").astype("int64").to_numpy()


def by_gate(feed, rows, batch):
    """What ``gate`` says of a batch of these rows against those before it."""
    begin = int(feed.edges[batch, 0])
    low = feed.axis.stamps[feed.reach(batch)]
    start, due = feed.axis.stamps[begin], feed.due(batch)
    at = moment(rows["read_at"])
    history, mine = rows[(at >= low) & (at < start)], rows[(at >= start) & (at < due)]
    return sercheck.gate(feed.book, mine, history=history, as_of=pd.Timestamp(due, tz="UTC").isoformat()).records


def same(ours, theirs):
    """Both tables say the same, in the same order."""
    ours, theirs = (table.drop(columns=OWN_TO_A_RUN) for table in (ours, theirs))
    for name in ("method", "assumes"):  # tells the methods of all series that were measured together
        pairs = zip(ours.pop(name), theirs.pop(name), strict=True)
        assert all(set(re.split(SEVERAL, one)) & set(re.split(SEVERAL, other)) for one, other in pairs)
    for name in theirs.columns:
        if theirs[name].dtype == "Float64":
            left, right = (table[name].to_numpy(dtype=float, na_value=np.nan) for table in (ours, theirs))
            np.testing.assert_allclose(left, right, rtol=1e-9, atol=1e-12, err_msg=name)
        else:
            pd.testing.assert_series_equal(ours[name], theirs[name])


def replayed(feed, *, cases=(), start=0, batches=1):
    """Records of healthy batches or of faults, with what stands beside them."""
    kept = []
    bench = Bench(feed, 7, keep=lambda table, tags: kept.append((table.to_frame(), tags)))
    if cases:
        bench.play(cases, start, Marks(), batches, 3)
    else:
        bench.judge(start, Marks(), kept=True)
    return kept


def test_a_healthy_batch_is_judged_as_gate_judges_it(feed, rows):
    """Every column of every record, with gaps and doubles in the batch and before it."""
    for batch in (feed.first, 63, 66, 70):
        ((ours, _),) = replayed(feed, start=batch)
        same(ours, by_gate(feed, rows, batch))


@pytest.mark.parametrize(
    ("name", "every"),
    [("shuffled", False), ("unit changed", True), ("keys swapped", False), ("cycle lost", False), ("stuck", True)],
)
def test_broken_values_are_judged_as_gate_judges_them(feed, rows, name, every):
    """A fault is put into the rows of a file: gate says of it what the rehearsal said, causes and all."""
    fault = FAULTS[name]
    case = Case(fault, fault.sizes[-1], every, 0)
    start = 58
    kept = replayed(feed, cases=[case], start=start, batches=1)
    ((ours, _),) = kept
    broken = broken_rows(feed, rows, case, start)
    assert len(broken) != len(rows) or not broken["cm"].equals(rows["cm"])
    same(ours, by_gate(feed, broken, start))


def broken_rows(feed, rows, case, start):
    """The rows of the history with one day of a fault written into them."""
    from sercheck.rehearsal.damage import broken, hit

    grid = feed.grid(start)
    series = hit(case, grid, 3)
    sent = broken(case, grid, series, 0, 3, feed.cadence)
    begin, end = feed.edges[start].tolist()
    table = rows.copy()
    at = moment(table["read_at"])
    lost = np.zeros(len(table), dtype=bool)
    for row, key in enumerate(grid.keys[series]):
        for step in range(begin, end):
            mine = ((at == feed.axis.stamps[step]) & (table["gauge"] == key)).to_numpy()
            table.loc[mine, "cm"] = sent.values["cm"][row, step - begin]
            lost |= mine & ~sent.delivered[row, step - begin]
    return table[~lost]


def test_doubled_and_disordered_rows_are_counted_as_gate_counts_them(feed, rows):
    """Rows sent twice and in random order, all of them: the intake's own counts decide."""
    start = 58
    begin, end = feed.edges[start].tolist()
    at = moment(rows["read_at"])
    inside = (at >= feed.axis.stamps[begin]) & (at < feed.axis.stamps[end])
    cases = [Case(FAULTS[name], 1.0, True, 0) for name in ("rows delivered twice", "stamps off the clock")]
    kept = replayed(feed, cases=cases, start=start)
    twice = pd.concat([rows, rows[inside]]).sort_values("read_at", kind="stable", ignore_index=True)
    same(kept[0][0], by_gate(feed, twice, start))
    late = rows.copy()
    stamps = pd.to_datetime(late.loc[inside, "read_at"], utc=True) + pd.Timedelta(minutes=20)
    late.loc[inside, "read_at"] = stamps.dt.strftime("%Y-%m-%dT%H:%M:%SZ")
    same(kept[1][0], by_gate(feed, late, start))
    ours = kept[1][0]
    assert ours.loc[ours["rule"] == "all on the clock", "observed"].tolist() == [24.0, 24.0]
    (disorder, _), *_ = replayed(feed, cases=[Case(FAULTS["delivered out of order"], 1.0, True, 0)], start=start)
    assert (disorder.loc[disorder["rule"] == "in order", "observed"] > 5).all()
    assert set(disorder.loc[disorder["outcome"] == "fail", "rule"]) == {"in order"}


def test_a_fault_that_is_not_held_goes_on_in_what_is_known(feed, rows):
    """On its second day a fault is judged against a history that holds its first."""
    case = Case(FAULTS["level shifted"], 0.2, True, 0)
    kept = replayed(feed, cases=[case], start=58, batches=2)
    assert [tags["batch"] for _, tags in kept] == [feed.began(58), feed.began(59)]
    both = broken_rows(feed, broken_rows(feed, rows, case, 58), case, 59)
    from sercheck.rehearsal.damage import broken, hit

    grid = feed.grid(59)
    sent = broken(case, grid, hit(case, feed.grid(58), 3), 1, 3, feed.cadence)
    begin, end = feed.edges[59].tolist()
    at = moment(both["read_at"])
    for row, key in enumerate(grid.keys):
        for step in range(begin, end):
            mine = (at == feed.axis.stamps[step]) & (both["gauge"] == key)
            both.loc[mine, "cm"] = sent.values["cm"][row, step - begin]
    same(kept[1][0], by_gate(feed, both, 59))


def test_history_is_cut_into_local_days(book):
    """A day of the clock change has 23 hours, and every row lies in one batch."""
    rows = water(pd.Timestamp("2026-03-01T00:00", tz="Europe/Oslo").tz_convert("UTC"), 60, seed=1)
    feed = read_feed(replace(book, timezone="Europe/Oslo"), rows)
    hours = np.diff(feed.edges, axis=1)[:, 0]
    assert hours[28] == 23
    assert (np.delete(hours, 28)[:-1] == 24).all()
    assert feed.counts.plain["rows"].sum() == len(rows)


def test_history_that_is_too_short_is_refused(book, rows):
    """The sentence says how many batches there are and how many are needed; a date can be asked for."""
    short = rows[rows["read_at"] < "2026-02-20"]
    with pytest.raises(UsageError, match="holds 46 batches, of which the first 56 only teach"):
        rehearse(book, short)
    assert rehearse(book, short, begins="2026-02-15", tries=0).batches == 5
    for wrong in ("2027-01-01", "2026-01-05", "someday"):
        with pytest.raises(UsageError, match="--from"):
            rehearse(book, short, begins=wrong)
    irregular = replace(book, every="irregular", seasons={})
    with pytest.raises(UsageError, match="irregular"):
        rehearse(irregular, rows)


def test_intervals_are_those_of_the_textbook():
    """Poisson mean and share against scipy; the next count against the binomial test of two Poisson means."""
    for count in (0, 1, 2, 7, 40):
        low, high = poisson_interval(count)
        assert low == pytest.approx(stats.chi2.ppf(0.025, 2 * count) / 2 if count else 0)
        assert high == pytest.approx(stats.chi2.ppf(0.975, 2 * count + 2) / 2)
        for times in (1.0, 0.5, 3.0):
            share = 1 / (1 + times)
            kept = [
                y
                for y in range(400)
                if stats.binom.cdf(count, count + y, share) > 0.025
                and stats.binom.sf(count - 1, count + y, share) > 0.025
            ]
            assert next_interval(count, times) == (kept[0], kept[-1])
    for found, tried in ((0, 4), (3, 4), (4, 4), (17, 60)):
        exact = stats.binomtest(found, tried).proportion_ci(0.95, "exact")
        assert share_interval(found, tried) == pytest.approx((exact.low, exact.high))
    assert share_interval(0, 0) is None
    assert episodes([3, 4, 5, 9, 11, 12]) == 3


class Slow:
    """A pool that hands out results which depend on what was known, and notes what was asked."""

    size = 3

    def __init__(self, bad):
        self.bad, self.asked = bad, []

    def judge(self, batch, marks):
        self.asked.append((batch, marks.held))
        done = Future()
        held = ("rule",) if batch in self.bad and batch - 1 not in marks.held else ()
        done.set_result(Judgement(batch, held, held, {}, {}, None))
        return done


def test_batches_judged_ahead_are_judged_anew_when_one_before_is_held(feed):
    """What stands was judged with the decisions before it, whatever was judged ahead."""
    pool = Slow({58, 59, 62})
    told = list(judge_all(feed, pool))
    assert [one.batch for one in told] == list(feed.judged)
    assert [one.batch for one in told if one.held_by] == [58, 62]
    last = dict(pool.asked)
    assert last[59] == (58,)
    assert last[70] == (58, 62)


def test_a_history_without_numbers_is_refused(book, rows):
    """Nothing could be judged; a fault that changes nothing is not tried, and rows without a stamp are counted."""
    with pytest.raises(BatchError, match="not one of its 3,454 rows holds a number in cm"):
        rehearse(book, rows.assign(cm="?"))
    odd = rows.assign(cm=5.0)
    odd.loc[[7, 9], "read_at"] = ["never", "2299-01-01T00:00:00Z"]
    told = rehearse(book, odd, begins=LATE, faults=["sorted", "unit changed"], tries=1, batches=1)
    assert {line.fault for line in told.faults} == {"unit changed"}
    assert told.feed.unplaced == 2


def test_the_same_seed_gives_the_same_rehearsal(book, rows):
    """In one process or in two."""
    some = ["shuffled", "level shifted", "rows lost"]
    asked = {"begins": LATE, "faults": some, "sizes": [0.5], "tries": 1, "batches": 2}
    one = rehearse(book, rows, seed=4, **asked)
    assert one.summary() == rehearse(book, rows, seed=4, workers=2, **asked).summary()


def test_faults_begin_in_quiet_healthy_batches(feed):
    """None is held in the stretch that a fault may go on for, where there is such a stretch; the seed draws."""
    healthy = [Judgement(batch, ("x",) if batch in (57, 63) else (), (), {}, {}, None) for batch in feed.judged]
    assert draw_starts(feed, healthy, Plan(tries=9, batches=5)) == (58, 64, 65, 66, 67)
    assert draw_starts(feed, healthy, Plan(tries=99, batches=15)) == tuple(b for b in feed.judged if b not in (57, 63))
    assert len({draw_starts(feed, healthy, Plan(tries=2, batches=3, seed=seed)) for seed in range(9)}) > 1
    assert draw_starts(feed, [replace(one, held_by=("x",)) for one in healthy], Plan()) == ()


def test_an_interrupt_keeps_what_is_finished(book, rows):
    """Batches and faults that were done are told, and that it was interrupted."""

    def stop(word, number):
        def tell(share, what):
            if what.startswith(str(number)) and word in what:
                raise KeyboardInterrupt

        return tell

    asked = {"begins": LATE, "faults": ["shuffled"], "sizes": [1.0], "tries": 2, "batches": 1}
    told = rehearse(book, rows, tell=stop("healthy", 2), **asked)
    assert (told.replayed.finished, told.batches, told.faults) == (False, 2, ())
    told = rehearse(book, rows, tell=stop("faults", 1), **asked)
    assert (told.replayed.finished, told.batches, sum(line.tried for line in told.faults)) == (False, 4, 1)
    assert json.dumps(told.summary())


def test_history_that_has_its_own_faults_is_told_apart(book, rows):
    """The day of the gap and the day of the doubled row are no false holds; their dates are told."""
    told = rehearse(book, rows, tries=0, begins="2026-03-08")
    days = {told.feed.began(one.batch)[:10]: one.held_by for one in told.by_data}
    assert days == {"2026-03-09": ("no gap",), "2026-03-12": ("no hour twice",)}
    assert told.false_holds == len(told.held) == 0
    lines = {line.rule.name: line for line in told.rules}
    assert (lines["no gap"].false_holds, lines["no gap"].data) == (0, 1)
    assert told.caught is None


def test_advice_names_the_rule_that_would_have_caught_it(tmp_path, rows):
    """A feed without a rule for repeats is told to add one when stuck values pass; what catches nothing is named."""
    path = tmp_path / "rules.yaml"
    path.write_text(RULES.replace("  - {name: never flat, measure: repeats, stays: {like: history}}\n", ""))
    told = rehearse(path, rows, faults=["filled forward", "keys swapped", "shuffled"], sizes=[1.0], tries=2, batches=1,
                    begins=LATE)
    told_all = rehearse(path, rows, faults=["filled forward"], sizes=[0.1], tries=2, batches=1, begins=LATE)
    assert any("measure: identity" in sentence and "'keys swapped'" in sentence for sentence in told.advice)
    assert any("measure: repeats, look: share" in sentence for sentence in told_all.advice)
    assert any("No fault was caught by" in sentence and "'no hour twice'" in sentence for sentence in told.advice)
    loose = replace(
        told, rules=tuple(replace(line, false_holds=9) if line.rule.name == "level as usual" else line
                          for line in told.rules),
    )  # fmt: skip
    assert advice(loose)[0].startswith("'level as usual' held 9 times where its risk allows")


def test_unknown_faults_and_places_are_refused_before_any_work(book, rows, tmp_path):
    """One clear sentence each."""
    with pytest.raises(UsageError, match="Is 'shuffled' meant"):
        rehearse(book, rows, faults=["shufled"])
    with pytest.raises(OutputError, match="Parquet"):
        rehearse(book, rows, records=tmp_path / "records.csv")
    with pytest.raises(OutputError):
        rehearse(book, rows, records=tmp_path / "nowhere" / "records.parquet")
    with pytest.raises(UsageError, match="positive"):
        rehearse(book, rows, workers=0)
    assert [fault.name for fault in wanted(["rows lost", "sorted"])] == ["rows lost", "sorted"]


ADDON = '''
"""A fault of somebody's own."""
from sercheck import causes
from sercheck.rehearsal.faults import Fault

times = lambda given: given.window * given.size
tripled = Fault("tripled", "Every value so many times itself.", causes.UNIT, (3.0,), times)
'''


def test_faults_of_another_package_are_tried(tmp_path, rows):
    """A package that announces a fault by entry point needs nothing else."""
    (tmp_path / "ourfaults.py").write_text(ADDON)
    info = tmp_path / "ourfaults-1.dist-info"
    info.mkdir()
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: ourfaults\nVersion: 1\n")
    (info / "entry_points.txt").write_text("[sercheck.faults]\ntripled = ourfaults:tripled\n")
    (tmp_path / "rules.yaml").write_text(RULES)
    rows.to_csv(tmp_path / "long.csv", index=False)
    asked = ("--faults", "tripled", "--tries", "1", "--batches", "1", "--from", LATE, "--workers", "2")
    files = [str(tmp_path / name) for name in ("rules.yaml", "long.csv")]
    ended = process("rehearse", *files, *asked, "--format", "json", env={"PYTHONPATH": str(tmp_path)})
    assert ended.returncode == 0, ended.stderr
    told = json.loads(ended.stdout)["faults"]
    assert [(one["fault"], one["series"], one["caught"], one["cause_right"]) for one in told] == [
        ("tripled", "one", 1, 1.0), ("tripled", "all", 1, 1.0),
    ]  # fmt: skip


def test_the_command_line(tmp_path, capsys, monkeypatch, rows):
    """Text on one screen, JSON with its keys, a page by itself, records with their tags, exit status 0, 1 and 2."""
    here = place(tmp_path, capsys, monkeypatch)
    here.frame("long.csv", rows)
    faults = ("--faults", "shuffled,delivered out of order", "--tries", "1", "--batches", "2")
    usual = ("rehearse", "rules.yaml", "long.csv", "--workers", "1", "--from", LATE, *faults)
    ended = here.sercheck(*usual, "--page", "page.html", "--records", "records.parquet")
    assert ended.status == 0, ended.err
    lines = ended.err.splitlines()
    assert lines[0].startswith("REHEARSED  harbour_water, 4 batches from 2026-03-14 to 2026-03-17, 2 series")
    assert len(lines) <= 40
    assert [line for line in lines if len(line) > 100] == []
    page = (tmp_path / "page.html").read_text()
    assert "<svg" in page
    assert "<script" not in page
    assert "http" not in page.replace("http://www.w3.org/", "").replace('http-equiv="Content-Security-Policy"', "")
    table = pd.read_parquet(tmp_path / "records.parquet")
    assert list(table.columns[:6]) == ["batch", "fault", "size", "try", "series_hit", "began"]
    assert table["record_id"].is_unique
    assert set(table["fault"].dropna()) == {"shuffled", "delivered out of order"}
    assert table["fault"].isna().sum() == 4 * 8 * 2
    ended = here.sercheck(*usual, "--format", "json", "--max-false-holds", "0", "--min-caught", "1")
    assert ended.status == 1
    told = json.loads(ended.out)
    assert {"batches", "false_holds", "false_holds_interval", "budget", "rules", "faults"} <= told.keys()
    assert {"fault", "size", "tried", "caught", "median_delay", "caught_by", "cause_right"} <= told["faults"][0].keys()
    assert {"rule", "false_holds", "undecided"} <= told["rules"][0].keys()
    assert len(told["targets_missed"]) == 1
    assert here.sercheck(*usual, "--faults", "nothing").status == 2
    assert here.sercheck(*usual, "--sizes", "x").status == 2


def test_what_one_half_tells_covers_the_other():
    """Forty simulated feeds, a small version of ``python -m tests.rehearsed``: both intervals cover 90 % and more."""
    seen = halves("ar0.6", 3, 14, 40, "20 per 90D")
    mean, following, _ = coverage(seen)
    assert sum(one.first + one.second for one in seen) > 40
    assert mean >= 0.9
    assert following >= 0.9
