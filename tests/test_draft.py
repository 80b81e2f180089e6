"""``draft``: a history in, a rule file out that loads, is rehearsed, and names what it left out."""

import gzip
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import sercheck
from sercheck.drafting.shape import shape_of
from sercheck.drafting.text import quoted
from sercheck.errors import SercheckError
from sercheck.rulebook import load_rules

DEMO = Path(__file__).parent.parent / "demo_data" / "history.csv.gz"


def memory(n, seed, phi=0.6):
    """Noise with memory, shape (n,)."""
    noise = np.random.default_rng(seed).normal(size=n)
    for t in range(1, n):
        noise[t] += phi * noise[t - 1]
    return noise


def hourly(days, seed=1, *, week=True, size=3.0):
    """An hourly feed with a cycle by day, and by week where people make it."""
    step = np.arange(24 * days)
    cycle = np.sin(2 * np.pi * step / 24) + (0.8 * np.cos(2 * np.pi * step / 168) if week else 0)
    stamps = pd.date_range("2024-01-01", periods=len(step), freq="h", tz="UTC")
    return pd.DataFrame({"when": stamps, "value": 20 + size * cycle + memory(len(step), seed)})


def sampled(stamps, values):
    """A feed of two columns."""
    return pd.DataFrame({"when": stamps, "value": values})


def rules_of(told):
    """The compiled rules of a draft, by measure."""
    found = {}
    for rule in load_rules(told.text).rules:
        found.setdefault(rule.measure, []).append(rule)
    return found


def command(*asked, folder):
    """The command line as programs meet it."""
    return subprocess.run(
        [sys.executable, "-m", "sercheck", "draft", *map(str, asked)], capture_output=True, text=True, check=False,
        cwd=folder,
    )  # fmt: skip


@pytest.fixture(scope="module")
def drafted():
    """A draft from seventy days of hours, rehearsed on the last seven."""
    return sercheck.draft(hourly(70), batches=7)


def test_a_plain_feed_gets_every_rule_that_suits_it(drafted):
    """Columns, cadence, seasons and batches are found; each measure that suits days of hours has its rule."""
    book, rules = load_rules(drafted.text), rules_of(drafted)
    assert book.time == "when"
    assert list(book.seasons) == ["day", "week"]
    assert {
        "level", "spread", "innovations", "seasonal_lag", "season_phase", "autocorrelation", "roughness", "repeats",
        "replay", "completeness", "spacing", "rate", "freshness",
    } == set(rules)  # fmt: skip
    assert len(rules["repeats"]) == 2
    assert drafted.rules == len(book.rules)
    assert ("identity", "one series has no other that it could be swapped with") in drafted.left_out


def test_every_rule_says_where_its_bound_came_from(drafted):
    """Above each rule stands a comment with a figure of history in it."""
    for part in drafted.text.split("\n\n")[1:]:
        if "- name:" in part:
            said = "".join(line for line in part.splitlines() if line.lstrip().startswith("#"))
            assert any(sign.isdigit() for sign in said), part


def test_the_head_tells_how_it_was_made(drafted):
    """Range and fingerprint of history, seasons, the rehearsal against the budget, and what was left out."""
    head = drafted.text.split("\nfeed:")[0]
    for said in ("1,680 rows", "2024-01-01T00:00:00Z to 2024-03-10T23:00:00Z", "fingerprint", "Seasons: day",
                 "Rehearsed on the last 7 batches", "1 per 90D", "Left out:"):  # fmt: skip
        assert said in " ".join(head.replace("#", " ").split())
    assert drafted.within is True


def test_gate_and_rehearse_take_it_as_it_is(drafted, tmp_path):
    """The draft holds a broken day and releases a healthy one; a rehearsal of it keeps the budget it tells."""
    rules = tmp_path / "rules.yaml"
    rules.write_text(drafted.text)
    rows = hourly(71)
    past, day = rows[: 24 * 70], rows[24 * 70 :]
    assert sercheck.gate(rules, day, history=past, as_of="2024-03-12T01:00:00Z").released
    broken = day.assign(value=np.random.default_rng(4).permutation(day["value"].to_numpy()))
    assert not sercheck.gate(rules, broken, history=past).released
    told = sercheck.rehearse(rules, past, begins="2024-03-04", tries=0)
    assert (told.batches, told.false_holds) == (7, 0)


def test_the_same_history_gives_the_same_text(drafted):
    """Nothing in a draft depends on the clock or on chance."""
    assert sercheck.draft(hourly(70), batches=7).text == drafted.text


def test_weather_has_no_week_and_whole_numbers_only_note():
    """Without a cycle by week the profile is by hour of day; repeats of rounded values are noted."""
    rows = hourly(70, week=False)
    told = sercheck.draft(rows.assign(value=rows["value"].round()), rehearsal=False)
    assert list(load_rules(told.text).seasons) == ["day"]
    rules = rules_of(told)
    assert all(rule.otherwise == "note" for name in ("repeats", "replay") for rule in rules.get(name, ()))
    assert "repeats" in rules
    assert "nearly invisible" in told.text


def test_a_season_too_weak_to_be_missed_is_left_out_with_the_reason():
    """Amplitude and phase need a season whose loss would be seen."""
    told = sercheck.draft(hourly(70, week=False, size=0.4), rehearsal=False)
    rules, left = rules_of(told), " ".join(f"{name}: {reason}" for name, reason in told.left_out)
    assert "season_phase" not in rules
    assert "too weak" in left or "no season" in left


def test_a_rule_that_holds_too_often_only_notes_and_shows_the_dates():
    """A rule that holds healthy days beyond its share notes, on the column that made it, and the budget is kept."""
    rows = hourly(70).assign(other=hourly(70, seed=5)["value"])
    values = rows["value"].to_numpy().copy()
    values[24 * 65 : 24 * 66] = np.random.default_rng(8).permutation(values[24 * 65 : 24 * 66])
    told = sercheck.draft(rows.assign(value=values), batches=7, false_holds="1 per 400D")
    noted = [rule.name for rule in load_rules(told.text).rules if rule.otherwise == "note" and rule.false_alarm > 0]
    assert noted
    assert all(name.endswith("(value)") for name in noted)
    assert told.within is True
    assert "It only notes: rehearsed, it held" in told.text
    assert "(2024-03-06)" in told.text


def test_the_demo_is_a_panel(tmp_path):
    """Keys are found; phase is judged by series and together, identity is asked, and the rules load."""
    told = sercheck.draft(DEMO, rehearsal=False)
    rules = rules_of(told)
    assert load_rules(told.text).series == ("substation",)
    assert rules["season_phase"][0].across == ("batch", "together")
    assert "identity" in rules or any("every series is itself" in name for name, _ in told.left_out)


def test_days_come_in_weeks():
    """Daily rows: batches of a week, autocorrelation over four, no phase."""
    n = 7 * 40
    week = np.tile([0, 1, 2, 1, 0, -3, -4], 40)
    told = sercheck.draft(sampled(pd.date_range("2023-01-02", periods=n), 50 + 3 * week + memory(n, 2)), batches=5)
    book, rules = load_rules(told.text), rules_of(told)
    assert book.batch_every == "7D"
    assert "season_phase" not in rules
    assert any("phase" in name for name, _ in told.left_out)
    assert {"level", "spacing", "completeness"} <= set(rules)
    assert told.within is not None


def test_business_days():
    """Working days: no row is due at the weekend; holidays are told as days that may be closed."""
    days = pd.date_range("2023-01-02", periods=5 * 45, freq="B")
    told = sercheck.draft(sampled(days, 100 + memory(len(days), 3)).drop(index=[80, 140]), batches=4)
    assert load_rules(told.text).every == "B"
    assert "# closed_days: [2023-04-24, 2023-07-17]" in told.text


@pytest.mark.parametrize(
    ("rows", "said"),
    [
        (sampled(pd.date_range("2015-01-01", periods=120, freq="MS"), 100 + memory(120, 5)), "every: MS"),
        (sampled(pd.to_datetime("2024-01-01") + pd.to_timedelta(np.cumsum(1.37 + np.arange(300) % 7 * 11.9), "s"),
                 memory(300, 6)), "every: irregular"),
        (hourly(20), "holds 20 batches of 1D; more than 56 are needed"),
        (hourly(1), "more than 56 are needed"),
        (hourly(1)[:1], "Not rehearsed"),
        (sampled(pd.date_range("2024-01-01", periods=24 * 60, freq="h"), 5.0), "one value only"),
    ],
    ids=["months", "irregular", "short", "one day", "one row", "all equal"],
)  # fmt: skip
def test_what_cannot_be_decided_is_said_and_nothing_holds_by_guess(rows, said):
    """Short, rare, irregular and constant feeds get exact rules that hold, and say what history would be needed."""
    told = sercheck.draft(rows)
    assert said in " ".join(told.text.replace("#", " ").split())
    for rule in load_rules(told.text).rules:
        assert rule.stays.literal or rule.otherwise == "note"
    batch = rows[-1:] if len(rows) < 3 else rows[-3:]
    assert sercheck.gate(load_rules(told.text), batch, history=rows[: -len(batch)] if len(rows) > 3 else None).decision


@pytest.mark.parametrize(
    "text", ["", "when,value\n", "when,value\n2024-01-01,abc\n2024-01-02,def\n", "a,b\nx,y\nz,w\n"],
    ids=["empty", "head only", "text", "no time"],
)  # fmt: skip
def test_what_is_no_history_is_one_sentence(text, tmp_path):
    """Nothing is written and the status is 2."""
    (tmp_path / "history.csv").write_text(text)
    with pytest.raises(SercheckError):
        sercheck.draft(tmp_path / "history.csv")
    assert not (tmp_path / "rules.yaml").exists()


def test_the_command_line(tmp_path):
    """YAML on stdout and words on stderr; -o writes a whole file and overwrites none without --replace."""
    with gzip.open(tmp_path / "past.csv.gz", "wt") as file:
        hourly(6).to_csv(file, index=False)
    plain = command("past.csv.gz", "--workers", "1", folder=tmp_path)
    assert plain.returncode == 0, plain.stderr
    assert load_rules(plain.stdout).feed == "past"
    assert "drafted" in plain.stderr
    assert "sercheck draft past.csv.gz" in plain.stdout.replace("__main__.py", "sercheck")
    (tmp_path / "rules.yaml").write_text("mine\n")
    refused = command("past.csv.gz", "-o", "rules.yaml", folder=tmp_path)
    assert (refused.returncode, (tmp_path / "rules.yaml").read_text()) == (2, "mine\n")
    assert "--replace" in refused.stderr
    written = command("past.csv.gz", "-o", "rules.yaml", "--replace", "--false-holds", "2 per 90D", "--no-rehearsal",
                      "--workers", "1", folder=tmp_path)  # fmt: skip
    assert written.returncode == 0, written.stderr
    assert written.stdout == ""
    assert load_rules(tmp_path / "rules.yaml").false_holds.count == 2


@pytest.mark.parametrize(
    "wrong", [{"false_holds": "often"}, {"batch_every": "1min"}, {"batch_every": "x"}, {"batches": 0},
              {"values": ["nope"]}, {"timezone": "Mars/Base"}, {"every": "17x"}],
    ids=str,
)  # fmt: skip
def test_a_wrong_argument_is_one_sentence(wrong):
    """What came and what was wanted, before anything is written."""
    with pytest.raises(SercheckError, match=str(next(iter(wrong.values()))).strip("[]'")):
        sercheck.draft(hourly(3), **wrong)


def test_names_from_outside_cannot_break_the_file(tmp_path):
    """Columns named like YAML, markup or control codes come out as the same names."""
    rows = hourly(3).rename(columns={"when": "a: [b] # c", "value": "no\n- \x1b[31m{x}: &y"})
    told = sercheck.draft(rows)
    book = load_rules(told.text)
    assert (book.time, book.values) == ("a: [b] # c", ("no\n- \x1b[31m{x}: &y",))
    assert "\x1b" not in told.text


@pytest.mark.parametrize("name", ["no", "1", "a, b", "ünit", "x: y", "- x", "kWh (net)", "~", "null", "a#b"])
def test_a_name_is_quoted_where_yaml_would_misread_it(name):
    """What is written is read back as the same text, in a list too."""
    import yaml

    assert yaml.safe_load(f"[{quoted(name)}]") == [name]


def test_batches_follow_the_cadence():
    """Minutes come in days or, where history is short, in hours; six-hour rows in weeks."""
    def batch(freq, n):
        stamps = pd.date_range("2024-01-01", periods=n, freq=freq)
        return shape_of(sercheck.study(sampled(stamps, memory(n, 7)))).batch_every

    assert [batch("15min", 96 * 60), batch("min", 1440 * 2), batch("6h", 400), batch("D", 60), batch("W-MON", 60)] == [
        "1D", "1h", "7D", "7D", "7D",
    ]  # fmt: skip
