"""The folder of pages: complete, atomic, and cheap when nothing is new."""

from __future__ import annotations

import json
import re
import shutil
import sqlite3

import brief_cases as cases
import pytest
from click.testing import CliRunner

from sercheck.brief.surfaces import shown
from sercheck.briefing import brief_of, review_of
from sercheck.cli.brief import command
from sercheck.errors import OutputError, UsageError
from sercheck.outputs import write_text
from sercheck.settle import settle
from sercheck.site import write_site
from sercheck.verdict import gate


def days_of(frame):
    """The local days of a feed."""
    return sorted(frame.t.dt.normalize().unique())


@pytest.fixture(scope="module")
def judged(tmp_path_factory):
    """Three days of one feed, the last one held, and a day of another."""
    tmp_path = tmp_path_factory.mktemp("judged")
    frame = cases.readings(60)
    for place, day in enumerate(days_of(frame)[-3:]):
        batch = frame[frame.t.dt.normalize() == day]
        gate(
            cases.rules(), cases.broken(batch) if place == 2 else batch, frame[frame.t < day],
            store=tmp_path / "store", as_of="2026-12-01",
        )  # fmt: skip
    gate(cases.rules("gas"), batch, frame[frame.t < day], store=tmp_path / "store", as_of="2026-12-01")
    return tmp_path / "store"


@pytest.fixture
def store(judged, tmp_path):
    """The same in a store of the test's own."""
    return shutil.copytree(judged, tmp_path / "store")


def hrefs(file):
    """Where a page leads, without the texts' own links."""
    links = re.findall(r'<a [^>]*href="([^"]*)"', file.read_text())
    return [link for link in links if "://" not in link]


def test_every_feed_and_batch_has_its_page_and_links_hold(store, tmp_path):
    """A front page, two feeds, four batches; no link leads nowhere or out of the folder."""
    done = write_site(tmp_path / "site", store)
    files = sorted(path for path in (tmp_path / "site").rglob("*.html"))
    assert done.written == len(files) == 1 + 2 + 4
    for file in files:
        for link in hrefs(file):
            target = (file.parent / link).resolve()
            assert target.is_file(), (file, link)
            assert target.is_relative_to((tmp_path / "site").resolve())
    front = (tmp_path / "site" / "index.html").read_text()
    assert front.index(">heat<") < front.index(">gas<")  # what is held comes first


def test_a_second_run_writes_nothing(store, tmp_path):
    """Unchanged pages keep their time of change."""
    write_site(tmp_path / "site", store)
    before = {path: path.stat().st_mtime_ns for path in (tmp_path / "site").rglob("*") if path.is_file()}
    done = write_site(tmp_path / "site", store)
    assert (done.written, done.kept) == (0, 7)
    assert {path: path.stat().st_mtime_ns for path in before} == before


def test_only_what_changed_is_written(store, tmp_path):
    """A settlement changes the batch's page, its feed's and the front; a lost or spoilt file comes again."""
    write_site(tmp_path / "site", store)
    (held,) = (path for path in (tmp_path / "site" / "batches").iterdir() if "a batch failed" in path.read_text())
    settle(held.stem, by="Ana", because="pump test", release_as="released", store=store)
    assert write_site(tmp_path / "site", store).written == 3
    assert "pump test" in held.read_text()
    held.unlink()
    assert write_site(tmp_path / "site", store).written == 1
    (tmp_path / "site" / "pages.json").write_text("{ half")
    assert write_site(tmp_path / "site", store).written == 7


def test_a_judgement_without_sketches_has_pages_all_the_same(store, tmp_path):
    """A ledger from before sketches were kept: everything but the plots."""
    with sqlite3.connect(store / "ledger.sqlite") as ledger:
        ledger.execute("DELETE FROM sketches")
    ledger.close()
    brief = brief_of(None, store)
    assert {rule.sketch for rule in brief.failed} == {None}
    assert "hold a batch failed" in shown(brief, "html")
    assert write_site(tmp_path / "site", store).written == 7
    held = (tmp_path / "site" / "batches" / f"{brief.batch_id}.html").read_text()
    assert f"--store {store}" in held.replace('<span class="word">', "").replace("</span>", "")


def test_files_of_others_stay(store, tmp_path):
    """What the list does not name is not ours; a page of a batch that is gone goes."""
    write_site(tmp_path / "site", store)
    (tmp_path / "site" / "robots.txt").write_text("mine")
    (tmp_path / "site" / "batches" / "mine.html").write_text("mine")
    other = tmp_path / "other"
    frame = cases.readings(60)
    day = days_of(frame)[-1]
    gate(cases.rules("gas"), frame[frame.t >= day], frame[frame.t < day], store=other, as_of="2026-12-01")
    write_site(tmp_path / "site", other)
    left = sorted(path.name for path in (tmp_path / "site" / "batches").iterdir())
    assert len(left) == 2
    assert "mine.html" in left
    assert (tmp_path / "site" / "robots.txt").read_text() == "mine"


def test_trouble_leaves_the_folder_as_it_was(store, tmp_path, monkeypatch):
    """No folder around it, a file in its place, a disk that is full in the middle."""
    with pytest.raises(OutputError, match="no folder"):
        write_site(tmp_path / "a" / "b", store)
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="a file stands where a folder is needed"):
        write_site(tmp_path / "file", store)
    written = []

    def full(path, text):
        if len(written) == 3:
            raise OutputError(str(path), "the disk is full")
        written.append(path)
        write_text(path, text)

    monkeypatch.setattr("sercheck.site.write_text", full)
    with pytest.raises(OutputError, match="full"):
        write_site(tmp_path / "site", store)
    monkeypatch.undo()
    assert all(path.read_text().rstrip().endswith("</html>") for path in (tmp_path / "site").rglob("*.html"))
    assert write_site(tmp_path / "site", store).written == 7


def test_an_empty_ledger_has_a_front_page(tmp_path):
    """Nothing judged yet is said."""
    assert write_site(tmp_path / "site", tmp_path / "none").written == 1
    assert "No batch was judged yet" in (tmp_path / "site" / "index.html").read_text()
    with pytest.raises(UsageError):
        brief_of(None, tmp_path / "none")


def test_the_digest_counts_what_people_said(store):
    """All feeds since a time: held, false and true holds as settled, what keeps failing, the noisiest rules."""
    told = review_of("2026-01-01T00:00:00", store)
    counted = [(feed.feed, feed.batches, feed.held, feed.unsettled) for feed in told.feeds]
    assert counted == [("heat", 3, 1, 1), ("gas", 1, 0, 0)]
    assert [rule for rule, _, _ in told.feeds[0].failing]
    assert told.noisiest[0].feed == "heat"
    settle(told.feeds[0].batch_id, by="Ana", because="pump test", release_as="released", store=store)
    after = review_of("2026-01-01T00:00:00", store)
    assert (after.feeds[0].false_holds, after.feeds[0].unsettled) == (1, 0)
    assert max(rule.false_holds for rule in after.noisiest) == 1
    assert "4 batches of 2 feeds since Thu 1 Jan 2026, 00:00 UTC, 1 held: 1 false holds, 0 true holds" in after.sentence
    for form in ("text", "markdown", "html"):
        assert after.noisiest[0].rule in shown(after, form)
    assert json.loads(shown(after, "json"))["feeds"][0]["false_holds"] == 1
    assert review_of("2027-01-01T00:00:00", store).feeds == ()


def test_the_command_line_writes_each_of_them(store, tmp_path):
    """brief, its page, the digest and the folder; contradictions are refused."""

    def run(*more):
        return CliRunner().invoke(command, [*more, "--store", str(store)])

    assert run().output.startswith("HELD  heat")
    assert run("-o", str(tmp_path / "brief.html")).exit_code == 0
    assert (tmp_path / "brief.html").read_text().startswith("<!doctype html>")
    assert "of 2 feeds" in run("--since", "2026-01-01").output
    assert run("--site", str(tmp_path / "site")).exit_code == 0
    assert json.loads(run("--format", "json").output)["state"] == "held"
    assert run("--since", "2026-01-01", "heat-2026").exit_code == 2
    assert run("--site", str(tmp_path / "site"), "--format", "json").exit_code == 2
