"""Whatever comes as a batch: a verdict, or one clear sentence and status 2; nothing is released unread."""

from __future__ import annotations

import gzip
import re
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from gate_runs import DAY, HEAD, RULES, Place, healthy, one_sentence, place, water, with_values

CLEAN = "0 of 16 records fail, 0 are undecided"


@pytest.fixture
def here(tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> Place:
    """A folder with rules, history and a healthy batch."""
    return place(tmp_path, capsys, monkeypatch)


def first_cell(value: object) -> str:
    """The healthy batch with another first value."""
    return with_values(lambda cm: cm.astype(object).where(cm.index > 0, value))


def parquet(folder: Path, rows: pd.DataFrame) -> bytes:
    """The bytes of a Parquet file."""
    pq.write_table(pa.Table.from_pandas(rows, preserve_index=False), folder / "made.parquet")
    data = (folder / "made.parquet").read_bytes()
    (folder / "made.parquet").unlink()
    return data


# name: content of the batch file, suffix, what the sentence says
TROUBLE: dict[str, tuple[str | bytes, str, str]] = {
    "empty": (b"", ".csv", "the file is empty"),
    "blank": (b"\n\n\n", ".csv", "the file is empty"),
    "only a byte order mark": (b"\xef\xbb\xbf", ".csv", "the file is empty"),
    "header only": (HEAD, ".csv", "columns and no rows"),
    "all missing": (with_values(lambda cm: ""), ".csv", "not one of its 48 rows holds a number in cm"),
    "all infinite": (with_values(lambda cm: "inf"), ".csv", "not one of its 48 rows holds a number in cm"),
    "all text": (with_values(lambda cm: "n.a."), ".csv", "a point as the decimal mark"),
    "decimal commas": (with_values(lambda cm: cm.astype(str).str.replace(".", ",")), ".csv", "point as the decimal"),
    "thousands marks": (with_values(lambda cm: "1," + cm.astype(str)), ".csv", "no mark of thousands"),
    "wrong column": (healthy().replace("cm", "CM"), ".csv", "no column 'cm'.*Did you mean 'CM'?"),
    "missing column": (healthy().replace("gauge,", "").replace("east,", ""), ".csv", "no column 'gauge'"),
    "column twice": (healthy().replace("gauge", "cm"), ".csv", "no column 'gauge'"),
    "semicolons": (healthy().replace(",", ";"), ".csv", "separated by ';'; ',' is wanted"),
    "ragged": (healthy() + "2026-03-10T05:00:00Z,east\n", ".csv", "rows of different length"),
    "too long a row": (healthy() + "2026-03-10T05:00:00Z,east,1,2,3\n", ".csv", "rows of different length"),
    "quote left open": (healthy().replace("east", '"east', 1), ".csv", "rows of different length"),
    "page of a proxy": ("<html><body>502 Bad Gateway</body></html>", ".csv", "no column 'read_at'"),
    "escape codes in the header": ("\x1b]0;owned\x07\x1b[2J,b\n1,2\n", ".csv", "no column 'read_at'"),
    "NUL bytes": (b"\0" * 4096, ".csv", "no column 'read_at'"),
    "noise": (np.random.default_rng(0).bytes(5000), ".csv", "no column 'read_at'"),
    "endless header": ("x" * 3_000_000, ".csv", "the header cannot be read"),
    "Latin-1": (healthy().replace("east", "øst").encode("latin-1"), ".csv", "not UTF-8"),
    "lone surrogate": (healthy().encode().replace(b"east", b"e\xed\xa0\x80st"), ".csv", "not UTF-8"),
    "UTF-16": (healthy().encode("utf-16"), ".csv", "UTF-16"),
    "UTF-16 without mark": (healthy().encode("utf-16-le"), ".csv", "no column 'read_at'"),
    "gz that is none": (healthy(), ".csv.gz", "not gzip"),
    "gz without its name": (gzip.compress(healthy().encode()), ".csv", "no column 'read_at'"),
    "cut gz": (gzip.compress(healthy().encode())[:-20], ".csv.gz", "breaks off"),
    "gz with a wrong sum": (gzip.compress(healthy().encode())[:-8] + bytes(8), ".csv.gz", "broken"),
    "empty gz": (gzip.compress(b""), ".csv.gz", "the file is empty"),
    "no Parquet": (healthy(), ".parquet", "not Parquet"),
    "Parquet of nothing": (b"", ".parquet", "empty|0 bytes"),
    "no JSON": ('{"read_at": ', ".jsonl", "JSON"),
    "nested JSON": ("[" * 100_000, ".jsonl", "JSON"),
    "unknown suffix": (healthy(), ".xlsx", "the suffix .xlsx tells no known format"),
    "no suffix": (healthy(), "", r"suffix \(none\)"),
    "years before the calendar": (healthy().replace("2026-", "0001-"), ".csv", "not one of 48 stamps can be read"),
    "years far ahead": (healthy().replace("2026-", "9999-"), ".csv", "not one of 48 stamps can be read"),
    "other century": (healthy().replace("2026-", "1726-"), ".csv", "from the history.*Is the year right"),
    "American dates": (healthy().replace("2026-03-10T", "03/10/2026 "), ".csv", "not one of 48 stamps"),
    "counts for stamps": (HEAD + "".join(f"{i},east,{i}\n" for i in range(24)), ".csv", "numbers such as 0"),
}


@pytest.mark.parametrize("case", TROUBLE)
def test_what_cannot_be_read_is_trouble(here: Place, case: str) -> None:
    """One sentence names the file or the batch and what is wrong with it; nothing is written, moved or released."""
    content, suffix, said = TROUBLE[case]
    batch = here.write(f"in{suffix}", content)
    before = here.files
    line = one_sentence(here.gate(batch, "--released-to", "released", "--held-to", "held"))
    assert re.search(said, line), line
    assert here.files - before <= {".sercheck/ledger.sqlite"}
    assert here.sercheck("ledger", "batches", "--format", "json").out == ""


# name: content, suffix, decision, what the screen says
VERDICTS: dict[str, tuple[str | bytes, str, int, str]] = {
    "one row": (HEAD + "2026-03-10T05:00:00Z,east,200\n", ".csv", 1, "failed: no gap"),
    "all equal": (with_values(lambda cm: 200), ".csv", 1, "failed: never flat"),
    "an infinite value": (first_cell("inf"), ".csv", 0, "1 of 48 rows hold an infinite value in cm"),
    "text in numbers": (first_cell("broken"), ".csv", 0, "1 of 48 rows hold text in place of a number in cm"),
    "a huge value": (first_cell(1e300), ".csv", 0, CLEAN),
    "a tiny value": (first_cell(1e-300), ".csv", 0, CLEAN),
    "huge values": (with_values(lambda cm: cm * 1e300), ".csv", 1, "failed: level as usual"),
    "tiny values": (with_values(lambda cm: cm * 1e-300), ".csv", 1, "failed: level as usual"),
    "smallest values": (with_values(lambda cm: 5e-324 * (cm.index % 3)), ".csv", 1, "failed: level as usual"),
    "mixed offsets": (healthy().replace("T05:00:00Z", "T07:00:00+02:00"), ".csv", 0, CLEAN),
    "stamps with and without zone": (healthy().replace("T05:00:00Z", " 05:00"), ".csv", 0, CLEAN),
    "rows twice": (healthy() + healthy().removeprefix(HEAD), ".csv", 1, "48 of 96 rows repeat an earlier row"),
    "two values for an hour": (
        healthy() + "2026-03-10T05:00:00Z,east,1\n", ".csv", 1, "1 of 49 rows stand in for an earlier row",
    ),
    "year 1": (healthy() + "0001-01-01T00:00:00Z,east,5\n", ".csv", 1, "1 of 49 rows could not be placed"),
    "year 2999": (healthy() + "2999-01-01T00:00:00Z,east,5\n", ".csv", 1, "1 of 49 rows could not be placed"),
    "year 9999": (healthy() + "9999-12-31T23:00:00Z,east,5\n", ".csv", 1, "1 of 49 rows could not be placed"),
    "year -44": (healthy() + "-0044-03-15T00:00:00Z,east,5\n", ".csv", 1, "1 of 49 rows could not be placed"),
    "a wild stamp": (healthy() + "1999-12-31T23:00:00Z,east,5\n", ".csv", 1, "1 of 49 rows could not be placed"),
    "half of it old": (
        healthy() + healthy().removeprefix(HEAD).replace("2026-", "1776-"), ".csv", 1, "48 of 96 rows could not be",
    ),
    "off the cadence": (healthy().replace(":00:00Z", ":17:00Z"), ".csv", 1, "failed: all on the clock"),
    "hour 29": (healthy().replace("T05:", "T29:"), ".csv", 1, "failed: all on the clock"),
    "a long key": (healthy().replace("east", "e" * 10_000), ".csv", 1, "failed: no gap"),
    "escape codes in a key": (healthy().replace("east", "\x1b[31mevil\x07<b>&"), ".csv", 1, "[31mevil"),
    "a line's end in a key": (healthy().replace("east", '"ea\nst"'), ".csv", 1, "ea\N{REPLACEMENT CHARACTER}st"),
    "NUL in a key": (healthy().encode().replace(b"east", b"e\0st"), ".csv", 1, r"e\x00st"),
    "SQL in a key": (healthy().replace("east", "x'); DROP TABLE records;--"), ".csv", 1, "failed: no gap"),
    "no key": (healthy().replace("east", ""), ".csv", 1, "failed: no gap"),
    "line ends of Windows": (healthy().replace("\n", "\r\n"), ".csv", 0, CLEAN),
    "line ends of old": (healthy().replace("\n", "\r"), ".csv", 0, CLEAN),
    "byte order mark": (b"\xef\xbb\xbf" + healthy().encode(), ".csv", 0, CLEAN),
    "a new series": (
        healthy() + "".join(f"2026-03-10T{h:02}:00:00Z,north,{h}\n" for h in range(24)), ".csv", 0, "undecided: level",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", VERDICTS)
def test_odd_rows_get_a_verdict(here: Place, case: str) -> None:
    """What can be read is judged; the screen says what is odd, without a control character."""
    content, suffix, status, said = VERDICTS[case]
    ended = here.gate(here.write(f"in{suffix}", content))
    assert ended.status == status, ended.err
    assert said in ended.err
    assert all(line.isprintable() for line in ended.err.splitlines())
    assert max(map(len, ended.err.splitlines())) <= 100
    assert ended.out == ""
    (kept,) = here.sercheck("ledger", "batches", "--format", "json").out.splitlines()
    assert ('"released"' in kept) == (status == 0)


def test_values_at_the_end_of_the_numbers_do_not_overflow(here: Place) -> None:
    """A batch of the largest numbers there are is held without a warning."""
    batch = here.write("in.csv", with_values(lambda cm: 1.7e308 * (-1.0) ** cm.index))
    ended = here.gate(batch)
    assert ended.status == 1
    assert "failed: level as usual" in ended.err


# name: columns to change in the frame, what the sentence says
PARQUET: dict[str, tuple[Callable[[pd.DataFrame], pd.DataFrame], str]] = {
    "stamps for values": (lambda rows: rows.assign(cm=pd.to_datetime(rows.read_at)), "of type timestamp"),
    "lists for values": (lambda rows: rows.assign(cm=[[1.0]] * len(rows)), "of type list"),
    "lists for keys": (lambda rows: rows.assign(gauge=[[1]] * len(rows)), "key column is of type list"),
    "booleans for stamps": (lambda rows: rows.assign(read_at=True), "column read_at"),
    "nulls for stamps": (lambda rows: rows.assign(read_at=None), "not one of 48 stamps"),
    "structs for stamps": (lambda rows: rows.assign(read_at=[{"a": 1}] * len(rows)), "column read_at"),
    "no rows": (lambda rows: rows.iloc[:0], "no rows"),
    "no columns": (lambda rows: rows[[]], "no column 'read_at'"),
    "nulls for values": (lambda rows: rows.assign(cm=None), "not one of its 48 rows holds a number"),
}


@pytest.mark.parametrize("case", PARQUET)
def test_parquet_of_other_types_is_trouble(here: Place, case: str) -> None:
    """A column that cannot be what the rule file says it is: one sentence names column and type."""
    change, said = PARQUET[case]
    batch = here.write("in.parquet", parquet(here.folder, change(water(DAY, 1, seed=2))))
    assert re.search(said, one_sentence(here.gate(batch)))


@pytest.mark.parametrize("share", [0.02, 0.5, 0.9, 0.999])
def test_cut_parquet_is_trouble(here: Place, share: float) -> None:
    """A file that breaks off anywhere is not judged by the part that came."""
    whole = parquet(here.folder, water(DAY, 1, seed=2))
    batch = here.write("in.parquet", whole[: int(len(whole) * share)])
    assert "in.parquet: " in one_sentence(here.gate(batch))


def test_damaged_parquet_is_trouble_or_what_it_was(here: Place) -> None:
    """Wherever a byte is turned, the batch is refused or judged, never a crash (Parquet itself has no checksum)."""
    whole = bytearray(parquet(here.folder, water(DAY, 1, seed=2)))
    rng = np.random.default_rng(5)
    for at in rng.choice(len(whole), 40, replace=False).tolist():
        turned = whole.copy()
        turned[at] ^= 0xFF
        ended = here.gate(here.write("in.parquet", bytes(turned)), "--no-keep")
        assert ended.status in (0, 1) or one_sentence(ended)


# what the batch is called, what the sentence says
NAMES: dict[str, tuple[str, str]] = {
    "a folder": (".", r"is a directory"),
    "a glob without match": ("past/*.csv", "the glob matches no file"),
    "a broken glob": ("[", "the glob matches no file"),
    "a wrong name": ("bach.csv", "no such file. Did you mean batch.csv?"),
    "a name in a missing folder": ("no/where/batch.csv", "no such file"),
    "too long a name": ("b" * 5000 + ".csv", "name too long"),
    "a name with escape codes": ("\x1b[31mred.csv", "matches no file"),
    "a name of two lines": ("a\nb.csv", "no such file"),
    "a device": ("/dev/null", "suffix"),
}


@pytest.mark.parametrize("case", NAMES)
def test_a_name_that_leads_nowhere_is_trouble(here: Place, case: str) -> None:
    """A folder, a glob without match and a missing file each get their own sentence."""
    name, said = NAMES[case]
    assert re.search(said, one_sentence(here.gate(name)), re.IGNORECASE)


def test_columns_named_like_commands(here: Place) -> None:
    """Names that mean something to a database, a shell or a regular expression are only names."""
    names = {"read_at": "select", "gauge": "x'; DROP TABLE records;--", "cm": "$(touch owned) .*[%s]"}
    columns = "columns: {time: select, series: \"x'; DROP TABLE records;--\", values: ['$(touch owned) .*[%s]']}"
    rules = here.write("in.yaml", re.sub(r"columns: .*", lambda _: columns, RULES))
    here.frame("in.csv", water(DAY, 1, seed=2).rename(columns=names))
    history = here.frame("past.csv", water(DAY - pd.Timedelta(days=40), 40, seed=1).rename(columns=names))
    assert here.gate("in.csv", rules=rules, history=history).status == 0
    told = here.sercheck("ledger", "records", "--format", "json").out
    assert told.count("$(touch owned) .*[%s]") >= 8
    assert not (here.folder / "owned").exists()


def test_a_wide_file_is_read_where_needed(here: Place) -> None:
    """Of 500 columns only three are read: broken text in the others does no harm."""
    rows = water(DAY, 1, seed=2)
    wide = pd.concat([rows, *(pd.Series('x,"y', index=rows.index, name=f"c{i}") for i in range(497))], axis=1)
    assert here.gate(here.frame("in.csv", wide)).status == 0


def test_two_million_rows_of_one_series(here: Place) -> None:
    """Four years of minutes are one batch like any other."""
    rules = here.write(
        "in.yaml",
        "feed: minutes\ncolumns: {time: read_at, values: [cm]}\nevery: 1min\nfalse_alarm: 0.001\nrules:\n"
        "  - {name: level, measure: level, of_the: mean, stays: {between: [199, 201]}}\n"
        "  - {name: memory, measure: autocorrelation, lags: [1, 2], stays: {below: 0.2}}\n"
        "  - {name: flat, measure: repeats, stays: {below: 10}}\n"
        "  - {name: gaps, measure: spacing, look: gaps, stays: {below: 1}}\n",
    )
    n = 2_000_000
    noise = np.random.default_rng(0).normal(size=n)
    rows = pd.DataFrame({"read_at": pd.date_range("2022-01-01", periods=n, freq="min", tz="UTC"), "cm": 200 + noise})
    rows.to_parquet(here.folder / "in.parquet")
    ended = here.gate("in.parquet", "--no-keep", rules=rules, history=None)
    assert ended.status == 0, ended.err
    assert "2000000 rows" in ended.err
    assert "0 of 5 records fail, 0 are undecided" in ended.err
