"""The answer of ``gate`` on one screen."""

from pathlib import Path

import pytest

import sercheck
from sercheck.cli.screen import answer

ROOT = Path(__file__).parents[1]
LINES, COLUMNS = 30, 100
"""A screen (a terminal window of usual size)."""


@pytest.fixture(scope="module")
def rules():
    """The demo's rules."""
    return sercheck.load_rules(ROOT / "rules" / "substation_heat.yaml")


@pytest.mark.parametrize("batch", sorted(path.stem for path in (ROOT / "demo_data" / "batches").iterdir()))
def test_every_demo_batch_fits_one_screen(rules, batch):
    """Decision and counts first, then what failed and why, what was undecided: no more than a screen."""
    verdict = sercheck.gate(
        rules,
        ROOT / "demo_data" / "batches" / f"{batch}.csv",
        history=ROOT / "demo_data" / "history.csv.gz",
        as_of="2026-01-20T02:00:00Z",
    )
    lines = answer(verdict).splitlines()
    assert len(lines) <= LINES
    assert max(map(len, lines)) <= COLUMNS + 20  # terminal codes of bold words take no column
    assert ("RELEASED" if batch == "healthy" else "HELD") in lines[0]
    assert lines[1].startswith(f"  {verdict.counts['fail']} of {len(verdict.records)} records fail")
    assert lines[-2].startswith("at most 1 false hold per 90D: 13 rules share 0.0111 a batch")
    assert "2026-01-19 00:00 to 2026-01-19 23:00 Europe/Oslo" in lines[0]
    for rule in [row["rule"] for row in verdict.table.rows_where("outcome", "fail")][:1]:
        assert any(rule in line for line in lines)
