"""One batch straight through: files or frames to a decision, records that agree everywhere, harmless repeats."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from decimal import Decimal
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from gate_runs import Place, place

import sercheck
from sercheck.record import COLUMNS, INTEGERS, NUMBERS

ROOT = Path(__file__).parent.parent
RULES = ROOT / "rules" / "substation_heat.yaml"
HISTORY = ROOT / "demo_data" / "history.csv.gz"
BATCHES = ROOT / "demo_data" / "batches"
NOW = "2026-01-20T06:00:00Z"
LATER = "2026-01-20T09:00:00Z"

EXAMPLE = (ROOT / "tests" / "documented_rules.yaml").read_text()
"""The rule file that the documentation shows."""


@pytest.fixture
def here(tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> Place:
    """An empty store and the command line."""
    return place(tmp_path, capsys, monkeypatch)


def demo(here: Place, name: str, *more: str) -> tuple[int, str, str]:
    """Gate a batch of the demo: exit status, stdout, stderr."""
    when = () if "--as-of" in more else ("--as-of", NOW)
    ended = here.sercheck("gate", str(RULES), str(BATCHES / f"{name}.csv"), "--history", str(HISTORY), *when, *more)
    return ended.status, ended.out, ended.err


def judged(batch: object, history: object = HISTORY, rules: object = RULES) -> pd.DataFrame:
    """The records of a batch, judged in Python."""
    return sercheck.gate(rules, batch, history=history, as_of=NOW).records  # type: ignore[arg-type]


@pytest.fixture(scope="module")
def healthy() -> pd.DataFrame:
    """The healthy batch of the demo."""
    return pd.read_csv(BATCHES / "healthy.csv")


@pytest.fixture(scope="module")
def past() -> pd.DataFrame:
    """Its history, read once."""
    return pd.read_csv(HISTORY)


@pytest.fixture(scope="module")
def usual(healthy: pd.DataFrame, past: pd.DataFrame) -> pd.DataFrame:
    """Its records."""
    return judged(healthy, past)


def test_the_healthy_batch_is_released(here: Place) -> None:
    """Exit status 0, the answer on stderr, nothing on stdout, the judgement in the ledger."""
    status, out, err = demo(here, "healthy")
    assert (status, out) == (0, "")
    assert err.startswith(
        "RELEASED  substation_heat, 2026-01-19 00:00 to 2026-01-19 23:00 Europe/Oslo, 12 series, 288 rows"
    )
    (kept,) = here.sercheck("ledger", "batches", "--format", "json").out.splitlines()
    assert json.loads(kept)["decision"] == "released"


@pytest.mark.parametrize(
    ("name", "rules"),
    [
        ("shuffled", ("hourly steps remember what they always did", "spread as usual")),
        ("filled_forward", ("no meter is stuck", "readings seldom repeat the one before")),
        ("stuck", ("no meter is stuck",)),
        ("noise_instead", ("hourly steps remember what they always did", "spread as usual")),
        ("rows_twice", ("readings seldom repeat the one before", "no meter is stuck")),
    ],
)
def test_a_broken_batch_is_held(here: Place, name: str, rules: tuple[str, ...]) -> None:
    """Exit status 1; a rule that is about this fault holds it and says in one sentence what it saw."""
    status, out, _ = demo(here, name, "--no-keep", "--format", "json")
    told = json.loads(out)
    assert (status, told["decision"]) == (1, "held")
    held = [record for record in told["failed"] if record["action"] == "hold"]
    assert set(rules) & {record["rule"] for record in held}
    for record in held:
        assert record["reason"].count("\n") == 0
        assert " the limit " in record["reason"] or " the bound " in record["reason"]


def test_the_answer_names_rule_series_and_numbers(here: Place) -> None:
    """The screen tells which rule held the batch, for which series, with observation, limit and what to do."""
    _, _, err = demo(here, "stuck", "--no-keep")
    assert err.startswith("HELD  substation_heat")
    assert "  failed: no meter is stuck (12 records)\n" in err
    assert "repeats (run) of kwh is 9, above the limit" in err
    assert "A reading repeated for hours is a dead meter or a gateway that sends its last value." in err


def test_json_for_programs(here: Place) -> None:
    """`--format json` is one object with the documented keys; every failed record has all columns and no stand-in."""
    _, out, err = demo(here, "stuck", "--no-keep", "--format", "json")
    assert err == ""
    told = json.loads(out, parse_constant=lambda name: pytest.fail(f"{name} is no JSON"))
    assert {"decision", "batch_id", "counts", "failed", "false_holds_expected"} <= set(told)
    assert set(told["counts"]) == {"pass", "fail", "undecided"}
    assert told["counts"]["fail"] == len(told["failed"]) > 0
    assert told["false_holds_expected"] == {"per": "90D", "count": pytest.approx(1.0)}
    assert "1 × 1D / 90D = 0.0111" in told["alarm_budget"][0]
    assert all(tuple(record) == COLUMNS for record in told["failed"])


def read(path: Path) -> pd.DataFrame:
    """Records of any format as a frame of plain types, in the order of their ids."""
    if path.suffix == ".jsonl":
        rows = pd.DataFrame([json.loads(line) for line in path.read_text().splitlines()])
    elif path.suffix == ".csv":
        rows = pd.read_csv(path, dtype={name: str for name in COLUMNS if name not in NUMBERS | INTEGERS})
    else:
        rows = pq.read_table(path).to_pandas()
    return plain(rows)


def plain(rows: pd.DataFrame) -> pd.DataFrame:
    """The same with floats for numbers and None for no text, in the order of ids."""
    texts = rows.astype(object).where(rows.notna(), None)
    columns = {
        name: rows[name].astype("float64") if name in NUMBERS | INTEGERS else texts[name] for name in rows.columns
    }
    return pd.DataFrame(columns).sort_values("record_id", ignore_index=True)


def test_records_are_the_same_everywhere(here: Place, healthy: pd.DataFrame, past: pd.DataFrame) -> None:
    """JSON lines, CSV, Parquet, stdout, the ledger and the frame in Python have the same columns and values."""
    _, out, _ = demo(here, "stuck", "--records", "-")
    here.write("stdout.jsonl", out)
    for suffix in (".jsonl", ".csv", ".parquet"):
        assert demo(here, "stuck", "--records", f"r{suffix}")[0] == 1
    for name, form in (("ledger.jsonl", "json"), ("ledger.csv", "csv")):
        here.write(name, here.sercheck("ledger", "records", "--format", form).out)
    wanted = plain(judged(pd.read_csv(BATCHES / "stuck.csv"), past))
    assert tuple(wanted.columns) == COLUMNS
    assert len(wanted) > 100
    for path in ("stdout.jsonl", "r.jsonl", "r.csv", "r.parquet", "ledger.jsonl", "ledger.csv"):
        pd.testing.assert_frame_equal(read(here.folder / path), wanted, check_exact=True, obj=path)


def test_judged_again_changes_nothing(here: Place) -> None:
    """A repeat at a later hour gives the same answer and leaves the ledger as it was; the screen says so."""
    first = demo(here, "stuck", "--records", "r.jsonl")
    kept = (here.folder / ".sercheck" / "ledger.sqlite").read_bytes()
    records = (here.folder / "r.jsonl").read_bytes()
    again = demo(here, "stuck", "--records", "r.jsonl", "--as-of", LATER)
    assert again[0] == first[0] == 1
    assert f"judged by these rules before, at {NOW}; that judgement stands" in again[2].replace("\n      ", " ")
    assert (here.folder / "r.jsonl").read_bytes() == records
    assert (here.folder / ".sercheck" / "ledger.sqlite").read_bytes() == kept


def test_no_keep_writes_nothing(here: Place) -> None:
    """With `--no-keep` there is no store afterwards."""
    before = here.files
    assert demo(here, "healthy", "--no-keep")[0] == 0
    assert here.files == before


@pytest.mark.parametrize(("name", "option", "other"), [("healthy", "released", "held"), ("stuck", "held", "released")])
def test_the_batch_is_moved_where_it_belongs(here: Place, name: str, option: str, other: str) -> None:
    """Released and held batches go to their own folders once; a repeat by the same name finds them moved."""
    here.write("today.csv", (BATCHES / f"{name}.csv").read_bytes())
    command = (
        "gate", str(RULES), "today.csv", "--history", str(HISTORY), "--as-of", NOW,
        "--released-to", "released", "--held-to", "held",
    )  # fmt: skip
    status = here.sercheck(*command).status
    assert (here.folder / option / "today.csv").read_bytes() == (BATCHES / f"{name}.csv").read_bytes()
    assert not (here.folder / other).exists()
    assert not (here.folder / "today.csv").exists()
    here.write("today.csv", (BATCHES / f"{name}.csv").read_bytes())
    assert here.sercheck(*command).status == status
    assert [path.name for path in (here.folder / option).iterdir()] == ["today.csv"]
    assert here.sercheck("ledger", "batches", "--format", "json").out.count("\n") == 1


def test_the_move_comes_after_the_ledger(here: Place, monkeypatch: pytest.MonkeyPatch) -> None:
    """When a batch is moved, its decision is stored already; when it cannot be stored, it stays."""
    here.write("today.csv", (BATCHES / "healthy.csv").read_bytes())
    seen = []

    def look(paths: tuple[str, ...], folder: str) -> None:
        from sercheck.store.ledger import open_ledger

        with open_ledger(".sercheck", None) as ledger:
            seen.append([each.last.decision for each in ledger.batches()])

    monkeypatch.setattr("sercheck.outputs.move_batch", look)
    command = ("gate", str(RULES), "today.csv", "--history", str(HISTORY), "--as-of", NOW, "--released-to", "out")
    assert here.sercheck(*command).status == 0
    assert seen == [["released"]]
    assert here.sercheck(*command, "--store", "today.csv").status == 2
    assert len(seen) == 1


def test_the_python_example(monkeypatch: pytest.MonkeyPatch, healthy: pd.DataFrame, past: pd.DataFrame) -> None:
    """The lines that the documentation shows run as written."""
    monkeypatch.chdir(ROOT)
    batch_frame, history_frame = healthy.copy(), past.copy()
    rules = sercheck.load_rules("rules/substation_heat.yaml")
    verdict = sercheck.gate(rules, batch_frame, history=history_frame)
    assert verdict.decision == "released"
    assert tuple(verdict.records.columns) == COLUMNS
    verdict.raise_if_held()
    pd.testing.assert_frame_equal(batch_frame, healthy)
    pd.testing.assert_frame_equal(history_frame, past)


def test_a_held_batch_raises_in_a_pipeline(past: pd.DataFrame) -> None:
    """`raise_if_held` stops a pipeline step with the batch, the feed and the reasons."""
    verdict = sercheck.gate(RULES, BATCHES / "stuck.csv", history=past, as_of=NOW)
    assert verdict.decision == "held"
    with pytest.raises(sercheck.BatchHeld, match=r"of substation_heat: held: .*kwh.*more") as caught:
        verdict.raise_if_held()
    assert verdict.batch_id in str(caught.value)
    assert isinstance(caught.value, sercheck.SercheckError)


def test_ids_tell_records_apart(usual: pd.DataFrame, healthy: pd.DataFrame, past: pd.DataFrame) -> None:
    """Ids are the same for the same batch, rules and history; they differ by each of those, by rule, series and lag."""
    assert usual["record_id"].is_unique
    assert len(usual) == len(usual[["rule", "column", "series", "lag"]].drop_duplicates())
    again = judged(healthy, past)
    assert again["record_id"].tolist() == usual["record_id"].tolist()
    ids = set(usual["record_id"])
    changed = healthy.assign(kwh=healthy["kwh"].where(healthy.index > 0, 1.0))
    shorter = past.iloc[12:]
    stricter = sercheck.load_rules(RULES.read_text().replace("below: 0.4", "below: 0.3"))
    for other in (judged(changed, past), judged(healthy, shorter), judged(healthy, past, stricter)):
        assert not ids & set(other["record_id"])


def lines(rows: pd.DataFrame, path: Path) -> None:
    """The rows as JSON lines."""
    rows.to_json(path, orient="records", lines=True)


def columnar(rows: pd.DataFrame, path: Path) -> None:
    """The rows as Parquet with real stamps."""
    stamps = pd.to_datetime(rows["read_at"], utc=True)
    pq.write_table(pa.Table.from_pandas(rows.assign(read_at=stamps), preserve_index=False), path)


def csv(rows: pd.DataFrame, path: Path) -> None:
    """The rows as CSV."""
    rows.to_csv(path, index=False)


def three(rows: pd.DataFrame, folder: Path) -> list[str]:
    """The rows in three files, each of another format, cut within an hour."""
    names = [folder / "1.csv", folder / "2.parquet", folder / "3.jsonl"]
    for part, name, write in zip(np.array_split(np.arange(len(rows)), 3), names, (csv, columnar, lines), strict=True):
        write(rows.iloc[part], name)
    return [str(name) for name in names]


def one(write: Callable[[pd.DataFrame, Path], None], name: str) -> Callable[[pd.DataFrame, Path], str]:
    """The rows in one file."""

    def make(rows: pd.DataFrame, folder: Path) -> str:
        write(rows, folder / name)
        return str(folder / name)

    return make


FORMS: dict[str, Callable[[pd.DataFrame, Path], object]] = {
    "frame": lambda rows, _: rows,
    "frame with stamps": lambda rows, _: rows.assign(read_at=pd.to_datetime(rows["read_at"], utc=True)),
    "frame with local stamps": lambda rows, _: rows.assign(
        read_at=pd.to_datetime(rows["read_at"], utc=True).dt.tz_convert("Europe/Oslo").dt.tz_localize(None)
    ),
    "frame with an index": lambda rows, _: rows.set_index(["read_at", "substation"]),
    "shuffled": lambda rows, _: rows.sample(frac=1, random_state=3),
    "csv": one(csv, "b.csv"),
    "gzip": one(csv, "b.csv.gz"),
    "parquet": one(columnar, "b.parquet"),
    "json lines": one(lines, "b.jsonl"),
    "three files": three,
    "a glob": lambda rows, folder: [three(rows, folder), str(folder / "[1-3].*")][1],
    "further columns": lambda rows, _: rows.assign(note="x", kwh_old=1.0)[["note", "kwh", "substation", "read_at"]],
    "categories": lambda rows, _: rows.astype({"substation": "category"}),
}  # fmt: skip


@pytest.mark.parametrize("form", FORMS)
def test_the_same_rows_give_the_same_records(
    tmp_path: Path, usual: pd.DataFrame, healthy: pd.DataFrame, past: pd.DataFrame, form: str
) -> None:
    """Whatever the format, the order of rows and the number of files: not a bit of a record differs."""
    got = judged(FORMS[form](healthy, tmp_path), past)
    pd.testing.assert_frame_equal(got, usual, check_exact=True)


def test_history_may_come_in_any_form(
    tmp_path: Path, usual: pd.DataFrame, healthy: pd.DataFrame, past: pd.DataFrame
) -> None:
    """History in key-sorted Parquet gives the same records, baseline id included."""
    stamped = past.assign(read_at=pd.to_datetime(past["read_at"], utc=True))
    ordered = stamped.sort_values(["substation", "read_at"])
    pq.write_table(pa.Table.from_pandas(ordered, preserve_index=False), tmp_path / "past.parquet", row_group_size=5_000)
    got = judged(healthy, tmp_path / "past.parquet")
    pd.testing.assert_frame_equal(got, usual, check_exact=True)


def parts_there() -> Iterator[str]:
    """The example's rules whose measures are built."""
    head, *rules = EXAMPLE.split("  - name: ")
    yield head
    for rule in rules:
        measure = rule.split("measure: ")[1].split("\n")[0]
        if (ROOT / "sercheck" / "measures" / f"{measure}.py").exists():
            yield f"  - name: {rule}"


def test_the_documented_rule_file_compiles_and_runs(healthy: pd.DataFrame, past: pd.DataFrame) -> None:
    """The rule file of the documentation compiles as written and judges the demo's batch."""
    book = sercheck.load_rules(EXAMPLE)
    assert book.rules[0].name == "hourly steps keep little memory"
    assert len(book.rules) == 5
    text = "".join(parts_there())
    verdict = sercheck.gate(sercheck.load_rules(text), healthy, history=past, as_of=NOW)
    assert verdict.decision == "released"
    assert verdict.records["rule"].nunique() == text.count("- name: ")


def test_an_irregular_feed_is_judged(healthy: pd.DataFrame, past: pd.DataFrame) -> None:
    """Without a cadence: what needs one is undecided, the rest is judged by order of observation."""
    rules = (
        "feed: irregular\ncolumns: {time: read_at, series: substation, values: [kwh]}\nevery: irregular\n"
        "false_alarm: 0.01\nrules:\n"
        "  - {name: level, measure: level, stays: {like: history}}\n"
        "  - {name: stuck, measure: repeats, stays: {like: history}}\n"
        "  - {name: doubles, measure: spacing, look: doubles, stays: {below: 1}}\n"
        "  - {name: gaps, measure: spacing, look: gaps, stays: {below: 1}}\n"
        "  - {name: complete, measure: completeness, stays: {above: 0.9}}\n"
        "  - {name: rows, measure: count, per: 1D, stays: {like: history}}\n"
    )
    rng = np.random.default_rng(4)

    def jittered(rows: pd.DataFrame) -> pd.DataFrame:
        late = pd.to_timedelta(rng.integers(0, 1_800, len(rows)), unit="s")
        return rows.assign(read_at=pd.to_datetime(rows["read_at"], utc=True) + late)

    history = jittered(past)
    told = judged(jittered(healthy), history, sercheck.load_rules(rules))
    by_rule = told.groupby("rule")["outcome"].unique().map(set)
    assert by_rule["level"] == by_rule["stuck"] == by_rule["doubles"] == {"pass"}
    assert by_rule["gaps"] == by_rule["complete"] == by_rule["rows"] == {"undecided"}
    broken = judged(jittered(pd.read_csv(BATCHES / "stuck.csv")), history, sercheck.load_rules(rules))
    assert set(broken.loc[broken["rule"] == "stuck", "outcome"]) == {"fail"}


# what is given for a batch, what the sentence says
NO_BATCH: dict[str, tuple[object, str]] = {
    "nothing": (None, "a NoneType"),
    "a number": (5, "a int"),
    "a list of frames": ([pd.DataFrame()], "a DataFrame; wanted a path"),
    "bytes": (b"batch.csv", "a int; wanted a path"),
    "a column": (pd.Series([1.0]), "a Series"),
    "an array": (np.zeros(3), "a ndarray"),
    "an empty list": ([], "no file is named"),
    "an empty frame": (pd.DataFrame(), "no column 'read_at'"),
}


@pytest.mark.parametrize("case", NO_BATCH)
def test_what_is_no_batch_is_refused(past: pd.DataFrame, case: str) -> None:
    """Python callers get one sentence about what they gave and what was wanted."""
    given, said = NO_BATCH[case]
    with pytest.raises(sercheck.SercheckError, match=said):
        sercheck.gate(RULES, given, history=past, as_of=NOW)  # type: ignore[arg-type]


def test_keys_and_numbers_that_no_file_could_hold(healthy: pd.DataFrame, past: pd.DataFrame) -> None:
    """Half a surrogate pair in a key, and whole numbers of any length, are judged and stored like others."""
    keys = healthy["substation"].astype(object).where(healthy["substation"] != "Furumo", "Furumo\ud800")
    long = [10**30 if place == 0 else kwh for place, kwh in enumerate(healthy["kwh"])]
    odd = healthy.assign(substation=keys, kwh=long)
    told = judged(odd.astype({"kwh": object}), past)
    assert "Furumo\\ud800" in set(told["series"])
    assert "Furumo" in set(told["series"])


def test_decimals_are_the_numbers_they_say(usual: pd.DataFrame, healthy: pd.DataFrame, past: pd.DataFrame) -> None:
    """A column of decimals, as databases write them, gives the records of the same digits as text."""
    decimals = healthy.assign(kwh=[Decimal(str(kwh)) for kwh in healthy["kwh"]])
    pd.testing.assert_frame_equal(judged(decimals, past), usual, check_exact=True)
