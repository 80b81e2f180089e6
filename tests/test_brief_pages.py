"""Pages in a real browser: nothing is fetched, nothing overflows, everybody can read them, in both colour schemes."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import brief_cases as cases
import pytest
from browser import DESK, PHONE, browser  # noqa: F401  a fixture

from sercheck.brief.case import case_of
from sercheck.brief.digest import digest
from sercheck.brief.html import page
from sercheck.brief.surfaces import shown
from sercheck.briefing import review_of
from sercheck.site import write_site
from sercheck.store.ledger import open_ledger
from sercheck.verdict import gate

LARGEST = 500_000
"""Bytes of a page at most."""


@pytest.fixture(scope="module")
def pages(tmp_path_factory):
    """A held batch, one full of hostile text, a released one, and the folder of pages of the first feed."""
    folder = tmp_path_factory.mktemp("pages")
    frame = cases.readings(cases.DAYS + 2)
    days = sorted(frame.t.dt.normalize().unique())
    for place, day in enumerate(days[-3:]):
        batch = frame[frame.t.dt.normalize() == day]
        batch = cases.broken(batch) if place else batch
        gate(cases.rules(), batch, frame[frame.t < day], store=folder / "store", as_of="2026-12-01")
    with open_ledger(str(folder / "store")) as ledger:
        told = ledger.batches()
        (folder / "held.html").write_text(page(digest(case_of(ledger, told[0], "a store"))))
        (folder / "released.html").write_text(page(digest(case_of(ledger, told[-1]))))
    (folder / "review.html").write_text(shown(review_of("2026-01-01T00:00:00", folder / "store"), "html"))
    book = cases.rules("heat", cases.HOSTILE, cases.HOSTILE, cases.HOSTILE + "x" * 5_000)
    history, batch = cases.split(cases.readings(cases.DAYS, meters=(cases.HOSTILE, "m" * 10_000)))
    verdict = gate(book, cases.broken(batch), history, store=folder / "hostile", as_of="2026-12-01")
    with open_ledger(str(folder / "hostile")) as ledger:
        case = case_of(ledger, ledger.batch(verdict.batch_id))
        case = replace(case, batch=replace(case.batch, feed=cases.HOSTILE), notes=(cases.HOSTILE,))
        (folder / "hostile.html").write_text(page(digest(case)))
    write_site(folder / "site", folder / "store")
    return folder


FILES = ("held.html", "hostile.html", "released.html", "site/index.html", "site/feeds/heat.html", "review.html")


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("file", FILES)
def test_a_page_stands_alone_and_fits_a_telephone(browser, pages, file, scheme):  # noqa: F811
    """Nothing is fetched, the console is silent, 360 pixels are enough, the checker finds nothing."""
    path = pages / file
    assert path.stat().st_size < LARGEST
    for size in (PHONE, DESK):
        browser.show(path, size, scheme)
        browser.js("document.querySelectorAll('details').forEach(each => each.open = true)")
        assert browser.asked_for() == []
        assert browser.js("return performance.getEntriesByType('resource').map(each => each.name)") == []
        assert browser.complaints() == []
        assert browser.too_wide() <= 0
        assert browser.violations() == []


def test_the_browser_would_find_what_is_wrong(browser, tmp_path):  # noqa: F811
    """A page that fetches, complains, overflows and is pale is found to."""
    bad = '<p style="color:#bbb;width:900px">pale<img src="x.png"><script>console.error("loud")</script></p>'
    (tmp_path / "bad.html").write_text(bad)
    browser.show(tmp_path / "bad.html")
    assert browser.too_wide() > 0
    assert {each.partition(":")[0] for each in browser.violations()} >= {"color-contrast", "image-alt", "html-has-lang"}
    assert [url.rpartition("/")[2] for url in browser.asked_for()] == ["x.png"]
    assert any("loud" in said for said in browser.complaints())


def test_hostile_text_runs_nothing(browser, pages):  # noqa: F811
    """The title is what the page says, no element came of the text, and direction stays left to right."""
    browser.show(pages / "hostile.html")
    assert browser.driver.title.startswith("held: <script>")
    assert browser.js("return document.querySelectorAll('script, img, iframe').length") == 0
    assert browser.js("return getComputedStyle(document.querySelector('h1')).direction") == "ltr"


def test_the_answer_is_seen_without_scrolling(browser, pages):  # noqa: F811
    """On a telephone the decision, why, the likely cause and since when are on the first screen."""
    browser.show(pages / "held.html", PHONE)
    last = browser.js("return [...document.querySelectorAll('dl.first > div')].at(-1).getBoundingClientRect().bottom")
    assert last <= PHONE[1]
    assert browser.js("return document.querySelector('h1').innerText.split('\\n')[0]") == "Held"


def test_the_colours_follow_the_scheme(browser, pages):  # noqa: F811
    """Paper and figures change with it; on paper the ground is white whatever the screen was."""
    grounds, lines = [], []
    for scheme in ("light", "dark"):
        browser.show(pages / "held.html", scheme=scheme)
        grounds.append(browser.js("return getComputedStyle(document.body).backgroundColor"))
        line = "return getComputedStyle(document.querySelector('figure svg path[style*=\"--batch\"]')).stroke"
        lines.append(browser.js(line))
    assert len(set(grounds)) == len(set(lines)) == 2
    browser.show(pages / "held.html", scheme="dark", media="print")
    assert browser.js("return getComputedStyle(document.body).backgroundColor") == "rgb(255, 255, 255)"


def test_it_prints(browser, pages):  # noqa: F811
    """The browser makes a PDF of it; folded figures are on paper."""
    import base64

    browser.show(pages / "held.html", media="print")
    made = browser.driver.execute_cdp_cmd("Page.printToPDF", {"paperWidth": 8.27, "paperHeight": 11.69})
    assert base64.b64decode(made["data"]).startswith(b"%PDF")
    heights = browser.js("return [...document.querySelectorAll('article details')].map(each => each.offsetHeight)")
    assert heights
    assert min(heights) > 80


def test_headings_are_in_order_and_figures_are_described(browser, pages):  # noqa: F811
    """One first heading, no level skipped; every figure says what is seen."""
    browser.show(pages / "held.html")
    levels = browser.js("return [...document.querySelectorAll('h1,h2,h3,h4')].map(each => +each.tagName[1])")
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert all(after - before <= 1 for before, after in pairwise(levels))
    alts = browser.js("return [...document.querySelectorAll('svg')].map(each => each.getAttribute('aria-label'))")
    assert len(alts) >= 3
    assert all(alt and len(alt) > 30 for alt in alts)
    ids = browser.js("return [...document.querySelectorAll('[id]')].map(each => each.id)")
    assert len(ids) == len(set(ids))


def test_links_of_the_folder_lead_somewhere_and_are_relative(browser, pages):  # noqa: F811
    """From the front page to a feed, to a batch and back, over any static file server."""
    import functools
    import http.server
    import threading

    class Quiet(http.server.SimpleHTTPRequestHandler):
        def log_message(self, *_):
            pass

    handler = functools.partial(Quiet, directory=str(pages / "site"))
    with http.server.ThreadingHTTPServer(("127.0.0.1", 0), handler) as server:
        threading.Thread(target=server.serve_forever, daemon=True).start()
        browser.show(f"http://127.0.0.1:{server.server_port}/index.html", DESK)
        for step in ("h2 a", "tbody th a", "nav a:last-of-type", "nav a"):
            browser.js("document.querySelector(arguments[0]).click()", step)
            assert "Error" not in browser.driver.title
            links = browser.js("return [...document.querySelectorAll('a')].map(each => each.getAttribute('href'))")
            assert links
            assert not any(link.startswith(("http:", "/", "file:")) for link in links)
        assert browser.driver.title == "All feeds"
        server.shutdown()
