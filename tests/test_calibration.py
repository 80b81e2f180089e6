"""The program that counts false alarms: its intervals, its oracles, its marks and its page."""

import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy import stats

sys.path.insert(0, str(Path(__file__).parent.parent))

from tests import calibration, calibration_page, power
from tests.cells import ALONE, DAY, PAST, PROCESSES, Group
from tests.known_weak import KNOWN, Weak, weakness
from tests.processes import make


def test_intervals_are_exact():
    """Shares have the interval of Clopper and Pearson (1934) as scipy gives it."""
    low, high = calibration.exact_interval([0, 3, 50, 50], [50, 50, 50, 100])
    told = [stats.binomtest(k, n).proportion_ci(0.95, "exact") for k, n in ((0, 50), (3, 50), (50, 50), (50, 100))]
    np.testing.assert_allclose(low, [each.low for each in told], atol=1e-12)
    np.testing.assert_allclose(high, [each.high for each in told], atol=1e-12)


@pytest.mark.parametrize("name", ["AR .6", "MA -.8", "seasonal AR", "fractional .3"])
def test_the_oracle_knows_how_a_mean_scatters(name):
    """The standard error that the oracle uses is that of simulated means."""
    process = PROCESSES[name]
    means = make(process.kind, 41, 3000, 96).mean(axis=1)
    assert abs(power.error_of_mean(process, 96) / means.std() - 1) < 0.05


def test_the_first_size_of_every_change_is_none():
    """At no change the oracle finds what its risk lets it find."""
    first = {}
    for change in power.changes():
        first.setdefault((change.question, change.process, change.form), change)
    assert len(first) == 13
    for change in first.values():
        least = power.RISK / 2 if change.question.startswith("autocorrelation") and change.form != ALONE else power.RISK
        assert change.oracle == pytest.approx(least, rel=1e-6)


def test_only_what_is_named_may_miss(monkeypatch):
    """A cell above its target is known only for the questions, forms, processes and rows that are named."""
    named = Weak(("level",), (f"above {ALONE}",), ("white",), "because", (336,))
    monkeypatch.setattr("tests.known_weak.KNOWN", (*KNOWN, named))
    assert weakness("level", f"above {ALONE}", "white", 336) == "because"
    assert weakness("level", f"below {ALONE}", "white", 336) == ""
    assert weakness("level", f"above {ALONE}", "white", 168) == ""
    assert weakness("trend", f"above {ALONE}", "white", 336) == ""


def test_a_table_a_page_and_the_faults(tmp_path, capsys):
    """The program counts, names what misses, writes Parquet, and draws a page that says so."""
    out, page = tmp_path / "table.parquet", tmp_path / "page.html"
    asked = ["--measure", "level", "--processes", "AR .6", "--n", "168", "--replications", "100", "--out", str(out)]
    assert calibration.main(asked) == 0
    told = capsys.readouterr().out
    assert "cells with a target, 0 outside it unnamed" in told
    table = pd.read_parquet(out)
    assert set(table["n"]) == {168}
    assert (table["records"] == 100).all()
    sizes = {"question": "level", "process": "AR .6", "asked": ALONE, "n": 168, "risk": 0.01, "judged": 100}
    curve = pd.DataFrame([{**sizes, "size": 1.0 * i, "found": i / 3, "low": 0.0, "high": 1.0, "naive": 0.5,
                           "oracle": i / 3} for i in range(4)])  # fmt: skip
    curve.to_parquet(tmp_path / "curves.parquet")
    assert calibration_page.write(page, out, tmp_path / "curves.parquet", 100, 1) == 0
    text = page.read_text(encoding="utf-8")
    assert "100 windows a cell" in text
    assert text.count("<svg") == 3
    assert "http" not in text.replace("http://www.w3.org", "")


def test_faults_are_put_into_the_last_day_only():
    """A fault changes no row before the judged day, and nothing that was handed in."""
    healthy = make("seasonal", 5, 3, DAY * (PAST + 1))
    before = healthy.copy()
    for fault in power.catalogue():
        if fault.fits(3, DAY, DAY * PAST, DAY):
            broken = power.put_in(fault, fault.sizes[0], healthy, 1)
            np.testing.assert_array_equal(broken[:, :-DAY], before[:, :-DAY])
    np.testing.assert_array_equal(healthy, before)
    assert Group("profile + AR .6", DAY, PAST).questions
