"""Numbers for other systems, read by a parser of the format that is not ours."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime

import gate_runs
import numpy as np
import pytest
from prometheus_client.openmetrics.parser import text_string_to_metric_families
from record_samples import records

from sercheck.counted import Facts
from sercheck.metrics import metrics
from sercheck.verdict import Verdict

HOSTILE = 'a\\n"b"\n{c="d"}\r\x00\u2028 # EOF\ud800' + "e" * 10_000


@pytest.fixture
def place(tmp_path, capsys, monkeypatch):
    """A folder with rules, a healthy batch and one whose hours are all alike."""
    made = gate_runs.place(tmp_path, capsys, monkeypatch)
    made.write("stuck.csv", gate_runs.with_values(lambda values: values * 0 + 7))
    return made


def read(text: str) -> dict[str, dict[tuple[str, ...], float]]:
    """Samples by name, then by the values of their labels without the feed's."""
    assert text.endswith("# EOF\n")
    found: dict[str, dict[tuple[str, ...], float]] = {}
    for family in text_string_to_metric_families(text):
        assert family.documentation
        for sample in family.samples:
            labels = tuple(value for name, value in sample.labels.items() if name != "feed")
            assert labels not in found.setdefault(sample.name, {})
            found[sample.name][labels] = sample.value
    return found


def verdict(**changes) -> Verdict:
    """A held batch of made-up records."""
    made = Verdict("held", "heat-1", "heat", records(6), Facts("2026-01-12T00:00:00Z", "2026-01-12T23:00:00Z", 144, 6))
    return replace(made, **changes)


def test_the_counts_of_the_ledger_grow_and_the_rest_is_of_the_last_batch(place):
    """Two batches, the second twice: three judgements would be wrong, two are right."""
    for file in ("stuck.csv", "batch.csv", "batch.csv"):
        assert place.gate(file, "--metrics", "numbers.txt").status in (0, 1)
    seen = read((place.folder / "numbers.txt").read_text())
    assert seen["sercheck_batches_total"] == {("held",): 1, ("released",): 1}
    failures = seen["sercheck_failures_total"]
    assert failures[("never flat",)] == 1
    assert failures[("no hour twice",)] == 0
    assert seen["sercheck_held"] == {(): 0}
    assert seen["sercheck_records"][("fail",)] == 0
    assert (seen["sercheck_rows"], seen["sercheck_series"]) == ({(): 48}, {(): 2})
    assert 0 < seen["sercheck_judging_seconds"][()] < 60
    assert 1 < seen["sercheck_effective_sample_size"][("level as usual",)] < 1000
    newest = datetime.fromtimestamp(seen["sercheck_newest_row_timestamp_seconds"][()], UTC)
    assert newest == datetime(2026, 3, 10, 23, tzinfo=UTC)
    assert seen["sercheck_judged_timestamp_seconds"] == {(): datetime.fromisoformat(gate_runs.NOW).timestamp()}
    assert seen["sercheck_build_info"]


def test_a_run_that_keeps_nothing_counts_its_own_batch(place):
    """Without a ledger the counters are those of the batch."""
    assert place.gate("stuck.csv", "--no-keep", "--metrics", "numbers.txt").status == 1
    seen = read((place.folder / "numbers.txt").read_text())
    assert seen["sercheck_batches_total"] == {("held",): 1, ("released",): 0}
    assert seen["sercheck_failures_total"][("never flat",)] == 1
    assert seen["sercheck_held"] == {(): 1}
    assert not (place.folder / ".sercheck").exists()


def test_hostile_names_are_one_label():
    """Quotes, braces, line breaks, controls and half letters in a name neither end a line nor a label."""
    seen = read(metrics(verdict(feed=HOSTILE, table=records(6, rule=HOSTILE)), None))
    ((rule,),) = seen["sercheck_failures_total"]
    assert rule.startswith('a\\n"b"\n{c="d"}\r')
    assert rule.endswith("e" * 10_000)


def test_what_is_not_known_is_left_out():
    """No effective size is no sample, never a NaN or a stand-in."""
    seen = read(metrics(verdict(table=records(6, n_eff=np.full(6, np.nan))), None))
    assert seen.get("sercheck_effective_sample_size", {}) == {}
    assert seen["sercheck_records"][("fail",)] == 2


def test_a_file_that_cannot_be_written_is_told_before_the_work(place):
    """A missing folder is one sentence and no judgement; an older file is replaced whole."""
    assert "no folder" in gate_runs.one_sentence(place.gate("batch.csv", "--metrics", "nowhere/numbers.txt"))
    assert not (place.folder / ".sercheck").exists()
    old = place.folder / "numbers.txt"
    old.write_text("old\n" * 10_000)
    number = old.stat().st_ino
    place.gate("batch.csv", "--metrics", "numbers.txt")
    assert old.stat().st_ino != number
    assert "old" not in read(old.read_text())
    assert not any(name.endswith(".tmp") for name in place.files)
