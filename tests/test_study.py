"""``study`` from rows to numbers, sentences, JSON and a page; whatever the rows are."""

import json
import re
import subprocess
import sys
from html.parser import HTMLParser

import numpy as np
import pandas as pd
import pytest
from reference_values import FOLDER

import sercheck
from sercheck.cli.study_text import WIDTH, answer, drawn
from sercheck.errors import SercheckError
from sercheck.portrait import words
from sercheck.portrait.html import page
from sercheck.portrait.series import correlogram

SCREEN = 40
"""Lines of a screen."""


def stamps(n, start="2026-01-05", zone=None):
    """Hours."""
    return pd.date_range(start, periods=n, freq="h", tz=zone)


def daily(n=24 * 60, seed=1, series=1):
    """Hourly values with a day's cycle and memory, shape (series, n)."""
    rng = np.random.default_rng(seed)
    noise = rng.normal(size=(series, n))
    for t in range(1, n):
        noise[:, t] += 0.6 * noise[:, t - 1]
    return 100 + 6 * np.sin(2 * np.pi * np.arange(n) / 24) + noise


def one(values, **about):
    """The portrait of one series of hours."""
    seen = sercheck.study(pd.DataFrame({"t": stamps(len(values)), "x": values}), **about)
    assert len(seen.portraits) == 1
    return seen.portraits[0]


def whats(portrait):
    """Kinds of findings."""
    return {found.what for found in portrait.findings}


def command(*asked, folder=None):
    """The command line as programs meet it."""
    return subprocess.run(
        [sys.executable, "-m", "sercheck", "study", *map(str, asked)], capture_output=True, text=True, check=False,
        cwd=folder,
    )  # fmt: skip


def test_a_plain_csv_needs_no_flag(tmp_path):
    """Clock, season, differencing, worth of the mean, correlogram: all keys that programs were promised."""
    pd.DataFrame({"read_at": stamps(1440), "kwh": daily()[0]}).to_csv(tmp_path / "rows.csv", index=False)
    done = command(tmp_path / "rows.csv", "--format", "json")
    assert done.returncode == 0
    told = json.loads(done.stdout)
    (series,) = told["series"]
    assert (series["every"], series["n"], series["n_missing"]) == ("1h", 1440, 0)
    assert [season["steps"] for season in series["seasons"]] == [24]
    assert {"steps", "p_value", "share_of_variance"} <= series["seasons"][0].keys()
    assert series["difference"] == [24]
    assert 200 < series["n_eff_mean"] < 600  # (1 - .6)/(1 + .6) of 1440 is 360
    lags = series["autocorrelation"]
    assert [lag["lag"] for lag in lags[:3]] == [1, 2, 3]
    assert lags[-1]["lag"] >= 48
    assert all(lag["low"] == -lag["high"] for lag in lags)
    assert series["findings"] == []


def test_text_goes_to_people_and_fits_a_screen():
    """80 columns by 40 lines for one series and for many, on stderr when stdout is a program's."""
    done = command(FOLDER / "data" / "AirPassengers.csv")
    assert done.stdout == ""
    assert "A season of 12 steps (year" in done.stderr
    assert "a trend up" in done.stderr
    keys = [f"m{i:02d}" for i in range(30)]
    frame = pd.DataFrame({"t": np.tile(stamps(1440), 30), "k": np.repeat(keys, 1440), "x": daily(series=30).ravel()})
    x = daily(series=12).reshape(4, 3, 1440)
    x[0, 0, 100:140] = x[0, 0, 100]
    x[1, 1, 500:] += np.arange(940) * 0.05
    x[2, 1] = np.random.default_rng(1).normal(size=1440).cumsum()
    x[3, 0, 240:264] = x[3, 0, 216:240]
    mixed = pd.DataFrame({"t": np.tile(stamps(1440), 4), "k": np.repeat(list("abcd"), 1440)})
    for place, column in enumerate(("kwh", "flow", "degrees")):
        mixed[column] = x[:, place].ravel()
    mixed = mixed.drop(index=range(200, 300))
    for text in (done.stderr, answer(sercheck.study(mixed)), answer(sercheck.study(frame))):
        lines = re.sub(r"\x1b\[[0-9;]*m", "", text).splitlines()
        assert len(lines) <= SCREEN
        assert max(map(len, lines)) <= WIDTH
    assert "30 of 30 series: A season of 24 steps" in text


def test_trend_season_both_and_neither_are_told_apart():
    """In words and in one word."""
    rng = np.random.default_rng(7)
    t = np.arange(1440)
    cases = {
        "neither": rng.normal(size=1440),
        "season": daily()[0],
        "trend": 0.01 * t + rng.normal(size=1440),
        "trend and season": daily()[0] + 0.02 * t,
    }
    for kind, values in cases.items():
        portrait = one(values)
        assert words.kind(portrait) == kind
        text = words.shape(words.Group((portrait,)), "1h")
        assert ("season of 24" in text) == ("season" in kind)
        assert ("a trend up" in text.lower()) == ("trend" in kind)
    wandering = one(np.cumsum(rng.normal(size=1440)))
    assert wandering.wanders
    assert wandering.difference == (1,)
    assert "wanders" in words.shape(words.Group((wandering,)), "1h")


def test_one_difference_too_many_is_told():
    """White noise: a difference would make -.5 of it."""
    portrait = one(np.random.default_rng(1).normal(size=1000))
    assert portrait.difference == ()
    assert portrait.over
    assert "one too many" in words.differencing_text(portrait)


def test_the_mean_is_told_with_its_honest_error():
    """The naive error is too small by √((1 + φ)/(1 - φ)), two for φ of .6."""
    portrait = one(daily(24 * 200)[0])
    assert portrait.error_ratio == pytest.approx(2.0, rel=0.15)
    assert "times the naive" in words.mean_text(portrait)


def test_faults_of_the_clock_are_found():
    """Gaps with place and length, doubles, differing doubles, disorder, stamps off the grid."""
    frame = pd.DataFrame({"t": stamps(1440), "x": daily()[0]})
    odd = pd.concat(
        [
            frame[:100], frame[150:700], frame[690:692], frame[700:900].sample(frac=1, random_state=1), frame[900:],
            pd.DataFrame({"t": [frame.t[5] + pd.Timedelta("7min"), frame.t[10]], "x": [1.0, 2.0]}),
        ]
    )  # fmt: skip
    (portrait,) = sercheck.study(odd).portraits
    assert {"gap", "doubles", "differing doubles", "disorder", "off the grid"} <= whats(portrait)
    gap = next(found for found in portrait.findings if found.what == "gap")
    assert gap.where == "2026-01-09T04:00:00Z to 2026-01-11T05:00:00Z"
    assert "50 rows missing" in gap.about
    assert portrait.n_missing == 50


def test_suspicious_stretches_are_found_where_they_are():
    """Stuck, delivered again, a broken day, another level, filled forward, interpolated; nothing in a healthy feed."""
    healthy = daily()[0]
    assert whats(one(healthy)) == set()
    stuck, again, level, filled, half = (healthy.copy() for _ in range(5))
    stuck[600:640] = stuck[600]
    again[240:264] = again[216:240]
    level[900:] += 15
    gone = np.random.default_rng(2).random(1440) < 0.2
    filled = pd.Series(np.where(gone, np.nan, filled)).ffill().bfill().to_numpy()
    half[1:-1:2] = (half[:-2:2] + half[2::2]) / 2
    for what, values, where in (
        ("stuck", stuck, "2026-01-30T00:00:00Z to 2026-01-31T15:00:00Z"),
        ("replayed", again, "2026-01-15T00:00:00Z to 2026-01-15T23:00:00Z"),
        ("level change", level, "2026-02-11"),
        ("filled forward", filled, "2026-01-05"),
        ("interpolated", half, "2026-01-05"),
    ):
        found = [finding for finding in one(values).findings if finding.what == what]
        assert len(found) == 1, what
        assert found[0].where.startswith(where), what


def test_clock_changes_leave_traces():
    """A cycle that follows another clock than the stamps; the skipped hour delivered near 0, the doubled one summed."""
    utc = stamps(24 * 365, "2025-01-01", "UTC")
    local = utc.tz_convert("Europe/Oslo")
    rng = np.random.default_rng(1)
    cycle = 100 + 30 * np.sin(2 * np.pi * (local.hour - 7) / 24) + rng.normal(size=len(utc))
    moves = sercheck.study(pd.DataFrame({"t": utc, "x": cycle})).portraits[0]
    assert "cycle moves at clock changes" in whats(moves)
    wall = stamps(24 * 730, "2025-01-01")
    values = 100 + 30 * np.sin(2 * np.pi * (wall.hour - 7) / 24) + rng.normal(size=len(wall))
    for day, factor in (("2025-03-30", 0), ("2026-03-29", 0), ("2025-10-26", 2), ("2026-10-25", 2)):
        values = np.where(wall == pd.Timestamp(f"{day} 02:00"), factor * values, values)
    delivered = sercheck.study(pd.DataFrame({"t": wall, "x": values})).portraits[0]
    assert {"skipped hour delivered", "doubled hour"} <= whats(delivered)
    assert "cycle moves at clock changes" not in whats(delivered)


def test_wide_feeds_are_grouped_the_worst_first():
    """The broken series comes first, the rest are counted."""
    x = daily(24 * 30, series=12)
    x[7, 300:340] = x[7, 300]
    keys = [f"m{i:02d}" for i in range(12)]
    frame = pd.DataFrame({"t": np.tile(stamps(720), 12), "k": np.repeat(keys, 720), "x": x.ravel()})
    seen = sercheck.study(frame)
    assert seen.portraits[0].series == "m07"
    text = answer(seen)
    assert "stuck" in text
    assert "1 of 12 series" in text
    assert "m07" in text


def test_a_frame_with_dates_for_its_index_is_read():
    """Its index needs no name."""
    assert sercheck.study(pd.Series(daily()[0], stamps(1440)).to_frame("x")).portraits[0].n == 1440


@pytest.mark.parametrize(
    "values",
    [[1.0], [np.nan] * 200, [5.0] * 200, [1.0, 2.0, np.nan], [1e300, -1e300] * 100, [np.inf] * 3 + [1.0] * 100],
)
def test_strange_values_give_an_answer(values, tmp_path):
    """One row, all missing, all equal, three, huge, infinite: numbers or null, valid JSON, a text and a page."""
    frame = pd.DataFrame({"t": stamps(len(values)), "x": values})
    seen = sercheck.study(frame, time="t", values=["x"])
    told = json.loads(json.dumps(seen.to_dict(), allow_nan=False))
    assert told["series"][0]["seasons"] == []
    assert told["series"][0]["n"] == np.isfinite(values).sum()
    assert "STUDIED" in answer(seen)
    assert "</html>" in page(seen)


def test_empty_and_wrong_files_are_trouble(tmp_path):
    """Exit status 2 and one sentence; nothing on stdout, no page."""
    (tmp_path / "empty.csv").write_text("")
    (tmp_path / "text.csv").write_text("a,b\nx,y\nz,w\n")
    for name in ("empty.csv", "text.csv", "none.csv"):
        done = command(tmp_path / name, "--page", tmp_path / "page.html")
        assert (done.returncode, done.stdout) == (2, "")
        assert len(done.stderr.strip().splitlines()) == 1
    assert not (tmp_path / "page.html").exists()
    with pytest.raises(SercheckError, match="no column 'zz'"):
        sercheck.study(pd.DataFrame({"t": stamps(9), "x": 1.0}), values=["zz"])


def test_the_input_stays():
    """A frame is not changed."""
    frame = pd.DataFrame({"t": stamps(300), "x": daily(300)[0]})
    kept = frame.copy(deep=True)
    sercheck.study(frame)
    pd.testing.assert_frame_equal(frame, kept)


def test_the_correlogram_reaches_two_of_the_longest_season():
    """And is thinned so that it stays small; the drawing has one zero line and the band's dots."""
    x = daily(24 * 400, series=2)
    lags, r, band = correlogram(x, 168)
    assert lags[-1] >= 2 * 168
    assert np.isin([1, 24, 168, 336], lags).all()
    assert r.shape == band.shape == (2, len(lags))
    lags, *_ = correlogram(x, 4000)
    assert len(lags) < 450
    assert 4000 in lags
    lines = drawn(lags, np.cos(2 * np.pi * lags / 4000.0), np.full(len(lags), 0.25), [4000])
    assert max(map(len, lines)) <= WIDTH
    assert sum("─" in line for line in lines) == 1
    assert "4000" in lines[-1]


def test_r_at_the_lags_is_statsmodels(tmp_path):
    """Autocorrelations as statsmodels computes them, and the band of Bartlett (1946) from them."""
    from statsmodels.tsa.stattools import acf

    x = daily(1000)[0]
    portrait = one(x)
    theirs = acf(x, nlags=int(portrait.lags[-1]), fft=True)
    np.testing.assert_allclose(portrait.r, theirs[portrait.lags], atol=1e-9)
    before = np.concatenate([[0.0], np.cumsum(theirs[1:-1] ** 2)])[portrait.lags - 1]
    np.testing.assert_allclose(portrait.band, 1.959964 * np.sqrt((1 + 2 * before) / 1000), rtol=1e-6)


class Reader(HTMLParser):
    """Collects what the page is made of."""

    def __init__(self):
        super().__init__()
        self.tags, self.labels, self.outside = [], [], []

    def handle_starttag(self, tag, attrs):
        about = dict(attrs)
        self.tags.append(tag)
        if tag == "svg" and about.get("role") == "img":
            self.labels.append(about.get("aria-label"))
        links = [value or "" for name, value in attrs if name in ("src", "href", "xlink:href")]
        self.outside += [link for link in links if not link.startswith(("#", "data:"))]


def test_the_page_is_whole_and_tells_everything(tmp_path):
    """No script, no network, alt texts for every plot, headings, table heads, hostile names escaped, both schemes."""
    bad = '<script>alert("x")</script>'
    keys = np.repeat([bad, "b"], 1440)
    frame = pd.DataFrame({"t": np.tile(stamps(1440), 2), "k": keys, "kwh": daily(series=2).ravel()})
    seen = sercheck.study(frame)
    text = page(seen)
    reader = Reader()
    reader.feed(text)
    assert "script" not in reader.tags
    assert reader.outside == []
    assert bad not in text
    assert "prefers-color-scheme: dark" in text
    assert {"h1", "h2", "h3", "th", "figcaption", "figure"} <= set(reader.tags)
    assert len(reader.labels) >= 6
    assert all(reader.labels)
    assert any(label.startswith("Each value against the value 24 steps before") for label in reader.labels)
    assert any(label.startswith("Periodogram") for label in reader.labels)
    assert words.shape(words.groups(seen.portraits)[0], "1h") in text
    assert len(text) < 500_000


def test_the_page_is_written_whole(tmp_path):
    """By the command, beside the text; a folder that is not there is told before any work."""
    pd.DataFrame({"t": stamps(400), "x": daily(400)[0]}).to_csv(tmp_path / "rows.csv", index=False)
    done = command("rows.csv", "--page", "page.html", folder=tmp_path)
    assert done.returncode == 0
    assert (tmp_path / "page.html").read_text().rstrip().endswith("</html>")
    assert command("rows.csv", "--page", "no/page.html", folder=tmp_path).returncode == 2


@pytest.mark.scale
def test_a_million_rows(tmp_path):
    """One series of a million minutes, and a thousand series of a thousand hours."""
    rng = np.random.default_rng(1)
    minutes = pd.date_range("2024-01-01", periods=1_000_000, freq="min")
    x = rng.normal(size=1_000_000) + 2 * np.sin(2 * np.pi * np.arange(1_000_000) / 1440)
    (portrait,) = sercheck.study(pd.DataFrame({"t": minutes, "x": x})).portraits
    assert [season.steps for season in portrait.seasons] == [1440]
    wide = daily(1000, series=1000)
    frame = pd.DataFrame(
        {"t": np.tile(stamps(1000), 1000), "k": np.repeat(np.arange(1000), 1000).astype(str), "x": wide.ravel()}
    )
    seen = sercheck.study(frame)
    assert sum([season.steps for season in each.seasons] == [24] for each in seen.portraits) >= 950
