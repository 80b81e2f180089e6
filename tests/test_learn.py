"""Learning from history: facts, oddities, rules that lack history, and that a spoiled stretch spoils nothing."""

from __future__ import annotations

import io
import json
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
from feed_memory import FIRST, HOUR, RULES, wave
from gate_runs import process
from scipy.stats import chi2

from sercheck.baseline import residual
from sercheck.errors import BatchError
from sercheck.grid import Axis, Panel
from sercheck.intake.calendar import Cadence
from sercheck.intake.rows import Rows
from sercheck.intake.stream import MemorySource, open_feed
from sercheck.learn import Lessons, lacking, learn
from sercheck.rulebook import load_rules
from sercheck.serial.lag_law import history_law
from sercheck.serial.long_run import contrast_variance, cosine_spectrum, mean_contrast
from sercheck.serial.season import phase_means
from sercheck.store.archive import Archive
from sercheck.store.ledger import open_ledger
from sercheck.taught import teach
from sercheck.verdict import layout_of


@pytest.fixture
def rules(tmp_path: Path) -> Path:
    """The rule file."""
    path = tmp_path / "rules.yaml"
    path.write_text(RULES)
    return path


def lessons(rules: Path, frame: pd.DataFrame) -> Lessons:
    """What a frame teaches."""
    book = load_rules(rules)
    layout = layout_of(book)
    source = open_feed(frame, layout)
    return learn(source, book, layout, Cadence("1h").anchored(source.sample()), "2026-12-01T00:00:00Z")


def facts(found: Lessons, series: str = "a") -> dict[str, float]:
    """The facts of one series."""
    return next(row for row in found.facts.to_pylist() if row["series"] == series)


def found(told: Lessons, what: str) -> list[tuple[str, str, float]]:
    """Series, place and size of the findings of a kind."""
    return [(each.series, each.where, each.size) for each in told.findings if each.what == what]


def test_the_facts_of_a_healthy_history(rules):
    """Moments, cycle, model and autocorrelation are those of the process; nothing is odd."""
    frame = wave("2025-11-01", 112, seed=1)
    told = lessons(rules, frame)
    row = facts(told)
    x = frame[frame["key"] == "a"]["x"].to_numpy()
    assert told.seasons == ("day",)
    assert row["n"] == 112 * 24
    assert row["mean"] == pytest.approx(x.mean())
    assert row["deviation"] == pytest.approx(x.std())
    assert (row["least"], row["most"]) == (x.min(), x.max())
    assert row["skewness"] == pytest.approx(((x - x.mean()) ** 3).mean() / x.std() ** 3)
    assert row["season_share"] == pytest.approx(450 / (450 + 16 / 0.51), abs=0.02)
    assert row["ar_variance"] == pytest.approx(16, rel=0.08)
    step = np.diff(x) - np.diff(x).mean()
    assert row["autocorrelation lag 1 after difference"] == pytest.approx((step[1:] @ step[:-1]) / (step @ step))
    assert told.findings == ()


LAW = "over 24 steps"
STEP_LAW = f"lag 1 {LAW} after difference"


def history_of(x: np.ndarray) -> Panel:
    """Hours of one series that begin at midnight, all of them history."""
    T = len(x)
    step = np.arange(T)
    axis = Axis(step * HOUR, step, {"day": 24}, {"day": step % 24}, np.zeros(T, dtype=bool), np.ones(T, dtype=bool))
    return Panel(x[None], T, axis, np.ones((1, T), dtype=bool), "x")


def test_the_baseline_holds_the_seasonal_profile(rules):
    """A list of the mean of each hour of the day; without four days there is none."""
    frame = wave("2025-11-01", 112, seed=1)
    x = frame[frame["key"] == "b"]["x"].to_numpy()
    means, _ = phase_means(x[None], np.arange(len(x)) % 24, 24)
    assert facts(lessons(rules, frame), "b")["profile day"] == pytest.approx(means[0], rel=1e-12)
    short = lessons(rules, wave("2025-11-01", 3, seed=1))
    assert short.seasons == ()
    assert "profile day" not in short.facts.column_names


def test_the_baseline_holds_the_variance_of_a_window_s_mean(rules):
    """V, its degrees of freedom and n_eff are those of the cosine powers at the length of each rule's window."""
    frame = wave("2025-11-01", 112, seed=1)
    told = facts(lessons(rules, frame))
    rest = residual(history_of(frame[frame["key"] == "a"]["x"].to_numpy())).values
    spectrum = cosine_spectrum(rest)
    for n in (24, 120):
        variance, df = contrast_variance(spectrum, mean_contrast(np.ones((1, n), dtype=bool)))
        assert told[f"mean variance over {n} steps"] == pytest.approx(variance[0], rel=1e-9)
        assert told[f"mean df over {n} steps"] == pytest.approx(df[0], rel=1e-9)
        assert told[f"mean n_eff over {n} steps"] == pytest.approx(rest.var() / variance[0], rel=1e-9)
        # of noise with the autocorrelation .7^k, within what so many degrees of freedom allow at a risk of .001
        apart = np.abs(np.subtract.outer(np.arange(n), np.arange(n)))
        ratio = told[f"mean variance over {n} steps"] / (16 / 0.51 * (0.7**apart).mean())
        assert chi2.ppf(0.0005, df[0]) < ratio * df[0] < chi2.ppf(0.9995, df[0])


def test_the_baseline_holds_the_law_of_the_autocorrelations(tmp_path):
    """Standard error and degrees of freedom at the rules' lags: of a batch of a day by its windows, of a long window by
    the model, whose law is normal.
    """
    path = tmp_path / "rules.yaml"
    path.write_text(
        RULES + "  - {name: days, measure: autocorrelation, lags: [1, 3], window: 10D, stays: {like: history}}\n"
    )
    frame = wave("2025-11-01", 112, seed=1)
    told = facts(lessons(path, frame))
    panel = history_of(frame[frame["key"] == "a"]["x"].to_numpy())
    steps = panel.changed(np.diff(panel.values), start=panel.start - 1, axis=panel.axis.cut(1, panel.start))
    rng = np.random.default_rng(1)
    day = history_law(residual(steps).values, rng.normal(size=(1, 24)), np.array([1]))
    assert day.by_windows.all()
    assert told[f"autocorrelation error {STEP_LAW}"] == pytest.approx(day.law.error[0, 0], rel=1e-9)
    assert told[f"autocorrelation df {STEP_LAW}"] == day.law.df[0, 0] == (112 * 24 - 1) // 24 - 1
    long = history_law(residual(panel).values, rng.normal(size=(1, 240)), np.array([1, 3]))
    assert not long.by_windows.any()
    for place, lag in enumerate((1, 3)):
        error = told[f"autocorrelation error lag {lag} over 240 steps"]
        assert error == pytest.approx(long.law.error[0, place], rel=1e-9)
        assert told[f"autocorrelation df lag {lag} over 240 steps"] == np.inf


def test_too_short_a_history_has_no_laws(rules):
    """Seven days hold fewer than eight windows of a day; eight hold enough for the mean, nine for the steps too."""

    def empty(days: int) -> tuple[bool, bool]:
        row = facts(lessons(rules, wave("2025-11-01", days, seed=1)))
        mean = {row[f"mean {what} {LAW}"] is None for what in ("variance", "df", "n_eff")}
        steps = {row[f"autocorrelation {what} {STEP_LAW}"] is None for what in ("error", "df")}
        assert len(mean) == len(steps) == 1
        return mean.pop(), steps.pop()

    assert empty(7) == (True, True)
    assert empty(8) == (False, True)
    assert empty(9) == (False, False)


def test_laws_after_what_is_fitted_to_stretches(tmp_path):
    """Residuals of a line in each day have a law of their own; a lag beyond a quarter of the window has none."""
    path = tmp_path / "rules.yaml"
    path.write_text(
        RULES + "  - {name: bent, measure: autocorrelation, lags: [1, 7], after: detrended, stays: {like: history}}\n"
    )
    told = facts(lessons(path, wave("2025-11-01", 112, seed=1)))
    assert told[f"autocorrelation df lag 1 {LAW} after detrended"] == 111
    assert 0.1 < told[f"autocorrelation error lag 1 {LAW} after detrended"] < 0.3
    assert told[f"autocorrelation error lag 7 {LAW} after detrended"] is None


def test_the_ledger_keeps_the_baseline(rules, tmp_path):
    """Its id comes from the content: learned again from the same rows in other order and format it is the same."""
    frame = wave("2026-01-01", 60, seed=1)
    frame.to_csv(tmp_path / "past.csv", index=False)
    frame.sample(frac=1, random_state=1).to_parquet(tmp_path / "past.parquet")
    one = teach(rules, tmp_path / "past.csv", tmp_path / "store")
    other = teach(rules, tmp_path / "past.parquet", tmp_path / "store")
    row = one.lessons.baseline
    assert row.baseline_id == other.lessons.baseline.baseline_id
    assert (one.archived, one.there_before) == (2880, 0)
    assert (other.archived, other.there_before) == (0, 2880)
    with open_ledger(str(tmp_path / "store")) as ledger:
        kept = ledger.baseline("tide", row.rules_fingerprint, "2026-04-01T00:00:00Z")
        assert kept is not None
        assert kept.baseline_id == row.baseline_id
        assert kept.learned_at <= other.lessons.baseline.learned_at
        assert (kept.first_stamp, kept.last_stamp) == ("2026-01-01T00:00:00Z", "2026-03-01T23:00:00Z")
        assert ledger.baseline("tide", row.rules_fingerprint, "2026-02-01T00:00:00Z") is None
        table = pq.read_table(io.BytesIO(ledger.facts(row.baseline_id) or b""))
    assert table.column("series").to_pylist() == ["a", "b"]
    assert table.column("mean").to_pylist() == one.lessons.facts.column("mean").to_pylist()


def test_without_keep_nothing_is_written(rules, tmp_path):
    """The page can be had before anything is kept."""
    told = teach(rules, wave("2026-01-01", 60, seed=1), tmp_path / "store", keep=False)
    assert told.archived == 0
    assert not (tmp_path / "store").exists()


def spoiled(frame: pd.DataFrame, series: str, first: int, last: int, value: object) -> pd.DataFrame:
    """The frame with hours of one series changed: a value, a shift, or dropped (None)."""
    rows = frame.index[frame["key"] == series][first:last]
    if value is None:
        return frame.drop(rows)
    changed = frame.copy()
    x = changed.loc[rows, "x"]
    changed.loc[rows, "x"] = x + value if isinstance(value, int) else value
    return changed


def test_a_gap_is_told_and_spoils_nothing(rules):
    """Its length and place; the model is that of the whole history."""
    frame = wave("2025-11-01", 112, seed=1)
    told = lessons(rules, spoiled(frame, "a", 1000, 1500, None))
    assert found(told, "gap") == [("a", "2025-12-12T16:00:00Z", 500.0)]
    whole, left = facts(lessons(rules, frame)), facts(told)
    assert left["gaps"] == 1
    assert left["ar_variance"] == pytest.approx(whole["ar_variance"], rel=0.1)


def test_a_change_of_level_is_told_and_spoils_no_model(rules):
    """Where, and by how much; innovations are those of the history without it."""
    frame = wave("2025-11-01", 112, seed=1)
    told = lessons(rules, spoiled(frame, "a", 1200, 9999, 60))
    ((series, where, size),) = found(told, "level change")
    assert (series, where) == ("a", "2025-12-21T00:00:00Z")
    assert size == pytest.approx(60, abs=3)
    assert found(told, "broken stretch") == []
    assert facts(told)["ar_variance"] == pytest.approx(16, rel=0.15)


def test_a_broken_stretch_is_told_and_spoils_nothing(rules):
    """Three days stuck at zero bend neither mean nor model nor autocorrelation."""
    frame = wave("2025-11-01", 112, seed=1)
    told = lessons(rules, spoiled(frame, "a", 480, 552, 0.0))
    assert found(told, "broken stretch") == [("a", "2025-11-21T00:00:00Z", 72.0)]
    assert found(told, "stuck") == [("a", "2025-11-21T00:00:00Z", 72.0)]
    whole, left = facts(lessons(rules, frame)), facts(told)
    assert left["repeats_longest"] == 72
    for name in ("mean", "deviation", "ar_variance", "autocorrelation lag 1 after difference"):
        assert left[name] == pytest.approx(whole[name], rel=0.05)


def test_healthy_histories_have_few_changes_of_level(rules):
    """Of 200 series that wander with weather-like memory hardly one is told to have changed."""
    rng = np.random.default_rng(3)
    T = 112 * 24
    slow = np.zeros((200, T))
    shocks = rng.normal(size=(200, T))
    for step in range(1, T):
        slow[:, step] = 0.985 * slow[:, step - 1] + shocks[:, step]
    told = learned_from(rules, slow)
    assert len(found(told, "level change")) <= 4


def learned_from(rules: Path, values: np.ndarray) -> Lessons:
    """What an array of series by hours teaches."""
    S, T = values.shape
    keys = np.array([f"k{number:05d}" for number in range(S)], dtype=object)
    stamps = FIRST + np.arange(T) * HOUR
    codes = np.repeat(np.arange(S, dtype=np.int32), T)
    book = load_rules(rules)
    rows = Rows(keys, codes, np.tile(stamps, S), {"x": values.ravel()})
    layout = layout_of(book)
    return learn(MemorySource(rows, layout), book, layout, Cadence("1h", anchor=0), "2026-12-01T00:00:00Z")


def test_rules_without_enough_history_are_told_with_what_they_need(rules):
    """Twelve days do not teach a level at this risk; the same rules on 112 days lack nothing, and what was said to be
    missing is about what it takes.
    """
    book = load_rules(rules)
    layout = layout_of(book)

    def lacks(days: int) -> dict[str, int | None]:
        source = open_feed(wave("2026-01-01", days, seed=1), layout)
        return {lack.rule: lack.steps_more for lack in lacking(source, book, layout, Cadence("1h", anchor=0))}

    short = lacks(12)
    assert "level as usual" in short
    assert lacks(112) == {}
    more = short["level as usual"]
    assert more is not None
    assert "level as usual" in lacks(12 + int(0.8 * more / 24))
    assert "level as usual" not in lacks(12 + int(1.1 * more / 24) + 1)


def test_history_that_does_not_help_is_said_to_be_no_help(tmp_path):
    """A window of one row has no level, however long the history."""
    path = tmp_path / "rules.yaml"
    path.write_text(RULES.replace("stays: {like: history}}", "stays: {like: history}, window: 3}", 1))
    book = load_rules(path)
    layout = layout_of(book)
    source = open_feed(wave("2026-01-01", 60, seed=1), layout)
    (lack,) = lacking(source, book, layout, Cadence("1h", anchor=0))
    assert (lack.rule, lack.steps_more, lack.time_more) == ("level as usual", None, None)


def test_only_the_stretch_that_teaches_is_learned_all_is_archived(rules, tmp_path):
    """Of 200 days the last 112 and a little teach; `baseline: from` says otherwise."""
    past = wave("2026-01-01", 200, seed=1)
    told = teach(rules, past, tmp_path / "store")
    assert told.archived == len(past)
    assert told.lessons.baseline.first_stamp == "2026-03-30T00:00:00Z"
    rules.write_text(RULES + "baseline: {from: 2026-06-01}\n")
    assert teach(rules, past, tmp_path / "store").lessons.baseline.first_stamp == "2026-06-01T00:00:00Z"
    rules.write_text(RULES + "baseline: {from: 2027-06-01}\n")
    with pytest.raises(BatchError, match="no row of the time that teaches"):
        teach(rules, past, tmp_path / "store")


def test_the_command_tells_people_and_programs(rules, tmp_path, monkeypatch):
    """Text on stderr when stdout is no terminal, JSON on stdout; status 0."""
    monkeypatch.chdir(tmp_path)
    spoiled(wave("2026-01-01", 40, seed=1), "a", 300, 340, None).to_csv("past.csv", index=False)
    text = process("learn", "rules.yaml", "past.csv")
    assert (text.returncode, text.stdout) == (0, "")
    for words in ("LEARNED  tide", "1 series with a gap", "40 steps without a row", "holds 40 of the 112 days"):
        assert words in text.stderr
    told = json.loads(process("learn", "rules.yaml", "past.csv", "--format", "json").stdout)
    assert told["findings"][0]["what"] == "gap"
    assert told["there_before"] == 40 * 48 - 40
    assert len(told["facts"]) == 2
    for row in told["facts"]:
        assert len(row["profile day"]) == 24
        assert row[f"mean variance {LAW}"] > 0
        assert row[f"autocorrelation error {STEP_LAW}"] > 0
    assert json.loads(process("gate", "rules.yaml", "past.csv", "--format", "json", "--no-keep").stdout)["batch_id"]


def test_trouble_is_one_sentence_and_status_2(rules, tmp_path, monkeypatch):
    """No history, no rows."""
    monkeypatch.chdir(tmp_path)
    ended = process("learn", "rules.yaml", "nothing.csv")
    assert ended.returncode == 2
    assert ended.stderr.count("\n") == 1
    assert "nothing.csv" in ended.stderr


def test_blocks_of_series_teach_the_same(rules, tmp_path, monkeypatch):
    """A history read by row groups, block by block, gives the baseline of one read whole."""
    frame = wave("2026-01-01", 60, seed=1, series=[f"k{number}" for number in range(6)])
    frame["t"] = pd.to_datetime(frame["t"])
    frame.sort_values(["key", "t"]).to_parquet(tmp_path / "past.parquet", row_group_size=1500)
    whole = lessons(rules, frame)
    monkeypatch.setattr("sercheck.intake.sorted_parquet.BLOCK_ROWS", 2000)
    book = load_rules(rules)
    layout = layout_of(book)
    source = open_feed(tmp_path / "past.parquet", layout, 2000)
    assert not isinstance(source, MemorySource)
    told = learn(source, book, layout, Cadence("1h", anchor=0), "2026-12-01T00:00:00Z")
    assert told.baseline.baseline_id == whole.baseline.baseline_id
    assert told.facts.to_pylist() == whole.facts.to_pylist()


def test_a_killed_learn_is_mended_by_a_repeat(rules, tmp_path):
    """What a broken-off run left is completed, nothing is doubled."""
    past = wave("2026-01-01", 200, seed=1)
    whole = teach(rules, past, tmp_path / "one")
    archive = Archive(tmp_path / "one" / "archive", "tide")
    newest = max((archive.folder / "log").iterdir())
    newest.unlink()
    again = teach(rules, past, tmp_path / "one")
    assert again.archived + again.there_before == whole.archived
    assert 0 < again.archived < whole.archived


@pytest.mark.scale
def test_a_thousand_series_of_sixteen_weeks_are_learned_within_a_minute(rules):
    """The measured aim: under 60 s of processor time."""
    values = np.random.default_rng(1).normal(size=(1000, 112 * 24))
    begun = time.process_time()
    learned_from(rules, values)
    assert time.process_time() - begun < 60
