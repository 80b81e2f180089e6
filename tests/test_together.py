"""One verdict for all series of a feed: small changes of all are seen, correlation among them is allowed for."""

import numpy as np
import pandas as pd
import pytest

import sercheck

RULES = """
feed: heat
columns: {time: t, series: s, values: [v]}
every: 1h
seasons: {day: 1D}
batch_every: 1D
rules:
  - name: slip
    measure: season_phase
    season: day
    across: together
    false_alarm: 0.01
    stays: {like: history}
"""


def feed(rng, *, days=100, series=8, shared=0.6, slip=0):
    """Hourly series with a daily cycle and autoregressive noise, part of it shared; the last day runs ``slip`` late."""
    n = days * 24
    noise = np.empty((series, n))
    shocks = np.sqrt(1 - shared) * rng.normal(size=(series, n)) + np.sqrt(shared) * rng.normal(size=n)
    last = np.zeros(series)
    for step in range(n):
        last = 0.6 * last + 0.8 * shocks[:, step]
        noise[:, step] = last
    hours = np.arange(n) + np.where(np.arange(n) >= n - 24, -slip, 0)
    values = 20 + 3 * np.sin(2 * np.pi * hours / 24) + np.cos(4 * np.pi * hours / 24) + noise
    stamps = pd.date_range("2026-01-01", periods=n, freq="h", tz="UTC")
    return pd.DataFrame(
        {"t": np.tile(stamps, series), "s": np.repeat([f"m{i}" for i in range(series)], n), "v": values.ravel()}
    )


def judged(frame, rules=RULES):
    """The verdict on the last day."""
    day = frame["t"] >= frame["t"].max() - pd.Timedelta(hours=23)
    return sercheck.gate(sercheck.load_rules(rules), frame[day], history=frame[~day])


def test_a_small_slip_of_all_series_is_one_failure():
    """An hour's slip of all series, hardly visible in one, fails once for the whole feed."""
    verdict = judged(feed(np.random.default_rng(1), series=12, shared=0.2, slip=1))
    assert verdict.decision == "held"
    assert len(verdict.records) == 1
    record = verdict.records.iloc[0]
    assert pd.isna(record["series"])
    assert record["n"] == 12 * 24
    assert "over all series" in record["reason"]


def test_correlated_healthy_series_keep_the_risk():
    """At a risk of .05 the share of healthy days that fail stays near it though the series share their noise."""
    rng = np.random.default_rng(2)
    rules = RULES.replace("0.01", "0.05")
    held = [judged(feed(rng, series=3, days=75), rules).decision == "held" for _ in range(80)]
    assert np.mean(held) <= 0.05 + 2.33 * np.sqrt(0.05 * 0.95 / 80)  # one-sided 1 % of the binomial


def test_a_measure_without_a_pooled_statistic_is_undecided():
    """A rule that cannot be judged for all series at once says so."""
    rules = RULES.replace("measure: season_phase\n    season: day", "measure: rate\n    of_rows: missing").replace(
        "{like: history}", "{below: 0.5}"
    )
    verdict = judged(feed(np.random.default_rng(3), days=70, series=2), rules)
    assert verdict.records["outcome"].tolist() == ["undecided"]
    assert "one verdict for all series" in verdict.records["reason"][0]


@pytest.mark.parametrize("across", ["[batch, together]", "[series, together]"])
def test_other_ways_stand_beside_it(across):
    """With a list of ways every series has its record and the feed one more, and the risk is shared."""
    rules = RULES.replace("across: together", f"across: {across}")
    verdict = judged(feed(np.random.default_rng(4), days=70, series=3), rules)
    assert verdict.records["series"].isna().tolist() == [False, False, False, True]
    assert verdict.records["false_alarm_used"].iloc[-1] == pytest.approx(0.005)


def test_a_silent_series_is_undecided_though_its_history_would_pass():
    """A window longer than the batch says nothing of a series that the batch has no value of."""
    frame = feed(np.random.default_rng(5), days=40, series=2)
    rules = RULES.replace(
        "measure: season_phase\n    season: day\n    across: together", "measure: level\n    window: 20D"
    )
    rules = rules.replace("{like: history}", "{below: 40}")
    frame.loc[(frame["s"] == "m1") & (frame["t"] >= frame["t"].max() - pd.Timedelta(hours=23)), "v"] = np.nan
    verdict = judged(frame, rules)
    assert verdict.records.set_index("series")["outcome"].to_dict() == {"m0": "pass", "m1": "undecided"}
    assert "holds no value" in verdict.records["reason"][1]
