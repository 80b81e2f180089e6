"""Columns, cadence and zone found from the rows alone."""

import gzip
import json

import numpy as np
import pandas as pd
import pytest
from reference_values import FOLDER

from sercheck.errors import BatchError, SercheckError, UsageError
from sercheck.guess import guess
from sercheck.guess_clock import calendar_seasons


def written(folder, frame, name="rows.csv"):
    """A CSV file of the frame."""
    frame.to_csv(folder / name, index=False)
    return folder / name


def hours(n=200, zone=None, start="2026-01-01"):
    """Hourly stamps."""
    return pd.date_range(start, periods=n, freq="h", tz=zone)


def test_two_columns_are_time_and_value(tmp_path):
    """Whatever they are called, in either order."""
    path = written(tmp_path, pd.DataFrame({"a": np.arange(200) % 7 * 1.5, "b": hours()}))
    found = guess(path)
    assert (found.layout.time, found.layout.series, found.layout.values) == ("b", (), ("a",))
    assert (found.layout.every, found.layout.timezone) == ("1h", "UTC")
    assert len(found.told) == 4


def test_keys_are_found_where_stamps_repeat(tmp_path):
    """A text key, or a key of numbers, or two columns together; a constant text is no key."""
    stamps = np.repeat(hours(100), 4)
    frame = pd.DataFrame(
        {"when": stamps, "unit": "kwh", "site": list("AABB") * 100, "meter_id": [1, 2] * 200, "x": np.arange(400.0) / 3}
    )
    assert guess(written(tmp_path, frame)).layout.series == ("site", "meter_id")
    frame["name"] = list("abcd") * 100
    found = guess(written(tmp_path, frame)).layout
    assert found.series == ("name",)
    assert "x" in found.values


def test_numbers_are_a_key_only_where_they_tell_all_series_apart(tmp_path):
    """A key of numbers without a telling name; no key in two columns whose rows came twice."""
    frame = pd.DataFrame({"t": np.tile(hours(100), 3), "k": np.repeat([1, 2, 3], 100), "x": np.arange(300.0) % 7})
    assert guess(written(tmp_path, frame)).layout.series == ("k",)
    twice = pd.DataFrame({"t": np.repeat(hours(100), 2), "x": np.repeat(np.arange(100) % 7, 2)})
    found = guess(written(tmp_path, twice)).layout
    assert (found.series, found.values, found.every) == ((), ("x",), "1h")


def test_a_key_is_not_asked_for_where_stamps_do_not_repeat(tmp_path):
    """One series with a text column beside it."""
    x = np.random.default_rng(1).normal(size=200)
    frame = pd.DataFrame({"t": hours(), "quality": ["good", "bad"] * 100, "x": x})
    assert guess(written(tmp_path, frame)).layout.series == ()


@pytest.mark.parametrize(
    ("offset", "every"),
    [("15min", "15min"), ("h", "1h"), ("6h", "6h"), ("D", "D"), ("B", "B"), ("W-MON", "7D"), ("MS", "MS"), ("ME", "MS"),
     ("QS", "QS"), ("YS", "YS"), ("10s", "10s")],
)  # fmt: skip
def test_the_cadence_is_found(tmp_path, offset, every):
    """Fixed, daily, of business days, weekly, of months, quarters and years; a tenth of the rows missing."""
    stamps = pd.date_range("2000-01-03", periods=120, freq=offset)
    frame = pd.DataFrame({"date": stamps, "x": np.arange(120.0) ** 2})
    kept = frame[np.random.default_rng(3).random(120) > 0.1]
    assert guess(written(tmp_path, kept)).layout.every == every


def test_uneven_stamps_are_irregular(tmp_path):
    """Steps that have no common measure."""
    seconds = np.random.default_rng(2).random(100).cumsum() * 3600
    stamps = pd.Timestamp("2026-01-01") + pd.to_timedelta(seconds, unit="s")
    assert guess(written(tmp_path, pd.DataFrame({"t": stamps, "x": np.arange(100.0) ** 2}))).layout.every == "irregular"


def test_rows_that_are_only_numbered_are_irregular():
    """No stamps at all: the counter orders the rows."""
    found = guess(FOLDER / "data" / "lh.csv")
    assert found.layout.every == "irregular"
    assert found.counted


@pytest.mark.parametrize(
    ("zone", "told"), [("Europe/Berlin", "Europe/Berlin"), ("America/Chicago", "America/New_York")]
)
def test_the_zone_shows_in_skipped_hours(tmp_path, zone, told):
    """Stamps without an offset whose clock skips an hour in spring: a zone of that family."""
    stamps = hours(24 * 120, zone, "2026-01-15").tz_localize(None)
    assert guess(written(tmp_path, pd.DataFrame({"t": stamps, "x": np.arange(2880.0) % 5}))).layout.timezone == told


def test_the_zone_shows_in_offsets(tmp_path):
    """Texts with two offsets an hour apart; with one; a frame that knows its zone."""
    stamps = hours(24 * 120, "Europe/Paris", "2026-01-15")
    frame = pd.DataFrame({"t": [stamp.isoformat() for stamp in stamps], "x": np.arange(2880.0) % 5})
    assert guess(written(tmp_path, frame)).layout.timezone == "Europe/Berlin"
    assert guess(written(tmp_path, frame[:500])).layout.timezone == "Etc/GMT-1"
    assert guess(pd.DataFrame({"t": stamps, "x": frame.x})).layout.timezone == "Europe/Paris"


def test_every_format_gives_the_same(tmp_path):
    """CSV, gzip, Parquet, JSON lines and a frame."""
    frame = pd.DataFrame({"read_at": hours(), "kwh": np.random.default_rng(1).normal(size=200)})
    frame.to_parquet(tmp_path / "rows.parquet")
    with gzip.open(tmp_path / "rows.csv.gz", "wt") as file:
        frame.to_csv(file, index=False)
    lines = [json.dumps({"read_at": str(t), "kwh": x}) for t, x in zip(frame.read_at, frame.kwh, strict=True)]
    (tmp_path / "rows.jsonl").write_text("\n".join(lines))
    layouts = {guess(tmp_path / f"rows.{suffix}").layout.time for suffix in ("parquet", "csv.gz", "jsonl")}
    assert layouts == {"read_at"}
    assert guess(frame).layout == guess(tmp_path / "rows.parquet").layout


def test_epochs_and_years_are_stamps(tmp_path):
    """Seconds since 1970 under a telling name; years."""
    seconds = hours().as_unit("ns").astype("int64") // 10**9
    assert guess(written(tmp_path, pd.DataFrame({"ts": seconds, "x": np.arange(200.0) % 3}))).layout.every == "1h"
    assert guess(FOLDER / "data" / "Nile.csv").layout.every == "YS"


def test_what_is_given_is_not_guessed(tmp_path):
    """Each of the five; nothing is told of then."""
    x = np.arange(200.0)
    frame = pd.DataFrame({"a": hours(), "b": hours(), "k": list("xy") * 100, "v": x, "w": x})
    found = guess(written(tmp_path, frame), time="b", series=["k"], values=["w"], every="2h", timezone="Europe/Oslo")
    assert found.layout.needed == ("b", "k", "w")
    assert (found.layout.every, found.layout.timezone, found.told) == ("2h", "Europe/Oslo", ())


@pytest.mark.parametrize(
    ("text", "words"),
    [("", "empty"), ("a,b\n", "no rows"), ("name,kind\nx,y\nz,y\n", "--time"),
     ("t,name\n2026-01-01,x\n2026-01-02,y\n", "--values"), ("t;x\n2026-01-01;1\n", "separated by ';'")],
)  # fmt: skip
def test_bad_files_are_told_in_one_sentence(tmp_path, text, words):
    """Place, what came, what to do."""
    (tmp_path / "bad.csv").write_text(text)
    with pytest.raises(SercheckError, match=words):
        guess(tmp_path / "bad.csv")


def test_wrong_names_are_told(tmp_path):
    """A column that is not there, with the nearest word; no such cadence, zone or file."""
    path = written(tmp_path, pd.DataFrame({"read_at": hours(), "kwh": np.arange(200.0)}))
    with pytest.raises(BatchError, match="Did you mean 'read_at'"):
        guess(path, time="readat")
    with pytest.raises(UsageError):
        guess(path, every="often")
    with pytest.raises(UsageError):
        guess(path, timezone="Mars/Base")
    with pytest.raises(BatchError):
        guess(tmp_path / "none.csv")


def test_the_calendars_names():
    """Day and week of hours, week and year of days, year of months; none for what has no cadence."""
    hourly = {name: steps for name, (steps, _) in calendar_seasons("1h").items()}
    assert hourly == {"day": 24, "week": 168, "year": 8766}
    assert calendar_seasons("D")["week"] == (7, "7D")
    assert calendar_seasons("15min")["hour"] == (4, "1h")
    assert calendar_seasons("MS") == {"year": (12, 12)}
    assert calendar_seasons("B")["week"] == (5, 5)
    assert calendar_seasons("YS") == calendar_seasons("irregular") == {}
