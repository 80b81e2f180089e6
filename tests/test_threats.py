"""The table of who can write what names tests that exist, and every threat has one or says that it is possible."""

import re
from pathlib import Path

HERE = Path(__file__).parent
GUIDE = (HERE.parent / "DEVELOPERS.md").read_text(encoding="utf-8")
TABLE = GUIDE.split("### Who can write what")[1].split("`tests/")[0]
ROWS = [line for line in TABLE.splitlines() if line.startswith("| ") and not line.startswith("| who |")]


def test_every_threat_names_tests_that_exist():
    """A row of the table without a test that is there is a promise, not a defence."""
    tests = "\n".join(path.read_text(encoding="utf-8") for path in HERE.glob("test_*.py"))
    there = set(re.findall(r"^def (test_\w+)", tests, re.MULTILINE))
    assert len(ROWS) >= 12
    for row in ROWS:
        named = re.findall(r"`(test_\w+)`", row)
        assert named or "*possible*" in row, row
        assert set(named) <= there, set(named) - there


def test_everybody_who_can_write_is_there():
    """Rule author, feed, desk and reader each have a row."""
    assert {row.split("|")[1].strip() for row in ROWS} >= {"rule author", "feed", "desk", "reader of a page"}
