from __future__ import annotations

import io
import json
import math
import pickle
import subprocess
import sys
import time
from hashlib import blake2b

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet as pq
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from record_samples import TEXTS, alike, records

from sercheck.errors import OutputError
from sercheck.record import COLUMNS, INTEGERS, NUMBERS, Records, check_suffix, record_ids, storable, utc_text
from sercheck.store.database import Database
from sercheck.store.ledger import Ledger
from sercheck.store.rows import BatchRow, JudgementRow

HOSTILE = [
    "", " ", "null", "NaN", 'a "quoted" one', "a,b;c\td", "two\nlines", "two\r\nlines", "\r", "<script>&amp;",
    "%s %d %%", "\x00", "a\x00b", "\x1b[31mred\x1b[0m", "\x85\u2028\u2029", "\ud800", "x\udc80y", "=1+1",
    "'; DROP TABLE records; --", "\u202eleft", "Å ø 漢字 🌡", "x" * 10_000, "\\", "{}", "\ufeff",
]  # fmt: skip
texts = st.none() | st.sampled_from(HOSTILE) | st.text(max_size=12) | st.text(st.characters(), max_size=5)
floats = st.none() | st.floats(allow_nan=True, allow_infinity=True)
whole = st.none() | st.integers(-(2**53), 2**53)


@st.composite
def hostile_records(draw: st.DrawFn) -> Records:
    """Some records with anything in every column that a measure or a feed could put there."""
    size = draw(st.integers(1, 4))
    kinds = {name: whole if name in INTEGERS else floats if name in NUMBERS else texts for name in COLUMNS}
    columns = {name: draw(st.lists(kind, min_size=size, max_size=size)) for name, kind in kinds.items()}
    columns["record_id"] = [f"{number:032x}" for number in range(size)]
    columns["batch_id"] = ["b-1"] * size
    return Records(columns)


everywhere = Records({name: None if name in INTEGERS | NUMBERS else HOSTILE for name in COLUMNS}).changed(
    record_id=[f"{number:032x}" for number in range(len(HOSTILE))], batch_id="b-1"
)


@settings(max_examples=15, deadline=None)
@example(found=everywhere)
@given(found=hostile_records())
def test_every_format_and_the_ledger_give_back_what_was_written(found, tmp_path_factory):
    """JSON lines, CSV, Parquet and SQLite hold exactly the same records, whatever is in them."""
    folder = tmp_path_factory.mktemp("out")
    rows = list(found.rows())
    for suffix in ("jsonl", "csv", "parquet"):
        found.write(folder / f"r.{suffix}")
    lines = (folder / "r.jsonl").read_bytes().split(b"\n")
    assert [json.loads(line) for line in lines[:-1]] == rows
    assert lines[-1] == b""
    assert pq.read_table(folder / "r.parquet").to_pylist() == rows
    kinds = {n: pa.int64() if n in INTEGERS else pa.float64() if n in NUMBERS else pa.string() for n in COLUMNS}
    convert = pa.csv.ConvertOptions(
        column_types=kinds, strings_can_be_null=True, quoted_strings_can_be_null=False, null_values=[""]
    )
    parse = pa.csv.ParseOptions(newlines_in_values=True)
    assert pa.csv.read_csv(folder / "r.csv", convert_options=convert, parse_options=parse).to_pylist() == rows
    ledger = Ledger(Database(None, folder / "ledger.sqlite"))
    judgement = JudgementRow("b-1", "r", None, "held", "2026-01-01T00:00:00Z", "", "0.1.0")
    ledger.add(BatchRow("b-1", "feed", "f", None, None, 0, 0), judgement, found)
    assert list(ledger.records("b-1").rows()) == rows


def test_a_frame_has_nullable_types_and_the_same_values():
    """A DataFrame keeps whole numbers whole and null apart from numbers."""
    frame = records(6, lag=[1, None, 2, None, 3, 4], p_value=[0.1, None, math.nan, math.inf, 0.5, 1]).to_frame()
    assert list(frame.columns) == list(COLUMNS)
    assert frame["lag"].dtype == pd.Int64Dtype()
    assert frame["lag"].tolist() == [1, pd.NA, 2, pd.NA, 3, 4]
    assert frame["p_value"].isna().tolist() == [False, True, True, True, False, False]
    assert frame["series"].dtype == pd.StringDtype()


def test_rows_never_hold_nan():
    """Null is None in plain rows, for numbers, whole numbers and texts alike."""
    row = next(Records(dict.fromkeys(COLUMNS, None)).rows())
    assert list(row) == list(COLUMNS)
    assert set(row.values()) == {None}
    assert next(records(1, observed=[math.nan]).rows())["observed"] is None


def test_json_numbers_read_back_exactly(tmp_path):
    """A float is written so that the same float is read."""
    awkward = [0.1 + 0.2, 5e-324, 1.7976931348623157e308, 1 / 3, -1e-5, 123456789012345680.0]
    records(6, observed=awkward).write(tmp_path / "r.jsonl")
    assert [json.loads(line)["observed"] for line in (tmp_path / "r.jsonl").read_text().splitlines()] == awkward


def test_what_no_file_can_hold_is_shown_as_its_escape():
    """Lone surrogates and NUL become visible escapes, and two such names stay two names."""
    found = records(2, series=["a\udc80", "a\udc81"])
    assert found["series"].tolist() == ["a\\udc80", "a\\udc81"]
    assert storable("a\x00b") == "a\\x00b"


def test_lines_end_only_where_records_end(tmp_path):
    """No separator that some readers take for the end of a line stands unescaped in JSON lines."""
    records(1, series="a\x85b\u2028c\u2029d\x0be\x1cf\x9b31m").write(tmp_path / "r.jsonl")
    text = (tmp_path / "r.jsonl").read_text()
    assert len(text.splitlines()) == 1
    assert "\x9b" not in text


def test_columns_are_checked():
    """A missing column, other lengths, text for a number and a broken whole number are errors of the program."""
    good = records(2).columns
    with pytest.raises(ValueError, match="outcome"):
        Records({name: column for name, column in good.items() if name != "outcome"})
    with pytest.raises(ValueError, match="lengths"):
        Records({**good, "lag": [1, 2, 3]})
    with pytest.raises(ValueError, match="observed wants numbers"):
        Records({**good, "observed": ["x", "y"]})
    with pytest.raises(ValueError, match="lag wants whole numbers"):
        Records({**good, "lag": [1.5, 2]})
    with pytest.raises(ValueError, match="series wants text"):
        Records({**good, "series": [1, 2]})


def test_records_cannot_be_changed():
    """Columns are read-only, those with one value for all too, and what was given in stays as it was."""
    given_in = np.array([1.0, np.inf])
    found = records(2, observed=given_in)
    for column in found.columns.values():
        with pytest.raises(ValueError, match="read-only"):
            column[0] = column[1]
    assert given_in.tolist() == [1.0, math.inf]
    assert alike(pickle.loads(pickle.dumps(found)), found)


def test_concat_and_take_keep_order_and_values():
    """Parts joined and cut again are what they were."""
    one, other = records(4), records(3, batch_id="heat-0113-beef", action="hold")
    both = Records.concat([one, Records.empty(), other])
    assert len(both) == 7
    assert alike(both.take(slice(0, 4)), one)
    assert alike(both.take(np.array([4, 5, 6])), other)
    assert alike(both.take(both["batch_id"] == "heat-0112-abcd"), one)
    assert len(both.take(slice(0, 0))) == 0
    assert len(Records.concat([])) == 0
    assert both["feed"].strides == (0,)


def test_rows_where_picks_by_value():
    """Rows of one outcome come in order."""
    assert [row["series"] for row in records(7).rows_where("outcome", "fail")] == ["s0", "s3", "s6"]
    assert records(7).counts() == {"pass": 3, "fail": 3, "undecided": 1}


@pytest.mark.parametrize("suffix", ["jsonl", "csv", "parquet"])
def test_no_records_make_a_valid_empty_file(tmp_path, suffix):
    """A file of no records can be read."""
    Records.empty().write(tmp_path / f"r.{suffix}")
    read = {"jsonl": lambda p: p.read_text().splitlines(), "csv": pd.read_csv, "parquet": pd.read_parquet}[suffix]
    assert len(read(tmp_path / f"r.{suffix}")) == 0


def test_records_that_all_agree_are_written_one_by_one(tmp_path):
    """When every column holds one value there is still a line for each record."""
    Records({**dict.fromkeys(COLUMNS), "series": ["100%"]}).write(tmp_path / "one.jsonl")
    same = Records({name: np.broadcast_to(column[:1], (3,)) for name, column in records(1).columns.items()})
    same.write(tmp_path / "three.csv")
    assert json.loads((tmp_path / "one.jsonl").read_text())["series"] == "100%"
    assert len((tmp_path / "three.csv").read_text().splitlines()) == 4


def test_stdout_and_streams_get_json_lines(capsysbinary):
    """A dash means JSON lines on stdout in UTF-8, a stream gets the same or CSV."""
    found = records(2, series="Grünerløkka")
    found.write("-")
    lines = capsysbinary.readouterr().out.decode("utf-8").splitlines()
    assert [json.loads(line) for line in lines] == list(found.rows())
    stream = io.StringIO()
    found.write(stream, "csv")
    assert stream.getvalue().splitlines()[0] == ",".join(COLUMNS)


def test_a_reader_that_goes_away_is_an_output_error():
    """A closed pipe is told in one sentence and is not mistaken for a decision."""
    code = (
        "import sys; sys.path.insert(0, 'tests')\n"
        "from record_samples import records\nfrom sercheck.errors import OutputError\nimport os\n"
        "try: records(30000).write('-')\n"
        "except OutputError as error: print(error, file=sys.stderr); sys.stderr.flush(); os._exit(2)\n"
    )
    process = subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE, stderr=subprocess.PIPE)
    process.stdout.readline()
    process.stdout.close()
    message = process.stderr.read().decode()
    process.stderr.close()
    assert process.wait() == 2
    assert "closed the pipe" in message


@pytest.mark.parametrize(
    "name, said",
    [("r.txt", "suffix '.txt' names no format"), ("r", "no suffix"), ("gone/r.csv", "no folder"), (".", "no suffix")],
)
def test_a_bad_name_is_told_in_one_sentence(tmp_path, name, said):
    """An unknown suffix and a missing folder are output errors that name the file, and nothing is left behind."""
    with pytest.raises(OutputError, match=said):
        records(2).write(tmp_path / name)
    assert list(tmp_path.iterdir()) == []


def test_a_suffix_is_read_whatever_its_case():
    """The suffix says the format in any case."""
    assert check_suffix("R.PARQUET") == ".parquet"


def test_ids_are_stable_and_tell_records_apart():
    """The same parts give the same id on any machine; any other part gives another."""
    parts = ("f", "r", ["rule"], ["kwh"], ["s1"], [1], "base")
    base = record_ids(*parts)[0]
    assert base == blake2b(b"1:f;1:r;4:base;4:rule;3:kwh;2:s1;1", digest_size=16).hexdigest()
    for place, other in enumerate(["g", "s", ["other"], [None], ["s2"], [None], None]):
        assert record_ids(*parts[:place], other, *parts[place + 1 :])[0] != base
    assert len(set(record_ids("f", "r", ["a", "ab"], ["bc", "c"], ["x", "x"], [1, 1], None))) == 2


def test_utc_text_is_rfc_3339():
    """Nanoseconds become UTC text, with a fraction only where there is one."""
    texts = utc_text(np.array([0, 1_500_000_000, -1, np.iinfo(np.int64).min]))
    assert texts.tolist() == ["1970-01-01T00:00:00Z", "1970-01-01T00:00:01.5Z", "1969-12-31T23:59:59.999999999Z", None]
    assert utc_text(1_768_176_000_000_000_000).tolist() == ["2026-01-12T00:00:00Z"]


def test_importing_the_record_pays_for_no_heavy_library():
    """pandas, pyarrow and SQLAlchemy wait until they are used."""
    code = (
        "import sys, sercheck.record, sercheck.outputs, sercheck.store.ledger, sercheck.cli.ledger\n"
        "print([name for name in ('pandas', 'pyarrow', 'sqlalchemy') if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


@pytest.mark.scale
def test_many_records_are_written_quickly(tmp_path):
    """400,000 records are JSON lines, CSV and Parquet in seconds of processor time."""
    found = records(400_000)
    for suffix, most in (("jsonl", 8.0), ("csv", 8.0), ("parquet", 3.0)):
        start = time.process_time()
        found.write(tmp_path / f"r.{suffix}")
        assert time.process_time() - start < most, suffix


def test_text_columns_are_all_that_are_not_numbers():
    """Every column is of exactly one kind."""
    assert set(TEXTS) | INTEGERS | NUMBERS == set(COLUMNS)
    assert not INTEGERS & NUMBERS


def test_records_print_as_one_line():
    """A verdict at the prompt does not fill the screen with arrays."""
    found = Records.concat([records(3, outcome="pass"), records(2, outcome="fail")])
    assert repr(found) == "Records(5 rows: 3 pass, 2 fail, 0 undecided)"
    assert repr(Records.empty()) == "Records(0 rows: 0 pass, 0 fail, 0 undecided)"
